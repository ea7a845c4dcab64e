"""The report: what it says, that it is whole by itself, and how it behaves in a browser."""

from __future__ import annotations

import json
import re
import shutil
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pytest
from matplotlib.image import imread
from shapely.geometry import box

import regions
import saltrise

NASTY = '<script>alert("1")</script> & "q" =cmd|x /../../y'
NAMES = {
    "a": NASTY,
    "b": "Нижний Луг",
    "c": "السهل المالح",
    "d": "Ω " + "long " * 60,
    "e": "塩の谷",
}


def make(folder: Path, **tables) -> saltrise.Result:
    return saltrise.run(write(folder, **tables))


def write(folder: Path, **tables) -> Path:
    import geopandas

    folder.mkdir(exist_ok=True, parents=True)
    west, north = regions.WEST, regions.NORTH
    shapes = [box(west + 300 * k, north - 900, west + 300 * (k + 1), north) for k in range(5)]
    frame = geopandas.GeoDataFrame(
        {"code": list(NAMES), "name": list(NAMES.values())}, geometry=shapes, crs=regions.CRS
    )
    frame.to_file(folder / "zones.gpkg", driver="GPKG")
    zones = {"file": "zones.gpkg", "id": "code", "name": "name"}
    output = {"folder": str(folder / "out"), "report": True}
    content = regions.tables(folder, zones=zones, output=output, **tables)
    content["title"] = NASTY
    regions.write_fields(folder, regions.fields((40, 50), np.random.default_rng(1)))
    return regions.write_config(folder, content)


@pytest.fixture(scope="module")
def result(tmp_path_factory: pytest.TempPathFactory) -> saltrise.Result:
    return make(tmp_path_factory.mktemp("page"))


class Reader(HTMLParser):
    """Text, tags and addresses of a page."""

    def __init__(self) -> None:
        super().__init__()
        self.text: list[str] = []
        self.tags: list[str] = []
        self.addresses: list[str] = []

    def handle_starttag(self, tag, attrs) -> None:
        self.tags.append(tag)
        self.addresses += [v for k, v in attrs if k in ("href", "src") and v]

    def handle_data(self, data: str) -> None:
        self.text.append(data)


def parsed(result: saltrise.Result) -> Reader:
    reader = Reader()
    reader.feed((result.folder / "report.html").read_text("utf-8"))
    return reader


def test_names_stand_whole_and_as_text(result: saltrise.Result) -> None:
    reader = parsed(result)
    text = " ".join(" ".join(reader.text).split())
    for name in NAMES.values():
        assert " ".join(name.split()) in text
    assert reader.tags.count("script") == 1


def test_it_needs_nothing_else(result: saltrise.Result) -> None:
    page = (result.folder / "report.html").read_text("utf-8")
    assert all(address.startswith(("data:", "#")) for address in parsed(result).addresses)
    assert not re.search(r"url\(|@import|https?://(?!www\.w3\.org)", page)
    assert len(page) < 5e6


def test_it_opens_with_the_answer(result: saltrise.Result) -> None:
    text = " ".join(" ".join(parsed(result).text).split())
    region = result.record["region"]
    assert f"Of {region['assessed_ha']:,.0f} ha assessed" in text
    worst = result.record["worst_zones"][0]
    assert f"first come {' '.join(worst['name'].split())}" in text
    assert f"deeper than {region['critical_depth_p50_m']:.2g} m on half of the land" in text
    for word in (*result.record["use_limits"], *result.record["warnings"]):
        assert " ".join(word.split()) in text
    for name in result.record["hazard_scheme"]["names"]:
        assert name in text


def test_crossed_areas_add_up(result: saltrise.Result) -> None:
    page = (result.folder / "report.html").read_text("utf-8")
    table = page.split("<h3>Region", 1)[1].split("</table>")[0]
    numbers = [float(n.replace(",", "")) for n in re.findall(r"<td>([\d.,e-]+)</td>", table)]
    rows = np.array(numbers).reshape(4, 5)
    np.testing.assert_allclose(rows[:, :4].sum(axis=1), rows[:, 4], rtol=0.1, atol=0.6)
    total = result.record["region"]["assessed_ha"]
    assert rows[:, 4].sum() == pytest.approx(total, rel=0.05)


def test_dates_come_from_the_config(tmp_path: Path) -> None:
    result = make(tmp_path, water_table={"date": "April 2026"})
    text = " ".join(parsed(result).text)
    assert "April 2026" in text
    assert "not given" in text


def test_every_layer_has_a_map(result: saltrise.Result) -> None:
    for name in result.record["layers"]:
        picture = imread(result.folder / "maps" / f"{name}.png")
        assert picture.shape[:2] == (1500, 2000)
        assert len(np.unique(picture[..., 0])) > 10


