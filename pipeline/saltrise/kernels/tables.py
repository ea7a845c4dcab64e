"""Look-ups in tables of cubics whose nodes lie at 2^k (1 + j/m).

Powers and logarithms are sums and products alone, within 4e-16 relative: the exp, log and power of
mathematical libraries differ in the last bits between processors, so a cluster of unlike machines
would not agree on a map.

A table is handed over as a tuple: `cubics` (rows x intervals, 4; constant first), intervals of a
row, octave of its low end, bits that number the intervals of an octave, least and greatest number
it holds. Where rows are blended, `cubics` is (intervals x rows, 4), with the number of rows for
that of intervals; the axis whose nodes they are is another tuple: low end, nodes per unit, count.
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
SoilOf = tuple[float, float, float, float, float, float, float, Placed, Placed]
"""Of one cell, with the third and the last inverted and the span of the middle part [m]."""
FractionTables = tuple[TableOf, TableOf, TableOf, bool]
"""Of unlimited tails, limited tails and middle parts; whether soils have a middle part."""
Reached = tuple[float, float, float]

MOST_STEPS, _LAST_STEP = 60, 5e-3
_LN2 = math.log(2.0)
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
    cubics, rows = table[0], table[1]
    first, weights = placed
    index, inside = _interval(table, value)
    # Rows side by side: four far apart would be four waits for memory.
    index = index * rows + first
    total = _cubic(cubics, index, inside) * weights[0]
    total += _cubic(cubics, index + 1, inside) * weights[1]
    total += _cubic(cubics, index + 2, inside) * weights[2]
    return total + _cubic(cubics, index + 3, inside) * weights[3]


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
def exp2(x: Floats, factor: float, found: Floats) -> None:
    """2 to the power x times a factor, for magnitudes of that below 1000."""
    for i in range(x.size):
        found[i] = _exp2(x[i] * factor)


@compiled
def log2(x: Floats, factor: float, found: Floats) -> None:
    """Logarithm to base 2 times a factor, for x > 0 that is no subnormal number."""
    for i in range(x.size):
        found[i] = _log2(x[i]) * factor


@compiled
def _reach(soil: SoilOf, suction: float, tables: FractionTables, rate: float) -> Reached:
    """Depth that lifts E/Ks = `rate`, and its first and second slope against log rate."""
    air_entry, tail, per_share, theta_share, span, inverse, per_n, on_n, on_inverse = soil
    depth_table, limited_table, middle_table, has_middle = tables
    # d q/(1+q) / d log q = q/(1+q)^2, and that of 1/(1+q) is the same with its sign turned.
    inside = 1.0 / (1.0 + rate)
    bend = rate * inside * inside
    depth = air_entry * inside
    slope, second = -air_entry * bend, air_entry * bend * (rate - 1.0) * inside
    start, tail_rate, tail_inside, tail_bend = air_entry, rate, inside, bend
    if has_middle:
        start, tail_rate = tail, rate * per_share
        tail_inside = 1.0 / (1.0 + tail_rate)
        tail_bend = tail_rate * tail_inside * tail_inside
        whole = _blended(middle_table, on_inverse, rate)
        rest = _blended(middle_table, on_inverse, tail_rate) * theta_share
        # d P / d log q = (P - 1/(1+q)) / p, by parts.
        tilt = inverse * (whole - rest - (inside - theta_share * tail_inside))
        depth += span * (whole - rest)
        slope += span * tilt
        second += span * inverse * (tilt + bend - theta_share * tail_bend)
    if suction == np.inf:
        scaled = _blended(depth_table, on_n, tail_rate)
        depth += start * (scaled - tail_inside)
        tilt = start * scaled * per_n
        return depth, slope - tilt, second + (tilt + start * tail_bend) * per_n
    dried = tail_rate * _exp2(_log2(suction / start) / per_n)
    far = _blended(limited_table, on_n, dried) * suction
    near = _blended(limited_table, on_n, tail_rate) * start
    # d V / d log q = (1/(1+q) - V) / n, by parts.
    dry = 1.0 / (1.0 + dried)
    tilt = (suction * dry - start * tail_inside - (far - near)) * per_n
    curl = -(suction * dried * dry * dry - start * tail_bend + tilt) * per_n
    return depth + (far - near), slope + tilt, second + curl


@compiled
def _soil(cells: CellsOf, axes: tuple[AxisOf, AxisOf], i: int) -> SoilOf:
    """One cell's soil, placed on the axes of n and of 1/p."""
    air_entry, tail, tail_share, theta_share, inverse, n = cells
    return (
        air_entry[i],
        tail[i],
        1.0 / tail_share[i],
        theta_share[i],
        (tail[i] - air_entry[i]) / (1.0 - theta_share[i]),
        inverse[i],
        1.0 / n[i],
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
def _log_ratio(a: float, b: float) -> float:
    """log(a/b); near 1 by the first terms of its series, which is nought where a is b."""
    z = (a - b) / (a + b)
    if abs(z) > 0.2:
        return _log2(a / b) * _LN2
    square = z * z
    return 2.0 * z * (1.0 + square * (1.0 / 3.0 + square * (0.2 + square * (1.0 / 7.0))))


@compiled
def _exp(x: float) -> float:
    """e to the power x; near 0 by a quotient that is 1 at 0."""
    if abs(x) > 0.2:
        return _exp2(x / _LN2)
    square = x * x / 12.0
    return (1.0 + 0.5 * x + square) / (1.0 - 0.5 * x + square)


@compiled
def _by_exponential(soil: SoilOf, target: float) -> float:
    """E/Ks of a rise, roughly, if conductivity fell exponentially through the middle part."""
    air_entry, tail, per_share = soil[0], soil[1], soil[2]
    fall = _log2(per_share) * _LN2 / (tail - air_entry)
    deep = fall * (target - air_entry)
    if deep > 0.3:
        return 1.0 / (_exp2(min(deep, 100.0) / _LN2) - 1.0)
    return (1.0 + fall * air_entry) / (fall * target)


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
    """E/Ks of a rise by Halley's method on logarithms, from a guess in `rate`; steps taken.

    0 where the rise reaches up to the suction at its top; NaN where it is.
    """
    least, greatest = 2.0**least_log, 2.0**60
    moving, count = np.empty(rise.size, dtype=np.int64), 0
    for i in range(rise.size):
        if math.isnan(rise[i]) or rise[i] >= suction:
            rate[i] = rise[i] if math.isnan(rise[i]) else 0.0
            continue
        rate[i] = max(rate[i], least)
        if tables[3]:
            rate[i] = max(rate[i], _by_exponential(_soil(cells, axes, i), rise[i]))
        moving[count] = i
        count += 1
    # One step of all cells after another: the processor works on many cells at once.
    for step in range(MOST_STEPS):
        if count == 0:
            return step
        left, count = count, 0
        for k in range(left):
            i = moving[k]
            depth, slope, second = _reach(_soil(cells, axes, i), suction, tables, rate[i])
            # Of log depth against log rate, and how far it is from its target.
            per_depth = 1.0 / depth
            tilt = slope * per_depth
            bend = second * per_depth - tilt * tilt
            away = _log_ratio(depth, rise[i]) / tilt
            away /= min(max(1.0 - 0.5 * away * bend / tilt, 0.5), 2.0)
            here = rate[i] * _exp(-min(max(away, -8.0), 8.0))
            rate[i] = min(max(here, least), greatest)
            # The error left is of the order of the step cubed.
            moving[count] = i
            count += abs(away) >= _LAST_STEP and rate[i] > least
    return MOST_STEPS
