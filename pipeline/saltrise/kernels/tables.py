"""Look-ups in tables of cubics whose nodes lie at 2^k (1 + j/m).

Powers and logarithms are sums and products alone, within 4e-16 relative: the exp, log and power of
mathematical libraries differ in the last bits between processors, so a cluster of unlike machines
would not agree on a map.

A table is handed over as a tuple: `cubics` (rows x intervals, 4; constant first), intervals of a
row, octave of its low end, bits that number the intervals of an octave, least and greatest number
it holds. An axis, between whose nodes rows are blended, as another: low end, nodes per unit, count.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from saltrise.kernels.compiled import compiled

Floats = NDArray[np.float64]
Rows = NDArray[Any]
"""int32 or int64"""
TableOf = tuple[Floats, int, int, int, float, float]
AxisOf = tuple[float, float, int]
Placed = tuple[int, tuple[float, float, float, float]]
"""First row and weights of a cell."""

CellsOf = tuple[Floats, Floats, Floats, Floats, Floats, Floats]
"""Air-entry suction [m], suction where the tail begins [m], K/Ks there, water content there over
that at saturation, 1/p of the middle part, exponent n of the tail."""
SoilOf = tuple[float, float, float, float, float, float, Placed, Placed]
FractionTables = tuple[TableOf, TableOf, TableOf, bool]
"""Of unlimited tails, limited tails and middle parts; whether soils have a middle part."""
Reached = tuple[float, float]

MOST_STEPS, _LAST_STEP = 60, 1e-4
_MANTISSA = 52
_ONE = np.int64(1023 << _MANTISSA)
_FRACTION = np.int64((1 << _MANTISSA) - 1)
_EXP = tuple(math.log(2.0) ** k / math.factorial(k) for k in range(14))
_LOG = tuple(2.0 / math.log(2.0) / (2 * k + 1) for k in range(12))
_ROOT = math.sqrt(2.0)


@compiled
def _interval(table: TableOf, value: float) -> tuple[int, float]:
    """Interval of a number in any row, and its position there from 0 to 1."""
    _, _, octave, bits, low, high = table
    # A NaN counts as the low end.
    held = min(value, high) if value > low else low
    pattern = np.float64(held).view(np.int64)
    shift = np.int64(_MANTISSA - bits)
    index = (pattern >> shift) - (np.int64(octave + 1023) << np.int64(bits))
    rest = (pattern & ((np.int64(1) << shift) - np.int64(1))) << np.int64(bits)
    inside: float = np.int64(rest | _ONE).view(np.float64) - 1.0
    return int(index), inside


@compiled
def _cubic(cubics: Floats, index: int, inside: float) -> float:
    steep: float = cubics[index, 3] * inside + cubics[index, 2]
    value: float = (steep * inside + cubics[index, 1]) * inside + cubics[index, 0]
    return value


@compiled
def look_up(table: TableOf, row: Rows, value: Floats, least: float, found: Floats) -> None:
    """Values of rows at numbers, those below `least` held there; NaN where the row is negative or
    the number is NaN."""
    cubics, intervals = table[0], table[1]
    for i in range(value.size):
        if row[i] < 0 or math.isnan(value[i]):
            found[i] = np.nan
            continue
        index, inside = _interval(table, max(value[i], least))
        found[i] = _cubic(cubics, row[i] * intervals + index, inside)


@compiled
def held_look_up(
    table: TableOf,
    profile: Rows,
    row: Rows,
    value: Floats,
    limits: Floats,
    ends: tuple[float, float],
    found: Floats,
) -> None:
    """As `look_up`, inside `ends`: the first where a number reaches `limits[profile, 0]`, the
    second where it does not exceed `limits[profile, 1]`."""
    cubics, intervals = table[0], table[1]
    first, last = ends
    for i in range(value.size):
        here = value[i]
        if profile[i] < 0 or math.isnan(here):
            found[i] = np.nan
        elif here >= limits[profile[i], 0]:
            found[i] = first
        elif here <= limits[profile[i], 1]:
            found[i] = last
        else:
            index, inside = _interval(table, here)
            found[i] = min(max(_cubic(cubics, row[i] * intervals + index, inside), first), last)


@compiled
def _blended(table: TableOf, placed: Placed, value: float) -> float:
    cubics, intervals = table[0], table[1]
    first, weights = placed
    index, inside = _interval(table, value)
    index += first * intervals
    total = _cubic(cubics, index, inside) * weights[0]
    total += _cubic(cubics, index + intervals, inside) * weights[1]
    total += _cubic(cubics, index + 2 * intervals, inside) * weights[2]
    return total + _cubic(cubics, index + 3 * intervals, inside) * weights[3]


@compiled
def _placed(axis: AxisOf, value: float) -> Placed:
    """First of the four nodes about a value, and their weights (Lagrange)."""
    low, per_unit, count = axis
    at = min(max((value - low) * per_unit, 0.0), count - 1.0)
    first = min(max(int(at) - 1, 0), count - 4)
    t = at - first
    a, b, c = t - 1.0, t - 2.0, t - 3.0
    outer, inner = a * b, t * c
    sixth = 1.0 / 6.0
    return first, (outer * c * -sixth, b * inner * 0.5, a * inner * -0.5, outer * t * sixth)


@compiled
def blend(table: TableOf, axis: AxisOf, along: Floats, value: Floats, found: Floats) -> None:
    """Interpolate between what rows hold at numbers, by their position on an axis."""
    for i in range(value.size):
        found[i] = _blended(table, _placed(axis, along[i]), value[i])


@compiled
def _exp2(x: float) -> float:
    whole = np.rint(x)
    part = x - whole
    value: float = part * _EXP[13] + _EXP[12]
    for k in range(11, -1, -1):
        value = value * part + _EXP[k]
    # A whole power of two is an exponent without a mantissa.
    power: float = np.int64((np.int64(whole) + 1023) << _MANTISSA).view(np.float64)
    return value * power


@compiled
def _log2(x: float) -> float:
    pattern = np.float64(x).view(np.int64)
    mantissa = np.int64((pattern & _FRACTION) | _ONE).view(np.float64)
    exponent = np.float64((pattern >> _MANTISSA) - 1023)
    if mantissa >= _ROOT:
        mantissa, exponent = 0.5 * mantissa, exponent + 1.0
    t = (mantissa - 1.0) / (mantissa + 1.0)
    square = t * t
    value = _LOG[11]
    for k in range(10, -1, -1):
        value = value * square + _LOG[k]
    return value * t + exponent


@compiled
def exp2(x: Floats, found: Floats) -> None:
    """2 to the power x, for |x| < 1000."""
    for i in range(x.size):
        found[i] = _exp2(x[i])


@compiled
def log2(x: Floats, found: Floats) -> None:
    """Logarithm to base 2, for x > 0 that is no subnormal number."""
    for i in range(x.size):
        found[i] = _log2(x[i])


@compiled
def _reach(soil: SoilOf, suction: float, tables: FractionTables, rate: float) -> Reached:
    """Depth that lifts E/Ks = `rate`, and its slope against log rate."""
    air_entry, tail, tail_share, theta_share, inverse, n, on_n, on_inverse = soil
    depth_table, limited_table, middle_table, has_middle = tables
    inside = 1.0 / (1.0 + rate)
    depth = air_entry * inside
    slope = -depth * (rate * inside)
    start, tail_rate = air_entry, rate
    if has_middle:
        start, tail_rate = tail, rate / tail_share
        span = (tail - air_entry) / (1.0 - theta_share)
        whole = _blended(middle_table, on_inverse, rate)
        rest = _blended(middle_table, on_inverse, tail_rate) * theta_share
        depth += span * (whole - rest)
        # d P / d log q = (P - 1/(1+q)) / p, by parts.
        ends = inside - theta_share / (1.0 + tail_rate)
        slope += span * inverse * (whole - rest - ends)
    inside = 1.0 / (1.0 + tail_rate)
    if suction == np.inf:
        scaled = _blended(depth_table, on_n, tail_rate)
        return depth + start * (scaled - inside), slope - start * scaled / n
    dried = tail_rate * _exp2(_log2(suction / start) * n)
    far = _blended(limited_table, on_n, dried) * suction
    near = _blended(limited_table, on_n, tail_rate) * start
    # d V / d log q = (1/(1+q) - V) / n, by parts.
    ends = suction / (1.0 + dried) - start * inside
    return depth + (far - near), slope + (ends - (far - near)) / n


@compiled
def _soil(cells: CellsOf, axes: tuple[AxisOf, AxisOf], i: int) -> SoilOf:
    """One cell's soil, placed on the axes of n and of 1/p."""
    air_entry, tail, tail_share, theta_share, inverse, n = cells
    return (
        air_entry[i],
        tail[i],
        tail_share[i],
        theta_share[i],
        inverse[i],
        n[i],
        _placed(axes[0], n[i]),
        _placed(axes[1], inverse[i]),
    )


