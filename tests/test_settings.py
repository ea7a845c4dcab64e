"""The config contract: defaults, rules, and every fault at once with its line."""

from __future__ import annotations

from importlib import resources
from pathlib import Path

import pytest

from saltrise.errors import InputError
from saltrise.settings import Settings, decode_config, parse_settings, settings_from_mapping
from saltrise.settings.lines import key_lines
from saltrise.settings.model import TABLES

GOOD = """\
title = "Test"
[water_table]
depth = "depth_*.tif"
unit = "m"
[soil]
texture = ["a.tif", "b.tif"]
[soil.classes]
1 = "sand"
"-2" = "clay"
[groundwater]
salinity = 3
unit = "dS/m"
[climate]
potential_evaporation = "pe.tif"
unit = "mm/year"
[output]
folder = "out"
"""


def parse(text: str, base: Path = Path("/base")) -> Settings:
    return parse_settings(text, "region.toml", base)


def faults(text: str) -> list[str]:
    with pytest.raises(InputError) as caught:
        parse(text)
    return list(caught.value.faults)


def test_defaults_are_the_contract() -> None:
    settings = parse(GOOD)
    assert settings.soil.parameters == "rawls1982"
    assert settings.groundwater.tds_per_ec == 640.0
    assert (settings.climate.basis, settings.climate.coefficient) == ("bare soil", 1.0)
    hazard = settings.hazard
    assert (hazard.scheme, hazard.target_load, hazard.rank_by) == ("salt_load", 2.0, "mean")
    output = settings.output
    assert (output.precision, output.compression, len(output.layers)) == ("rounded", "zstd", 6)
    assert (settings.run.tile, settings.run.scheduler, settings.grid) == (2048, "threads", None)
    assert settings.workers >= 1


def test_inputs_keep_patterns_and_become_absolute() -> None:
    settings = parse(GOOD)
    assert settings.water_table.depth is not None
    assert settings.water_table.depth.paths == ("/base/depth_*.tif",)
    assert settings.soil.texture.paths == ("/base/a.tif", "/base/b.tif")
    assert settings.groundwater.salinity.constant == 3.0
    remote = parse(GOOD.replace('"pe.tif"', '"https://example.org/pe.tif"'))
    assert remote.climate.potential_evaporation.paths == ("https://example.org/pe.tif",)


def test_codes_are_whole_numbers() -> None:
    assert parse(GOOD).soil.classes == {1: "sand", -2: "clay"}


def test_the_record_has_defaults_and_paths_as_given_but_no_run_table() -> None:
    record = parse(GOOD).resolved()
    assert record["water_table"]["depth"] == "depth_*.tif"
    assert record["soil"]["texture"] == ["a.tif", "b.tif"]
    assert record["hazard"]["target_load"] == 2.0
    assert "run" not in record
    assert record == parse(GOOD + "[run]\nworkers = 7\ntile = 512\n").resolved()


