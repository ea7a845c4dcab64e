"""One cell's calculation as lines a person checks by hand."""

from __future__ import annotations

from typing import Any

Answer = dict[str, Any]


def describe(answer: Answer) -> str:
    """An answer of `Explainer.at` as text with units and sources."""
    lines = [f"{answer['title']}: cell in column {answer['column']}, row {answer['row']}"]
    for found in answer["inputs"].values():
        value = "no value" if found["value"] is None else f"{found['value']:.9g} {found['unit']}"
        where = found["method"]
        if "file" in found:
            where = "{file}, pixel column {pixel_column}, row {pixel_row}".format(**found)
        lines.append(f"  {found['key']}: {value} ({where})")
    if "masked" in answer:
        return "\n".join([*lines, f"No answer: {answer['masked']}"])
    return "\n".join([*lines, *_soil(answer), *_roots(answer), *_water(answer), *_load(answer)])


def _soil(answer: Answer) -> list[str]:
    head = "Soil: {texture}, set {parameter_set}, conductivity {conductivity}".format(**answer)
    if "soil_layers" not in answer:
        return [head, f"  {_numbers(answer['parameters'])}; {answer['parameters']['source']}"]
    lines = [head]
    for layer in answer["soil_layers"]:
        numbers = {k: v for k, v in layer.items() if k not in ("texture", "top_m")}
        lines.append(
            f"  from {layer['top_m']:g} m: {layer['texture']}, {_numbers(numbers)}; "
            f"{layer['source']}"
        )
    return lines


def _numbers(parameters: Answer) -> str:
    numbers = {k: v for k, v in parameters.items() if k != "source" and v is not None}
    return ", ".join(f"{name} {number:.6g}" for name, number in numbers.items())


def _roots(answer: Answer) -> list[str]:
    if "root_depth_m" not in answer:
        return []
    text = (
        "Root zone to {root_depth_m:g} m, suction there {root_suction_m:g} m: the rise ends there"
    )
    return [text.format(**answer)]


def _water(answer: Answer) -> list[str]:
    equation = (
        "Maximum steady evaporation E: L = integral from 0 to infinity of dh / (1 + E/K(h))"
        if "root_depth_m" not in answer
        else "Maximum steady evaporation E: L = integral from 0 to the suction at the roots of "
        "dh / (1 + E/K(h)), L the depth below the roots"
    )
    if "seasons" not in answer:
        depth = "Depth to water table L = {depth_m:.6g} m".format(**answer)
        demand = (
            "Evaporative demand {demand_mm_per_day:.6g} mm/day; evaporation is held by: "
            "{limited_by}".format(**answer)
        )
        stored = "  as stored: {max_evaporation:.7g} mm/day".format(**answer)
        return [depth, equation, *_rates(answer), stored, demand]
    lines = [equation]
    for season in answer["seasons"]:
        text = (
            "Season {name}, {days:g} days: depth {depth_m:.6g} m, TDS {tds_g_per_l:.6g} g/L, "
            "demand left {demand_mm:.6g} mm, percolation {percolation_mm:.6g} mm"
        )
        rise = "  rise {evaporation_mm:.7g} mm, the lesser of E x days and the demand"
        lines += [text.format(**season), *_rates(season), rise.format(**season)]
    stored = "Mean E by days, as stored: {max_evaporation:.7g} mm/day".format(**answer)
    return [*lines, stored]


def _rates(found: Answer) -> list[str]:
    lines = [f"  full equation: {found['max_evaporation_exact']:.7g} mm/day"]
    if found["closed_form_over_exact"] is not None:
        lines.append(
            "  closed form, the deep-water limit: {max_evaporation_closed_form:.7g} mm/day, "
            "{closed_form_over_exact:.4g} times that".format(**found)
        )
    return lines


def _load(answer: Answer) -> list[str]:
    text = (
        "Evaporation {evaporation:.7g} mm/year, the lesser times {days_per_year:g} days\n"
        "Salt load {salt_load:.7g} t/ha/year = mm/year x {tds_g_per_l:.6g} g/L / 100\n"
        if "seasons" not in answer
        else "Evaporation {evaporation:.7g} mm/year, the sum of the seasons' rises\n"
        "Salt load {salt_load:.7g} t/ha/year, the sum of rise x TDS / 100\n"
    ) + (
        "Critical depth {critical_depth:.6g} m for a target load of "
        "{target_load_t_per_ha_per_year:g} t/ha/year; depth margin {depth_margin:.6g} m\n"
        "Hazard class {hazard_class}: {hazard_class_name} ({hazard_scheme})"
    )
    return text.format(**answer).split("\n")
