"""The page that people who are not GIS specialists read: one file that needs nothing else."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from importlib import resources
from typing import Any

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


def render(content: Mapping[str, Any]) -> str:
    """The page from its content; every text is escaped by the template engine.

    Parameters
    ----------
    content : mapping
        What the template `data/report.html.j2` names.
    """
    import jinja2

    text = (resources.files("saltrise") / "data" / "report.html.j2").read_text("utf-8")
    environment = jinja2.Environment(
        autoescape=True, undefined=jinja2.StrictUndefined, trim_blocks=True, lstrip_blocks=True
    )
    environment.filters |= {"ha": _hectares, "number": _number}
    return environment.from_string(text).render(**content)


def _hectares(value: float | None) -> str:
    return "" if value is None else f"{value:,.0f}" if value >= 10 else f"{value:.2g}"


def _number(value: float | None) -> str:
    if value is None:
        return ""
    return f"{value:,.0f}" if abs(value) >= 1000 else f"{value:.3g}"


_LEFT, _TOP, _WIDE, _HIGH = 60.0, 10.0, 560.0, 260.0


def curve_chart(
    curves: Sequence[tuple[str, Floats, Floats]], demand: float, deepest_m: float
) -> dict[str, Any]:
    """Rise curves as lines of an SVG: load [t/ha/year], logarithmic, against depth [m].

    Parameters
    ----------
    curves : sequence of (name, depths, loads)
        One a soil.
    demand : float
        Load that the evaporative demand carries, drawn as a line; 0 for none.
    deepest_m : float
        Right end of the axis.
    """
    low, high = -1.0, 3.0

    def place(depth: float, rate: float) -> tuple[float, float]:
        along = (np.log10(max(rate, 1e-9)) - low) / (high - low)
        return _LEFT + depth / deepest_m * _WIDE, _TOP + (1 - min(max(along, 0.0), 1.0)) * _HIGH

    lines = []
    for name, depths, rates in curves:
        points = [
            place(float(d), float(r))
            for d, r in zip(depths, rates, strict=True)
            if 10**low <= r <= 10**high
        ]
        text = " ".join(f"{x:.1f},{y:.1f}" for x, y in points)
        lines.append({"name": name, "points": text, "end": points[-1] if points else None})
    ticks_y = [(place(0, r)[1], f"{r:g}") for r in (0.1, 1.0, 10.0, 100.0, 1000.0)]
    step = 1 if deepest_m <= 8 else 2
    ticks_x = [(place(d, 1.0)[0], f"{d:g}") for d in range(0, int(deepest_m) + 1, step)]
    return {
        "lines": lines,
        "demand": place(0, demand)[1] if demand > 0 else None,
        "ticks_x": ticks_x,
        "ticks_y": ticks_y,
        "left": _LEFT,
        "right": _LEFT + _WIDE,
        "top": _TOP,
        "bottom": _TOP + _HIGH,
    }