@pytest.mark.parametrize(
    ("old", "new", "expected"),
    [
        ('unit = "m"', 'unit = "metre"', "region.toml:4: water_table.unit: is 'metre', allowed"),
        ('unit = "m"\n', "", "region.toml:2: water_table.unit: missing"),
        ('title = "Test"', "title = 3", "region.toml:1: title: is 3 (number), must be a text"),
        ("salinity = 3", "salinty = 3", "did you mean 'salinity'?"),
        ("salinity = 3", "salinity = -1", "region.toml:11: groundwater.salinity: is -1, must be 0"),
        ("salinity = 3", "salinity = nan", "must be finite"),
        ("salinity = 3", "salinity = []", "at least one file"),
        ("salinity = 3", 'salinity = ["a", 3]', "every path must be"),
        ("salinity = 3", "salinity = true", "must be a path"),
        ("[climate]", "[climat]", "region.toml:13: climat: unknown table or key"),
        ('folder = "out"', 'folder = ".."', "output.folder: is '..'"),
        ('folder = "out"', 'folder = ""', "output.folder: is empty"),
        ('folder = "out"', 'folder = "o"\nlayers = ["salt_lode"]', "did you mean 'salt_load'?"),
        ('folder = "out"', 'folder = "o"\nlayers = []', "a list of at least 1"),
        ('folder = "out"', 'folder = "o"\nlayers = ["salt_load", "salt_load"]', "more than once"),
        ('folder = "out"', 'folder = "o"\nprecision = "half"', "allowed: 'rounded', 'full'"),
        ('1 = "sand"', '1 = "sandd"', "did you mean 'sand'?"),
        ('1 = "sand"', 'one = "sand"', "must be a whole number"),
        ('1 = "sand"\n"-2" = "clay"', '1 = "not soil"', "maps no value to a soil"),
        ('unit = "dS/m"', 'unit = "g/L"\ntds_per_ec = 640', "groundwater.tds_per_ec: goes with"),
        ('unit = "dS/m"', 'unit = "dS/m"\ntds_per_ec = "640"', "is '640' (text), must be a number"),
        ('unit = "dS/m"', 'unit = "dS/m"\ntds_per_ec = 0', "greater than 0"),
        ('unit = "mm/year"', 'unit = "mm/year"\nbasis = "lake"', "climate.basis"),
        ("[output]", "[hazard]\ntarget_load = 0\n[output]", "hazard.target_load: is 0"),
        ("[output]", "[run]\ntile = 500\n[output]", "run.tile: is 500, must be a multiple of 512"),
        ("[output]", "[run]\nworkers = 0\n[output]", "run.workers: is 0, must be 1 or more"),
        ("[output]", '[run]\nscheduler = "gpu"\n[output]', "run.scheduler: is 'gpu'"),
        ("[output]", '[zones]\nid = "x"\n[output]', "zones.file: missing"),
        (
            "[output]",
            '[grid]\nlike = "a.tif"\ncrs = "EPSG:1"\n[output]',
            "cannot stand beside like",
        ),
        ("[output]", '[grid]\ncrs = "EPSG:32740"\n[output]', "grid.resolution: missing"),
        (
            "[output]",
            '[grid]\ncrs = "x"\nresolution = 1\nbounds = [1, 0, 0, 1]\n[output]',
            "left <",
        ),
        ('depth = "depth_*.tif"', "depth = 2.0", "grid: missing: the water table is a number"),
        ('depth = "depth_*.tif"', "", "give depth, or elevation, ground and ground_accuracy"),
        ('depth = "depth_*.tif"', 'ground = "g.tif"', "water_table.elevation: missing"),
        ('unit = "m"', 'unit = "m"\nground_accuracy = 0.1', "goes with elevation and ground"),
        ('title = "Test"', "title = = 3", "region.toml:1: not TOML"),
        ('title = "Test"', 'title = "a"\ntitle = "b"', "not TOML"),
    ],
)
def test_each_fault_names_line_key_value_and_rule(old: str, new: str, expected: str) -> None:
    assert any(expected in fault for fault in faults(GOOD.replace(old, new))), faults(
        GOOD.replace(old, new)
    )


def test_every_fault_comes_at_once_in_the_order_of_lines() -> None:
    text = (
        GOOD.replace('"m"', '"yard"')
        .replace("3\n", '"x"\nnodata = "none"\n')
        .replace('"sand"', '"gravel"')
    )
    found = faults(text)
    assert len(found) == 3
    lines = [int(fault.split(":")[1]) for fault in found]
    assert lines == sorted(lines)


ELEVATIONS = 'elevation = "e.tif"\nground = "g.tif"\nground_accuracy = '


@pytest.mark.parametrize(
    ("accuracy", "warned", "refused"),
    [("0.3", False, False), ("0.8", True, False), ("1.5", True, True)],
)
def test_the_accuracy_of_the_ground_decides(accuracy: str, warned: bool, refused: bool) -> None:
    text = GOOD.replace('depth = "depth_*.tif"', ELEVATIONS + accuracy)
    if refused:
        assert "makes a depth map of its own errors" in faults(text)[0]
        text = text.replace("[soil]", "accept_ground_error = true\n[soil]", 1)
    assert bool(parse(text).warnings) == warned


def test_a_mapping_is_checked_alike() -> None:
    with pytest.raises(InputError, match=r"settings:1: water_table: missing"):
        settings_from_mapping({"title": "x"}, Path())


def test_bytes_that_are_not_utf8_name_the_line() -> None:
    assert decode_config(b"\xef\xbb\xbfa = 1", "r.toml") == "a = 1"
    with pytest.raises(InputError, match=r"r\.toml:2: is not UTF-8"):
        decode_config("a = 1\nb = 'é'".encode("latin-1"), "r.toml")


def test_lines_of_keys_in_every_toml_shape() -> None:
    text = (
        'a = 1 # [x]\n\n[b."c d"]\nlong = [\n 1,\n 2]\ne.f = 2\ng = {h = 1}\n'
        't = """\n[no]\nx = 1"""\n[[s]]\nn = 1\n[[s]]\nn = 2\n[s.sub]\nm = 1\n'
    )
    lines = key_lines(text)
    assert lines["a",] == 1
    assert lines["b", "c d"] == 3
    assert lines["b", "c d", "long"] == 4
    assert lines["b", "c d", "e", "f"] == 7
    assert lines["b", "c d", "g", "h"] == 8
    assert lines["b", "c d", "t"] == 9
    assert (lines["s", 0, "n"], lines["s", 1], lines["s", 1, "n"]) == (13, 14, 15)
    assert lines["s", 1, "sub", "m"] == 17


def test_the_template_parses_and_shows_every_key() -> None:
    text = (resources.files("saltrise") / "data" / "template.toml").read_text("utf-8")
    parse(text)
    for table, model in TABLES.items():
        for key in model.model_fields:
            assert key in text, f"{table}.{key} is not in the template"