def test_equal_runs_give_equal_pages(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    import runs

    monkeypatch.setenv("SOURCE_DATE_EPOCH", runs.DATE)
    pages = []
    for name in ("a", "b"):
        folder = make(tmp_path / name).folder
        pages.append([(folder / f).read_bytes() for f in ("report.html", "maps/salt_load.png")])
    assert pages[0] == pages[1]


def test_a_run_ended_while_handing_over_goes_on_to_the_same_bytes(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    import runs
    from saltrise.io import durable

    monkeypatch.setenv("SOURCE_DATE_EPOCH", runs.DATE)
    config = write(tmp_path)
    whole = runs.hashes(saltrise.run(config).folder)
    for name in ("salt_load.sld", "salt_load.png", "report.html", "item.json"):

        def end(step: str, name: str = name) -> None:
            if step == name:
                raise runs.Stopped(name)

        shutil.rmtree(tmp_path / "out")
        durable.observers.append(end)
        try:
            with pytest.raises(runs.Stopped):
                saltrise.run(config)
        finally:
            durable.observers.remove(end)
        assert runs.hashes(saltrise.run(config).folder) == whole


BROWSER = shutil.which("chromium") or shutil.which("google-chrome")
browser_only = pytest.mark.skipif(BROWSER is None, reason="needs chromium")


@pytest.fixture(scope="module")
def browser():
    sync_api = pytest.importorskip("playwright.sync_api", reason="pip install 'saltrise[browser]'")
    with sync_api.sync_playwright() as playwright:
        opened = playwright.chromium.launch(executable_path=BROWSER, args=["--no-sandbox"])
        yield opened
        opened.close()


def opened(browser, result: saltrise.Result, width: int):
    page = browser.new_page(viewport={"width": width, "height": 900})
    said: list[str] = []
    page.on("console", lambda message: said.append(message.text))
    page.on("pageerror", lambda error: said.append(str(error)))
    page.on("request", lambda request: said.append(request.url))
    page.goto((result.folder / "report.html").as_uri())
    return page, said


@pytest.mark.browser
@browser_only
@pytest.mark.parametrize("width", [1280, 800, 360])
def test_no_errors_no_requests_no_sideways_scroll(browser, result, width: int) -> None:
    page, said = opened(browser, result, width)
    assert [s for s in said if not s.startswith(("file:", "data:"))] == []
    assert sum(s.startswith("file:") for s in said) == 1
    assert page.evaluate("document.documentElement.scrollWidth") <= width
    page.close()


@pytest.mark.browser
@browser_only
def test_sorting_and_filtering(browser, result) -> None:
    page, _ = opened(browser, result, 1280)
    first = "#zones tbody tr:not([hidden]) td:first-child"
    page.click("#zones th:nth-child(1) button")
    assert page.locator(first).all_inner_texts() == list("abcde")
    page.click("#zones th:nth-child(1) button")
    assert page.locator(first).all_inner_texts() == list("edcba")
    assert page.get_attribute("#zones th:nth-child(1)", "aria-sort") == "descending"
    page.click("#zones th:nth-child(5) button")
    loads = page.eval_on_selector_all(
        "#zones tbody td:nth-child(5)", "cells => cells.map(c => Number(c.dataset.value))"
    )
    assert loads == sorted(loads)
    page.fill("#filter", "луг")
    assert page.locator(first).all_inner_texts() == ["b"]
    assert page.inner_text("#count") == "1 of 5"
    page.close()


@pytest.mark.browser
@browser_only
def test_hover_and_keyboard_show_a_district(browser, result) -> None:
    page, _ = opened(browser, result, 1280)
    page.locator("path.zone").nth(1).hover()
    assert "Нижний Луг" in page.inner_text("#shown")
    page.locator("path.zone").nth(2).focus()
    assert NAMES["c"] in page.inner_text("#shown")
    assert page.locator("tr.shown").count() == 1
    page.close()


@pytest.mark.browser
@browser_only
def test_print_and_no_script(browser, result) -> None:
    context = browser.new_context(java_script_enabled=False)
    page = context.new_page()
    page.goto((result.folder / "report.html").as_uri())
    assert page.locator("#zones tbody tr").count() == 5
    assert len(page.pdf()) > 20_000
    page.emulate_media(media="print")
    assert not page.is_visible("#filter")
    context.close()


def test_titles_in_the_record_are_whole(result: saltrise.Result) -> None:
    assert result.record["title"] == NASTY
    assert (
        json.loads((result.folder / "item.json").read_text("utf-8"))["properties"]["title"] == NASTY
    )
    assert list(result.zones["name"])[:4] == [n.strip() for n in list(NAMES.values())[:4]]
