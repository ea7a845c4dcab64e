"""A finished run as an object: doctest, notebook summary, provenance in record and tags."""

from __future__ import annotations

import doctest
import json
from pathlib import Path

import rasterio

import regions
import saltrise
import saltrise.result
from saltrise.report.figures import drawable


def test_the_documented_example_runs() -> None:
    failures, tests = doctest.testmod(saltrise.result)
    assert tests > 4
    assert failures == 0


def test_a_notebook_shows_the_summary_escaped(tmp_path: Path) -> None:
    config = regions.small_region(tmp_path)
    text = config.read_text("utf-8").replace('"Test"', "'<b>Test</b> & more'")
    config.write_text(text, encoding="utf-8")
    shown = saltrise.run(config)._repr_html_()
    assert "<h4>&lt;b&gt;Test&lt;/b&gt; &amp; more</h4>" in shown
    assert "very high" in shown
    assert "Screening level" in shown


def test_provenance_in_record_and_tags(tmp_path: Path) -> None:
    config = regions.small_region(tmp_path, groundwater={"date": "2025-11"})
    config.write_text('abstract = "For a test."\n' + config.read_text("utf-8"), encoding="utf-8")
    with rasterio.open(tmp_path / "demand.tif", "r+") as dataset:
        dataset.update_tags(TIFFTAG_DATETIME="2024:05:01 00:00:00")
    result = saltrise.run(config)
    assert result.record["abstract"] == "For a test."
    assert result.record["input_dates"] == {
        "water_table.depth": "not given",
        "soil.texture": "not given",
        "groundwater.salinity": "2025-11",
        "climate.potential_evaporation": "2024:05:01 00:00:00",
    }
    with rasterio.open(result.folder / "layers/salt_load.tif") as dataset:
        tags = dataset.tags()
    assert tags["ABSTRACT"] == "For a test."
    assert tags["LINEAGE"] == result.record["lineage"]
    assert "Buckingham-Darcy" in tags["LINEAGE"]
    assert json.loads(tags["INPUTS"]) == [[i["file"], i["sha256"]] for i in result.record["inputs"]]
    assert json.loads(tags["INPUT_DATES"]) == result.record["input_dates"]
    assert json.loads(tags["PARAMETERS"]) == result.record["parameters"]
    config = result.record["config"]
    tables = ("water_table", "soil", "groundwater", "climate", "surface", "hazard")
    assert json.loads(tags["SETTINGS"]) == {name: config[name] for name in tables}
    assert json.loads(tags["VERSIONS"]) == result.record["versions"]


def test_names_a_picture_can_show() -> None:
    for name in ("Saltmouth", "Нижний", "Ωμέγα", "السهل", "Çöl"):
        assert drawable(name, "id") == name
    for name in ("塩の谷", "हिन्दी", " "):
        assert drawable(name, "id") == "id"
