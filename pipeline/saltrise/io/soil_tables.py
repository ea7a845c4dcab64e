"""Soil parameter sets from CSV: those that ship with the package and a user's own, read alike."""

from __future__ import annotations

import csv
import math
from collections.abc import Mapping
from difflib import get_close_matches
from importlib import resources
from pathlib import Path
from types import MappingProxyType

from saltrise.errors import InputError
from saltrise.io.text import read_input
from saltrise.physics.profile import (
    Campbell,
    GardnerExponential,
    GardnerPower,
    Profile,
    VanGenuchten,
)
from saltrise.physics.soils import CAMPBELL, LAWS, TEXTURES, SoilRow, SoilSet

_KS = ("ks_cm_per_day", (1e-6, 1e6))

# Far wider than any soil: beyond these a number is in another unit or column.
_NUMBERS: Mapping[str, Mapping[str, tuple[float, float]]] = MappingProxyType(
    {
        "campbell": dict([("air_entry_cm", (0.01, 10_000.0)), ("b", (0.5, 50.0)), _KS]),
        "brooks-corey": dict([("air_entry_cm", (0.01, 10_000.0)), ("b", (0.5, 50.0)), _KS]),
        "van-genuchten": dict([("alpha_per_cm", (1e-4, 10.0)), ("n", (1.05, 10.0)), _KS]),
        "gardner-power": {"a": (1e-12, 1e15), "b": (0.0, 1e15), "n": (1.05, 15.0)},
        "gardner-exponential": dict([_KS, ("alpha_per_cm", (1e-4, 10.0))]),
    }
)
"""Columns of numbers of each conductivity law, with the least and greatest value."""


_RETENTION: Mapping[str, tuple[float, float]] = MappingProxyType(
    {"theta_s": (0.05, 0.95), "theta_r": (0.0, 0.5)}
)
"""Optional columns of laws that know a retention curve: water contents [-]."""


def optional_columns(law: str) -> tuple[str, ...]:
    """Columns that a CSV may have beside those of `columns`."""
    return tuple(_RETENTION) if law in ("campbell", "brooks-corey", "van-genuchten") else ()


def columns(law: str) -> tuple[str, ...]:
    """Columns of a CSV for a conductivity law."""
    return ("texture", *_NUMBERS[law], "source")


def shipped_sets() -> tuple[str, ...]:
    """Names of the parameter sets inside the package, sorted."""
    folder = resources.files("saltrise") / "data" / "soils"
    return tuple(
        sorted(f.name.removesuffix(".csv") for f in folder.iterdir() if f.name.endswith(".csv"))
    )


def load_soil_set(name_or_path: str, base: Path, law: str | None = None) -> SoilSet:
    """Load a parameter set by its shipped name or from a CSV file.

    Parameters
    ----------
    name_or_path : str
        A name of `shipped_sets()`, or a path (relative to `base`) ending in `.csv`.
    base : Path
        Folder of the config.
    law : str, optional
        Conductivity law: Campbell's for a CSV unless given; a shipped set knows its own.

    Raises
    ------
    InputError
        No such set or file, a law that is not the shipped set's, or every fault of its rows at
        once as `file:row: column: ...`.
    """
    names = shipped_sets()
    if name_or_path in names:
        file = resources.files("saltrise") / "data" / "soils" / f"{name_or_path}.csv"
        shipped = parse_soil_set(file.read_bytes(), name_or_path, f"{name_or_path}.csv", None)
        if law is not None and LAWS[law] is not LAWS[shipped.conductivity]:
            raise InputError(
                f"the shipped set {name_or_path!r} is for conductivity "
                f"{shipped.conductivity!r}, not {law!r}; leave soil.conductivity out"
            )
        return shipped
    if not name_or_path.lower().endswith(".csv"):
        close = get_close_matches(name_or_path, names, n=1)
        hint = f"; did you mean {close[0]!r}?" if close else ""
        raise InputError(
            f"no parameter set {name_or_path!r}; shipped: {', '.join(names)}, or give the path of "
            f"a .csv file of your own{hint}"
        )
    path = base / name_or_path
    return parse_soil_set(read_input(path), path.stem, str(path), law or CAMPBELL)


