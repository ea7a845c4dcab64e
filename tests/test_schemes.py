"""Class schemes: classifying, and faults of a scheme file."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import regions
import saltrise
from saltrise.errors import InputError
from saltrise.io.scheme_files import load_scheme, shipped_schemes
from saltrise.schemes import parse_scheme

GOOD = """
breaks = [1, 2, 3, 4]
names = ["a", "b", "c", "d", "e"]
colours = ["#000000", "#111111", "#222222", "#333333", "#444444"]
citation = "invented for a test"
"""


def test_a_class_holds_its_lower_break_and_not_its_upper() -> None:
    scheme = parse_scheme(GOOD, "mine", "mine.toml")
    values = np.array([0.0, np.nextafter(1, 0), 1.0, 2.0, np.nextafter(4, 0), 4.0, 1e9])
    np.testing.assert_array_equal(scheme.classify(values), [1, 1, 2, 3, 4, 5, 5])


def test_the_shipped_scheme_is_the_contract() -> None:
    scheme = load_scheme("salt_load", Path())
    assert scheme.breaks == (1.0, 5.0, 15.0, 30.0)
    assert scheme.names == ("very low", "low", "moderate", "high", "very high", "water at surface")
    assert "no published standard" in scheme.citation
    assert set(scheme.rgb()) == {1, 2, 3, 4, 5, 6}


def test_a_users_file_works_by_path(tmp_path: Path) -> None:
    (tmp_path / "mine.toml").write_text(GOOD)
    scheme = load_scheme("mine.toml", tmp_path)
    assert (scheme.name, scheme.layer, scheme.names[5]) == ("mine", "salt_load", "water at surface")


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ("[1, 2, 3, 4]", "[1, 2, 3]", "breaks.*list of 4"),
        ("[1, 2, 3, 4]", "[1, 3, 3, 4]", "must rise"),
        ("[1, 2, 3, 4]", "[0, 1, 3, 4]", "positive"),
        ("[1, 2, 3, 4]", '["1", 2, 3, 4]', "positive number"),
        ('"#222222"', '"red"', "'red' must be #rrggbb"),
        ('"c", ', "", "names.*list of 5 or 6"),
        ("citation", "quotation", "quotation: unknown key"),
        ("citation", "# citation", "citation: missing"),
        ("breaks =", 'layer = "depth"\nbreaks =', "layer: is 'depth'"),
        ("breaks =", 'unit = "kg"\nbreaks =', "unit: is 'kg'"),
        ("breaks =", "breaks = = ", "not a TOML file"),
    ],
)
def test_faults_name_file_key_and_value(old: str, new: str, words: str) -> None:
    with pytest.raises(InputError, match=f"mine.toml: .*{words}"):
        parse_scheme(GOOD.replace(old, new), "mine", "mine.toml")


def test_an_unknown_name_lists_the_shipped_ones(tmp_path: Path) -> None:
    assert "salt_load" in shipped_schemes()
    with pytest.raises(InputError, match="did you mean 'salt_load'"):
        load_scheme("saltload", tmp_path)
    with pytest.raises(InputError, match="cannot be read"):
        load_scheme("no.toml", tmp_path)


def test_shipped_schemes_by_rate_and_by_margin() -> None:
    assert set(shipped_schemes()) == {"salt_load", "max_evaporation", "depth_margin"}
    rate = load_scheme("max_evaporation", Path())
    assert (rate.layer, rate.breaks) == ("max_evaporation", (0.1, 0.5, 1.0, 3.0))
    margin = load_scheme("depth_margin", Path())
    values = np.array([2.0, 1.0, 0.99, 0.5, 0.49, 0.0, -1e-9, -0.5, -0.51, np.nan])
    np.testing.assert_array_equal(margin.classify(values), [1, 1, 2, 2, 3, 3, 4, 4, 5, 1])
    assert margin.bounds()[0] == (1.0, np.inf)
    assert margin.bounds()[4] == (-np.inf, -0.5)
    assert margin.labels()[1] == "low (0.5 to 1 m)"
    assert load_scheme("salt_load", Path()).labels()[0] == "very low (under 1 t/ha/year)"
    assert load_scheme("salt_load", Path()).labels()[4] == "very high (30 t/ha/year and more)"


def test_breaks_of_a_margin_must_fall() -> None:
    with pytest.raises(InputError, match="values must fall"):
        parse_scheme(GOOD + 'layer = "depth_margin"', "mine", "mine.toml")


@pytest.mark.parametrize("scheme", ["max_evaporation", "depth_margin"])
def test_a_run_by_another_scheme(tmp_path: Path, scheme: str) -> None:
    output = {"folder": str(tmp_path / "out"), "precision": "full"}
    result = saltrise.run(regions.small_region(tmp_path, hazard={"scheme": scheme}, output=output))
    values, classes = result.layer(scheme)[0], result.layer("hazard_class")[0]
    dry = ~values.mask & (classes.filled(0) != 6)
    expected = load_scheme(scheme, Path()).classify(values.filled(0).astype(np.float64))
    # Classes come from values before they are stored as float32.
    assert np.mean(classes[dry] != expected[dry]) < 1e-3
    assert result.record["hazard_scheme"]["layer"] == scheme
