"""Every input a user may get wrong is answered: a clear fault, nothing that looks finished."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import geopandas
import numpy as np
import pytest
import rasterio
from affine import Affine
from shapely.geometry import LineString, Point, Polygon, box

import regions
import saltrise
from saltrise.errors import InputError

WEST, NORTH = regions.WEST, regions.NORTH
SQUARE = box(WEST, NORTH - 600, WEST + 600, NORTH)


def refused(config: Path) -> str:
    """Text of the faults; nothing may be left that looks finished."""
    with pytest.raises(InputError) as caught:
        saltrise.run(config)
    assert not (config.parent / "out").exists()
    assert not (config.parent / "out.unfinished").exists()
    return str(caught.value)


def test_every_missing_raster_at_once_with_its_line(tmp_path: Path) -> None:
    config = regions.small_region(tmp_path)
    for name in ("depth", "texture"):
        (tmp_path / f"{name}.tif").unlink()
    text = refused(config)
    lines = config.read_text().splitlines()
    at = {
        name: 1 + next(i for i, line in enumerate(lines) if f"{name}.tif" in line)
        for name in ("depth", "texture")
    }
    assert f"region.toml:{at['depth']}: water_table.depth: no such file" in text
    assert f"region.toml:{at['texture']}: soil.texture: no such file" in text


def test_empty_torn_and_foreign_files(tmp_path: Path) -> None:
    config = regions.small_region(tmp_path, (300, 300))
    (tmp_path / "texture.tif").write_bytes(b"")
    (tmp_path / "salinity.tif").write_text("hello")
    text = refused(config)
    assert "0 bytes" in text
    assert "salinity.tif: not a raster" in text


def test_a_torn_raster_is_found_in_the_survey(tmp_path: Path) -> None:
    config = regions.small_region(tmp_path, (300, 300))
    data = (tmp_path / "salinity.tif").read_bytes()
    (tmp_path / "salinity.tif").write_bytes(data[: len(data) * 2 // 3])
    text = refused(config)
    assert "groundwater.salinity" in text
    assert "salinity.tif" in text


def test_a_raster_without_crs_or_outside_the_region(tmp_path: Path) -> None:
    config = regions.small_region(tmp_path)
    values = np.ones((5, 5), np.float32)
    regions.write_raster(tmp_path / "salinity.tif", values, crs=None)
    assert "no coordinate reference system" in refused(config)
    regions.write_raster(tmp_path / "salinity.tif", values, regions.place(WEST + 1e6))
    assert "wholly outside the region" in refused(config)


def test_all_nodata_and_negative_salinity(tmp_path: Path) -> None:
    config = regions.small_region(tmp_path)
    values = regions.fields((40, 50), np.random.default_rng(1))
    regions.write_raster(tmp_path / "depth.tif", np.full((40, 50), -9999, np.float32), nodata=-9999)
    values["salinity"][3, 7] = -2
    regions.write_raster(tmp_path / "salinity.tif", values["salinity"], nodata=-9999)
    text = refused(config)
    assert "depth.tif: band 1: every cell of the region is nodata" in text
    assert "1 cells are negative (lowest -2, first at column 7, row 3" in text
    assert "salinity.tif, pixel column 7, row 3" in text


def test_inputs_that_never_meet(tmp_path: Path) -> None:
    config = regions.small_region(tmp_path)
    for name, half in (("depth", np.s_[:, :25]), ("salinity", np.s_[:, 25:])):
        values = np.full((40, 50), -9999, np.float32)
        values[half] = 2.0
        regions.write_raster(tmp_path / f"{name}.tif", values, nodata=-9999)
    assert "no cell of the region has a value in every input" in refused(config)


def test_unmapped_codes_with_counts_and_first_positions(tmp_path: Path) -> None:
    config = regions.small_region(tmp_path)
    codes = np.full((40, 50), 1, np.uint8)
    codes[5, 6:9] = 77
    codes[9, 1] = 200
    regions.write_raster(tmp_path / "texture.tif", codes, nodata=0)
    text = refused(config)
    assert "77 (3 cells, first at column 6, row 5" in text
    assert "200 (1 cells, first at column 1, row 9" in text
    assert "texture.tif, pixel column 6, row 5" in text


def test_a_number_for_texture_that_is_not_mapped(tmp_path: Path) -> None:
    config = regions.small_region(tmp_path, soil={"texture": 99})
    assert "soil.texture: the code 99 is not mapped in [soil.classes]" in refused(config)


def test_codes_that_are_no_whole_numbers(tmp_path: Path) -> None:
    config = regions.small_region(tmp_path)
    regions.write_raster(tmp_path / "texture.tif", np.full((40, 50), 2.5, np.float32))
    assert "2.5 (2000 cells" in refused(config)


def test_a_class_without_parameters_and_a_region_without_soil(tmp_path: Path) -> None:
    config = regions.small_region(tmp_path, soil__classes={"1": "silt"})
    assert "no row for it" in refused(config)
    nothing = dict.fromkeys(("1", "2", "3", "9"), "not soil") | {"4": "not soil", "5": "clay"}
    config = regions.small_region(tmp_path, soil__classes=nothing)
    assert 'every cell of the region is mapped to "not soil"' in refused(config)


def test_a_mapped_class_that_never_occurs_is_no_fault(tmp_path: Path) -> None:
    config = regions.small_region(tmp_path, soil__classes={"50": "silt"})
    assert saltrise.run(config).record["counts_cells"]["assessed"] > 0


def zones_file(folder: Path, frame: geopandas.GeoDataFrame, name: str = "zones.gpkg") -> None:
    frame.to_file(folder / name, layer="districts", driver="GPKG")


def frame(shapes: list, crs: str | None = regions.CRS, **fields: list) -> geopandas.GeoDataFrame:
    return geopandas.GeoDataFrame(fields, geometry=shapes, crs=crs)


ZONE_FAULTS: list[tuple[geopandas.GeoDataFrame, dict[str, Any], str]] = [
    (frame([SQUARE], cod=["a"]), {}, "no field 'code'; the file has cod; did you mean 'cod'?"),
    (frame([SQUARE], code=["a"]), {"name": "title"}, "zones.name: no field 'title'"),
    (frame([SQUARE, SQUARE], code=["a", None]), {}, "field 'code' is empty in feature 2"),
    (frame([SQUARE, SQUARE], code=["a", "a"]), {}, "repeats 'a' (2 times)"),
    (frame([SQUARE, None], code=["a", "b"]), {}, "no geometry in zone b"),
    (frame([SQUARE, Point(WEST, NORTH)], code=["a", "b"]), {}, "polygons, but for b (Point)"),
    (frame([LineString([(0, 0), (1, 1)])], code=["a"]), {}, "polygons, but for a (LineString)"),
    (frame([box(0, 0, 9, 9)], code=["a"]), {}, "all zones lie outside the region"),
    (frame([SQUARE], crs=None, code=["a"]), {}, "has no coordinate reference system"),
    (frame([SQUARE], code=["a"]), {"layer": "other"}, "zones.layer: is 'other'"),
    (frame([SQUARE][:0], code=[]), {}, "has no features"),
]


@pytest.mark.filterwarnings("ignore:'crs' was not provided")
@pytest.mark.parametrize(("content", "keys", "words"), ZONE_FAULTS, ids=[z[2] for z in ZONE_FAULTS])
def test_zones_that_cannot_be_used(tmp_path: Path, content, keys, words: str) -> None:
    zones_file(tmp_path, content)
    text = refused(regions.small_region(tmp_path, zones={"file": "zones.gpkg"} | keys))
    assert words in text
    assert "region.toml:" in text


def test_missing_and_foreign_zone_files_and_several_layers(tmp_path: Path) -> None:
    config = regions.small_region(tmp_path, zones={"file": "zones.gpkg"})
    assert "zones.file: no such file" in refused(config)
    (tmp_path / "zones.gpkg").write_text("hello")
    assert "cannot be read as a vector file" in refused(config)
    (tmp_path / "zones.gpkg").unlink()
    zones_file(tmp_path, frame([SQUARE], code=["a"]))
    frame([SQUARE], code=["a"]).to_file(tmp_path / "zones.gpkg", layer="second", driver="GPKG")
    assert "holds layers districts, second; name one" in refused(config)


def test_invalid_zones_are_mended_and_told(tmp_path: Path) -> None:
    bow = Polygon(
        [(WEST, NORTH), (WEST + 600, NORTH - 600), (WEST + 600, NORTH), (WEST, NORTH - 600)]
    )
    zones_file(tmp_path, frame([bow, SQUARE], code=[1.0, 2.0], name=["a", "b"]))
    result = saltrise.run(regions.small_region(tmp_path, zones={"file": "zones.gpkg"}))
    assert any("1: invalid geometry (Self-intersection" in w for w in result.record["warnings"])
    rows = result.zones
    assert list(rows["zone_id"]) == ["1", "2"]
    assert rows["area_ha"][0] == pytest.approx(rows["area_ha"][1] / 2, rel=1e-6)


def test_zones_in_another_crs_cover_the_same_ground(tmp_path: Path) -> None:
    zones_file(tmp_path, frame([SQUARE], code=["a"]), "here.gpkg")
    zones_file(tmp_path, frame([SQUARE], code=["a"]).to_crs(4326), "there.gpkg")
    tables = [
        saltrise.run(
            regions.small_region(
                tmp_path, zones={"file": name}, output={"folder": str(tmp_path / name[:-5])}
            )
        ).zones
        for name in ("here.gpkg", "there.gpkg")
    ]
    for column in ("area_ha", "assessed_ha", "salt_load_t_per_year"):
        # Edges straight in degrees and in metres differ by millimetres over 600 m.
        assert tables[1][column][0] == pytest.approx(tables[0][column][0], rel=1e-4)


def test_other_vector_formats(tmp_path: Path) -> None:
    content = frame([SQUARE], code=["a"], name=["b"])
    for name in ("zones.shp", "zones.geojson"):
        content.to_file(tmp_path / name)
        result = saltrise.run(
            regions.small_region(
                tmp_path, zones={"file": name}, output={"folder": str(tmp_path / name[6:])}
            )
        )
        assert list(result.zones["name"]) == ["b"]


def test_foreign_output_folders_are_left_alone(tmp_path: Path) -> None:
    config = regions.small_region(tmp_path)
    out = tmp_path / "out"
    out.mkdir()
    (out / "thesis.txt").write_text("precious")
    for force in (False, True):
        with pytest.raises(InputError, match=r"holds thesis\.txt, which is no finished run"):
            saltrise.run(config, force=force)
    assert (out / "thesis.txt").read_text() == "precious"
    (out / "thesis.txt").unlink()
    saltrise.run(config)
    assert (out / "run.json").is_file()


def test_output_that_is_a_file_or_cannot_be_made(tmp_path: Path) -> None:
    (tmp_path / "out").write_text("a file")
    with pytest.raises(InputError, match="is a file, must be a folder"):
        saltrise.run(regions.small_region(tmp_path))
    with pytest.raises(InputError, match="cannot be written"):
        saltrise.run(regions.small_region(tmp_path, output={"folder": str(tmp_path / "out/sub")}))
    stranger = tmp_path / "new.unfinished"
    stranger.mkdir()
    (stranger / "mine.txt").touch()
    with pytest.raises(InputError, match="no unfinished run of this tool"):
        saltrise.run(regions.small_region(tmp_path, output={"folder": str(tmp_path / "new")}))
    assert (stranger / "mine.txt").exists()


def test_grids_that_cannot_be(tmp_path: Path) -> None:
    for crs in ("EPSG:999999", "EPSG:nothing", "mars"):
        config = regions.small_region(tmp_path, grid={"crs": crs, "resolution": 30})
        assert "no coordinate reference system" in refused(config)
    config = regions.small_region(tmp_path, grid={"like": "gone.tif"})
    assert "grid.like: no such file" in refused(config)


def test_a_raster_without_place_is_refused(tmp_path: Path) -> None:
    config = regions.small_region(tmp_path)
    with pytest.warns(rasterio.errors.NotGeoreferencedWarning):
        regions.write_raster(
            tmp_path / "salinity.tif", np.ones((5, 5), np.float32), Affine.identity()
        )
    assert "no usable georeference" in refused(config)


@pytest.mark.parametrize("seed", range(12))
def test_flipped_bits_never_end_in_anything_but_an_answer(tmp_path: Path, seed: int) -> None:
    config = regions.small_region(tmp_path, (64, 64))
    random = np.random.default_rng(seed)
    values = regions.fields((64, 64), random)
    path = regions.write_raster(
        tmp_path / "depth.tif",
        values["depth"],
        nodata=-9999,
        compress="deflate",
        tiled=True,
        blockxsize=32,
        blockysize=32,
    )
    data = bytearray(path.read_bytes())
    for at in random.integers(8, len(data), 20):
        data[at] ^= 1 << int(random.integers(8))
    path.write_bytes(data[: random.integers(len(data) // 2, len(data) + 1)])
    try:
        saltrise.run(config)
    except InputError as error:
        assert "depth" in str(error)  # noqa: PT017
        assert not (tmp_path / "out").exists()