def parse_soil_set(data: bytes, name: str, source: str, law: str | None) -> SoilSet:
    """A parameter set from the bytes of a CSV.

    Lines that start with `#` are comments; `# title:` in one names the set, and where `law` is
    None `# conductivity:` its law.

    Raises
    ------
    InputError
        Every fault, each naming file, row (line of the file), column and value.
    """
    try:
        lines = data.decode("utf-8-sig").splitlines()
    except UnicodeDecodeError as error:
        raise InputError(
            f"{source}: is not UTF-8 text ({error.reason}); save it as such"
        ) from error
    title = _said(lines, "title") or name
    law = law or _said(lines, "conductivity") or CAMPBELL
    numbered = [(n, line) for n, line in enumerate(lines, 1) if line.strip() and line[0] != "#"]
    if not numbered:
        raise InputError(f"{source}: is empty; needs the columns {', '.join(columns(law))}")
    records = [(n, next(csv.reader([line], skipinitialspace=True))) for n, line in numbered]
    header = [column.strip() for column in records[0][1]]
    faults = _header_faults(header, law)
    if faults:
        raise InputError(*(f"{source}:{records[0][0]}: {fault}" for fault in faults))
    rows: dict[str, SoilRow] = {}
    for number, cells in records[1:]:
        found = _row_faults(header, cells, rows, law)
        faults += [f"{source}:{number}: {fault}" for fault in found]
        if not found:
            row = _row(dict(zip(header, cells, strict=True)), law)
            rows[row.texture] = row
    if len(records) == 1:
        faults.append(f"{source}: has no rows, needs one for each texture class in use")
    if faults:
        raise InputError(*faults)
    return SoilSet(name, title, law, rows)


def _said(lines: list[str], word: str) -> str:
    head = f"# {word}:"
    return next((line[len(head) :].strip() for line in lines if line.startswith(head)), "")


def _header_faults(header: list[str], law: str) -> list[str]:
    if len(header) == 1 and any(mark in header[0] for mark in ";\t"):
        return ["columns must be separated by commas, not semicolons or tabs"]
    faults = []
    wanted = columns(law)
    allowed = (*wanted, *optional_columns(law))
    for column in header:
        if column not in allowed:
            close = get_close_matches(column, allowed, n=1)
            hint = f"; did you mean {close[0]!r}?" if close else ""
            faults.append(
                f"unknown column {column!r}; allowed for conductivity {law!r}: "
                f"{', '.join(allowed)}{hint}"
            )
        elif header.count(column) > 1:
            faults.append(f"column {column!r} stands there more than once")
    missing = [column for column in wanted if column not in header]
    if missing:
        faults.append(
            f"missing column {', '.join(missing)}; conductivity {law!r} needs {', '.join(wanted)}"
        )
    return faults


def _row_faults(
    header: list[str], cells: list[str], rows: dict[str, SoilRow], law: str
) -> list[str]:
    if len(cells) != len(header):
        return [f"has {len(cells)} cells, the header has {len(header)}"]
    values = {column: cell.strip() for column, cell in zip(header, cells, strict=True)}
    faults = []
    texture = values["texture"]
    if texture not in TEXTURES:
        close = get_close_matches(texture, TEXTURES, n=1)
        hint = f"; did you mean {close[0]!r}?" if close else ""
        faults.append(f"texture: is {texture!r}, allowed: {', '.join(TEXTURES)}{hint}")
    elif texture in rows:
        faults.append(f"texture: {texture!r} has a row already")
    retention = {name: _RETENTION[name] for name in optional_columns(law) if name in header}
    for column, (low, high) in (dict(_NUMBERS[law]) | retention).items():
        fault = _number_fault(values[column], low, high)
        if fault:
            faults.append(f"{column}: {fault}")
    if not faults and retention.keys() == _RETENTION.keys():
        saturated, residual = (float(values[name]) for name in _RETENTION)
        if residual >= saturated:
            faults.append(f"theta_r: is {residual:g}, must be below theta_s {saturated:g}")
    if not values["source"]:
        faults.append("source: is empty, every row needs one")
    return faults


def _number_fault(text: str, low: float, high: float) -> str:
    try:
        value = float(text)
    except ValueError:
        return f"is {text!r}, must be a number with a decimal point"
    if not math.isfinite(value) or not low <= value <= high:
        return f"is {text}, must be from {low:g} to {high:g}; check unit and column"
    return ""


def _row(values: dict[str, str], law: str) -> SoilRow:
    names = (*_NUMBERS[law], *(name for name in optional_columns(law) if name in values))
    number = {column: float(values[column]) for column in names}
    return SoilRow(values["texture"].strip(), _profile(law, number), values["source"].strip())


def _profile(law: str, number: dict[str, float]) -> Profile:
    """A row's numbers [cm, cm/day] as a profile [m, mm/day]."""
    water = {name: number[name] for name in _RETENTION if name in number}
    if "theta_r" in water and "theta_s" not in water:
        water = {}
    if law == "van-genuchten":
        ks = number["ks_cm_per_day"] * 10.0
        return VanGenuchten(number["alpha_per_cm"] * 100.0, number["n"], ks, **water)
    if law == "gardner-exponential":
        return GardnerExponential(number["ks_cm_per_day"] * 10.0, number["alpha_per_cm"] * 100.0)
    if law == "gardner-power":
        scale = 100.0 ** -number["n"]
        return GardnerPower(10.0 * number["a"] * scale, number["b"] * scale, number["n"])
    ks = number["ks_cm_per_day"] * 10.0
    return Campbell(number["air_entry_cm"] / 100.0, number["b"], ks, **water)