@compiled
def reach(
    cells: CellsOf,
    suction: float,
    tables: FractionTables,
    axes: tuple[AxisOf, AxisOf],
    rate: Floats,
    depth: Floats,
) -> None:
    """Depth that lifts E/Ks = `rate`."""
    for i in range(rate.size):
        depth[i] = _reach(_soil(cells, axes, i), suction, tables, rate[i])[0]


@compiled
def solve(
    cells: CellsOf,
    suction: float,
    tables: FractionTables,
    axes: tuple[AxisOf, AxisOf],
    rise: Floats,
    least_log: float,
    rate: Floats,
) -> int:
    """E/Ks of a rise by Newton's method on logarithms, from a guess in `rate`; most steps taken.

    0 where the rise reaches up to the suction at its top; NaN where it is.
    """
    most = 0
    for i in range(rise.size):
        target = rise[i]
        if math.isnan(target):
            rate[i] = np.nan
            continue
        if target >= suction:
            rate[i] = 0.0
            continue
        soil = _soil(cells, axes, i)
        log = max(_log2(max(rate[i], 2.0**least_log)), least_log)
        for k in range(MOST_STEPS):
            depth, slope = _reach(soil, suction, tables, _exp2(log))
            step = min(max(_log2(depth / target) * depth / slope, -12.0), 12.0)
            log = min(max(log - step, least_log), 60.0)
            most = max(most, k + 1)
            # The error left is of the order of the step squared.
            if abs(step) < _LAST_STEP or log == least_log:
                break
        rate[i] = _exp2(log)
    return most
