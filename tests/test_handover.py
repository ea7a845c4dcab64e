"""What a GIS and a catalogue find in the folder, read by other libraries."""

from __future__ import annotations

import csv
import hashlib
import json
import shutil
import sqlite3
import subprocess
import xml.etree.ElementTree as ElementTree
from pathlib import Path

import numpy as np
import pystac
import pystac.validation
import pytest
import rasterio
from shapely.geometry import box, shape

import regions
import saltrise
from saltrise.io.scheme_files import load_scheme
from saltrise.layers import layer_of
from saltrise.report.styles import attribute_table, sld

SLD = "{http://www.opengis.net/sld}"
NASTY = '<script>alert("1")</script> & "q" =cmd /x/../y Солёность مالح'


def make(folder: Path, **tables) -> saltrise.Result:
    folder.mkdir(exist_ok=True)
    west, north = regions.WEST, regions.NORTH
    shapes = {
        "a": box(west, north - 900, west + 700, north),
        "b": box(west, north - 300, west + 900, north),
    }
    regions.write_zones(folder / "zones.gpkg", shapes)
    output = {"folder": str(folder / "out")} | tables.pop("output", {})
    return saltrise.run(
        regions.small_region(folder, zones={"file": "zones.gpkg"}, output=output, **tables)
    )


@pytest.fixture(scope="module")
def result(tmp_path_factory: pytest.TempPathFactory) -> saltrise.Result:
    seasons = [{"name": "dry / one", "days": 200}, {"name": "wet", "days": 165, "rain": 300}]
    folder = tmp_path_factory.mktemp("handover")
    return make(folder, season=seasons, output={"season_layers": True})


def test_every_layer_has_a_style(result: saltrise.Result) -> None:
    for name in result.record["layers"]:
        root = ElementTree.parse(result.folder / "styles" / f"{name}.sld").getroot()
        assert root.attrib["version"] == "1.0.0"
        colour_map = root.find(f".//{SLD}ColorMap")
        entries = colour_map.findall(f"{SLD}ColorMapEntry")
        if name == "hazard_class":
            assert colour_map.attrib["type"] == "values"
            assert [float(e.attrib["quantity"]) for e in entries] == [1, 2, 3, 4, 5, 6]
            assert entries[1].attrib["label"] == "low (1 to 5 t/ha/year)"
            colours = result.record["hazard_scheme"]["colours"]
            assert [e.attrib["color"] for e in entries] == list(colours)
            assert "no published standard" in root.find(f".//{SLD}Abstract").text
        else:
            quantities = [float(e.attrib["quantity"]) for e in entries]
            assert quantities == sorted(quantities)
            assert len(entries) == 5


def test_gdal_reads_the_attribute_table(result: saltrise.Result) -> None:
    # rasterio has no attribute tables; the file is read here as GDAL's documentation describes it.
    path = result.folder / "layers" / "hazard_class.tif.aux.xml"
    table = ElementTree.parse(path).getroot().find(".//GDALRasterAttributeTable")
    names = [field.find("Name").text for field in table.findall("FieldDefn")]
    assert names == ["value", "class", "lower", "upper", "unit", "red", "green", "blue", "area_ha"]
    rows = [[cell.text or "" for cell in row.findall("F")] for row in table.findall("Row")]
    assert [int(row[0]) for row in rows] == [1, 2, 3, 4, 5, 6]
    assert [row[1] for row in rows] == list(result.record["hazard_scheme"]["names"])
    region = result.record["region"]
    keys = ["very_low_ha", "low_ha", "moderate_ha", "high_ha", "very_high_ha", "at_surface_ha"]
    np.testing.assert_allclose([float(row[8]) for row in rows], [region[k] for k in keys])
    with rasterio.open(result.folder / "layers" / "hazard_class.tif") as dataset:
        assert "aux.xml" in " ".join(dataset.files)


@pytest.mark.skipif(shutil.which("gdalinfo") is None, reason="needs GDAL's command line tools")
def test_gdals_own_tool_reads_the_attribute_table(result: saltrise.Result) -> None:
    path = result.folder / "layers" / "hazard_class.tif"
    found = subprocess.run(["gdalinfo", path], capture_output=True, text=True, check=True).stdout
    table = found[found.index("<GDALRasterAttributeTable") : found.index("</GDALRasterAttribute")]
    for name in result.record["hazard_scheme"]["names"]:
        assert f"<F>{name}</F>" in table


