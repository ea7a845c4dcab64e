"""Zone polygons in and out: odd geometries, foreign names, equal bytes."""

from __future__ import annotations

import csv
import sqlite3
from pathlib import Path

import geopandas
import pytest
from shapely.geometry import MultiPolygon, Polygon, box

import regions
import saltrise
from saltrise.errors import InputError

WEST, NORTH = regions.WEST, regions.NORTH


def square(col: float, row: float, size: float) -> Polygon:
    """A square of `size` cells whose upper left corner is `col`, `row` cells into the grid."""
    left, top = WEST + 30 * col, NORTH - 30 * row
    return box(left, top - 30 * size, left + 30 * size, top)


def test_parts_holes_and_heights_keep_their_area(tmp_path: Path) -> None:
    ring = square(2, 2, 10).difference(square(4, 4, 2))
    flat = MultiPolygon([ring, square(20, 20, 4)])
    lifted = Polygon([(x, y, 7.0) for x, y in square(30, 2, 6).exterior.coords])
    regions.write_zones(tmp_path / "zones.gpkg", {"a": flat, "b": lifted})
    result = saltrise.run(regions.small_region(tmp_path, zones={"file": "zones.gpkg"}))
    area = dict(zip(result.zones["zone_id"], result.zones["area_ha"], strict=True))
    # UTM's scale is 0.9996 on its central meridian, where this grid lies: 0.9996**-2 in area.
    assert area["a"] == pytest.approx((100 - 4 + 16) * 0.09 / 0.9996**2, rel=1e-5)
    assert area["b"] == pytest.approx(36 * 0.09 / 0.9996**2, rel=1e-5)
    assert set(result.zones.geometry.geom_type) == {"MultiPolygon"}


def test_a_zone_without_area_is_refused_in_the_survey(tmp_path: Path) -> None:
    line = Polygon([(WEST, NORTH), (WEST + 300, NORTH - 300), (WEST + 600, NORTH - 600)])
    regions.write_zones(tmp_path / "zones.gpkg", {"thin": line, "whole": square(2, 2, 5)})
    with pytest.raises(InputError, match=r"region\.toml:\d+: zones\.file: .* no area.*thin"):
        saltrise.run(regions.small_region(tmp_path, zones={"file": "zones.gpkg"}))


def test_a_field_called_fid_and_whole_numbers_work_as_ids(tmp_path: Path) -> None:
    shapes = [square(2, 2, 5), square(9, 2, 5)]
    frame = geopandas.GeoDataFrame({"fid": [7.0, 12.0]}, geometry=shapes, crs=regions.CRS)
    frame.to_file(tmp_path / "zones.geojson", driver="GeoJSON")
    tables = {"file": "zones.geojson", "id": "fid", "name": "fid"}
    result = saltrise.run(regions.small_region(tmp_path, zones=tables))
    assert list(result.zones["zone_id"]) == ["7", "12"]
    assert list(result.zones["name"]) == ["7", "12"]


HOSTILE = {
    "=1+1": "=cmd|' /C calc'!A0",
    "+a": '<script>alert("x")</script>',
    "b,c": "Зона, «Север»\nтри",
    "-d": "منطقة",
}


def test_foreign_names_stay_whole_and_no_cell_is_a_formula(tmp_path: Path) -> None:
    shapes = [square(2 + 9 * k, 2, 5) for k in range(len(HOSTILE))]
    frame = geopandas.GeoDataFrame(
        {"code": list(HOSTILE), "name": list(HOSTILE.values())}, geometry=shapes, crs=regions.CRS
    )
    frame.to_file(tmp_path / "zones.gpkg", layer="districts", driver="GPKG")
    result = saltrise.run(regions.small_region(tmp_path, zones={"file": "zones.gpkg"}))
    assert dict(zip(result.zones["zone_id"], result.zones["name"], strict=True)) == HOSTILE
    with (result.folder / "zones.csv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    assert [row["zone_id"] for row in rows] == ["'=1+1", "'+a", "b,c", "'-d"]
    assert rows[0]["name"] == "'" + HOSTILE["=1+1"]
    assert rows[2]["name"] == HOSTILE["b,c"]


def test_the_package_has_the_runs_date_and_one_layer(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("SOURCE_DATE_EPOCH", "1767225600")
    regions.write_zones(tmp_path / "zones.gpkg", {"a": square(2, 2, 5)})
    result = saltrise.run(regions.small_region(tmp_path, zones={"file": "zones.gpkg"}))
    with sqlite3.connect(result.folder / "zones.gpkg") as database:
        found = database.execute("select table_name, last_change from gpkg_contents").fetchall()
    database.close()
    assert found == [("zones", "2026-01-01T00:00:00.000Z")]