def test_the_item_is_valid_stac(result: saltrise.Result) -> None:
    path = result.folder / "item.json"
    item = pystac.Item.from_file(str(path))
    content = json.loads(path.read_text("utf-8"))
    assert content["stac_version"] == "1.1.0"
    # The core schema comes with pystac; extension schemas would need a network.
    plain = content | {"stac_extensions": []}
    pystac.validation.validate_dict(plain)
    for name in result.record["layers"]:
        key = next(k for k, a in content["assets"].items() if a["href"] == f"./layers/{name}.tif")
        asset = content["assets"][key]
        data = (result.folder / asset["href"]).read_bytes()
        assert asset["file:checksum"] == "1220" + hashlib.sha256(data).hexdigest()
        assert asset["file:size"] == len(data)
        assert asset["bands"][0]["unit"] == layer_of(name).unit
    classes = content["assets"]["hazard_class"]["bands"][0]["classification:classes"]
    assert [c["value"] for c in classes] == [1, 2, 3, 4, 5, 6, 0]
    with rasterio.open(result.folder / "layers/salt_load.tif") as dataset:
        assert content["properties"]["proj:shape"] == [dataset.height, dataset.width]
        assert content["properties"]["proj:transform"][:6] == list(dataset.transform)[:6]
        bounds = rasterio.warp.transform_bounds(dataset.crs, "EPSG:4326", *dataset.bounds)
    np.testing.assert_allclose(content["bbox"], bounds, atol=1e-6)
    assert shape(content["geometry"]).is_valid
    assert item.properties["proj:code"] == regions.CRS
    for asset in content["assets"].values():
        assert asset["href"].startswith("./")
        assert (result.folder / asset["href"]).is_file()


def test_columns_are_described(result: saltrise.Result) -> None:
    with (result.folder / "zones_columns.csv").open(encoding="utf-8") as file:
        rows = {row["column"]: row for row in csv.DictReader(file)}
    assert list(rows) == [c for c in result.zones.columns if c != "geometry"]
    assert all(row["meaning"] for row in rows.values())
    with sqlite3.connect(result.folder / "zones.gpkg") as database:
        found = dict(database.execute("SELECT column_name, description FROM gpkg_data_columns"))
    database.close()
    assert found["salt_load_t_per_year"] == "gross salt rise [t year-1]"
    assert set(found) == set(rows)


def test_hostile_titles_stay_text(tmp_path: Path) -> None:
    result = _titled(tmp_path)
    text = (result.folder / "styles" / "salt_load.sld").read_text("utf-8")
    assert "<script>" not in text
    title = ElementTree.fromstring(text).find(f".//{SLD}UserStyle/{SLD}Title").text
    assert title.startswith(NASTY)
    content = json.loads((result.folder / "item.json").read_text("utf-8"))
    assert content["properties"]["title"] == NASTY
    assert "/" not in content["id"]
    pystac.validation.validate_dict(content | {"stac_extensions": []})


def _titled(folder: Path) -> saltrise.Result:
    config = regions.small_region(folder, output={"folder": str(folder / "out")})
    text = config.read_text("utf-8").replace('title = "Test"', f"title = {json.dumps(NASTY)}")
    config.write_text(text, encoding="utf-8")
    return saltrise.run(config)


def test_styles_of_a_margin_scheme() -> None:
    scheme = load_scheme("depth_margin", Path())
    text = sld(layer_of("hazard_class"), scheme, "x")
    assert "very high (under -0.5 m)" in text
    table = ElementTree.fromstring(attribute_table(scheme, [1.0] * 6))
    rows = [[c.text for c in row.findall("F")] for row in table.iter("Row")]
    assert rows[0][2:4] == ["1.0", None]
    assert rows[4][2:4] == [None, "-0.5"]


def test_areas_crossed_by_depth_and_salinity(result: saltrise.Result) -> None:
    with (result.folder / "depth_by_salinity.csv").open(encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    assert len(rows) == 3 * 16
    zones = result.zones.set_index("zone_id")
    for zone in ("a", "b"):
        mine = [r for r in rows if r["zone_id"] == zone]
        total = sum(float(r["area_ha"]) for r in mine)
        assert total == pytest.approx(zones.loc[zone, "assessed_ha"], rel=1e-12)
        shallow = sum(float(r["area_ha"]) for r in mine if r["depth_from_m"] == "0.0")
        assert shallow == pytest.approx(zones.loc[zone, "depth_under_1_ha"], rel=1e-12)


def test_a_page_of_three_thousand_zones_stays_small(tmp_path: Path) -> None:
    west, north = regions.WEST, regions.NORTH
    shapes = {
        f"z{k:04d}": box(
            *((west + 25 * (k % 60)), north - 22 * (k // 60 + 1)),
            *((west + 25 * (k % 60 + 1)), north - 22 * (k // 60)),
        )
        for k in range(3000)
    }
    regions.write_zones(tmp_path / "zones.gpkg", shapes)
    output = {
        "folder": str(tmp_path / "out"),
        "report": True,
        "layers": ["hazard_class", "salt_load"],
    }
    result = saltrise.run(
        regions.small_region(tmp_path, zones={"file": "zones.gpkg"}, output=output)
    )
    page = (result.folder / "report.html").read_text("utf-8")
    assert len(page.encode()) < 5e6
    assert page.count("Zone z") >= 3000
