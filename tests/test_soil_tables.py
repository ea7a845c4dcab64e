"""Parameter sets: what ships, against print; what a user may give, fault by fault."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from published import table
from saltrise.errors import InputError
from saltrise.io.soil_tables import load_soil_set, parse_soil_set, shipped_sets
from saltrise.physics.soils import TEXTURES, soil_for

HEAD = "texture,air_entry_cm,b,ks_cm_per_day,source\n"


def test_four_sets_ship_each_with_a_source_on_every_row() -> None:
    classes = {
        "carsel-parrish1988": 12,
        "clapp-hornberger1978": 11,
        "clapp-hornberger1978-arithmetic": 11,
        "rawls1982": 11,
    }
    assert shipped_sets() == tuple(classes)
    for name, count in classes.items():
        rows = load_soil_set(name, Path()).rows
        assert len(rows) == count
        assert set(rows) <= set(TEXTURES)
        assert ("silt" in rows) == (count == 12)
        assert all(row.source for row in rows.values())


def test_rawls1982_equals_the_printed_table() -> None:
    rows = load_soil_set("rawls1982", Path()).rows
    for printed in table("rawls1982_ranges"):
        row = rows[printed["texture"]].profile
        assert row.air_entry_m * 100 == pytest.approx(float(printed["hb_geo_cm"]), rel=1e-12)
        assert 1 / row.b == pytest.approx(float(printed["lambda_geo"]), rel=1e-12)
        assert row.ks_mm_per_day == pytest.approx(float(printed["Ks_cm_h"]) * 240, rel=1e-12)


def test_rawls1982_geometric_means_lie_in_the_middle_of_their_ranges() -> None:
    # A log-normal's +-1 sd range has the geometric mean in its logarithmic middle; 1 % allows for
    # the printed digits.
    rows = load_soil_set("rawls1982", Path()).rows
    for printed in table("rawls1982_ranges"):
        row = rows[printed["texture"]].profile
        entry = np.sqrt(float(printed["hb_geo_lo"]) * float(printed["hb_geo_hi"]))
        index = np.sqrt(float(printed["lambda_geo_lo"]) * float(printed["lambda_geo_hi"]))
        assert row.air_entry_m * 100 == pytest.approx(entry, rel=0.01)
        assert 1 / row.b == pytest.approx(index, rel=0.01)


def test_rawls1983_wetting_front_suction_follows_from_the_1982_pair() -> None:
    # Rawls, Brakensiek & Miller (1983) J. Hydraul. Eng. 109(1):62-70, Table 2, from the 1982
    # geometric means: psi_f = (2 + 3 lambda)/(1 + 3 lambda) hb / 2; differs by up to 1.6 %.
    rows = load_soil_set("rawls1982", Path()).rows
    for printed in table("rawls1983"):
        row = rows[printed["texture"]].profile
        index = 1 / row.b
        suction = (2 + 3 * index) / (1 + 3 * index) * row.air_entry_m * 100 / 2
        assert suction == pytest.approx(float(printed["psi_f_cm"]), rel=0.02)


def test_clapp_hornberger1978_equals_the_printed_table() -> None:
    log_mean = load_soil_set("clapp-hornberger1978", Path()).rows
    arithmetic = load_soil_set("clapp-hornberger1978-arithmetic", Path()).rows
    for printed in table("clapp_hornberger1978"):
        texture = printed["texture"]
        one, two = log_mean[texture].profile, arithmetic[texture].profile
        assert one.air_entry_m * 100 == pytest.approx(float(printed["psi_s_geo_cm"]), rel=1e-12)
        assert two.air_entry_m * 100 == pytest.approx(float(printed["psi_s_arith_cm"]), rel=1e-12)
        assert one.b == two.b == float(printed["b"])
        assert one.ks_mm_per_day == pytest.approx(float(printed["Ks_cm_min"]) * 14400, rel=1e-12)
        # The table prints Ks in cm/min and cm/s; they agree to the digits printed.
        assert float(printed["Ks_cm_min"]) / 60 == pytest.approx(
            float(printed["Ks_cm_s"]), rel=0.007
        )


def test_cosby1984_in_ln_and_log10_is_one_regression() -> None:
    # Cosby et al. (1984) WRR 20(6):682-690, univariate: log10 psi_s [cm] = 1.88 - 0.0131 sand,
    # log10 Ks [inch/h] = -0.884 + 0.0153 sand; the natural-log form is in m and m/s.
    # Each printed coefficient equals the other form's within half a unit of its last digit.
    assert 1.88 * np.log(10) == pytest.approx(4.33, abs=0.005)
    assert 0.0131 * np.log(10) == pytest.approx(0.0302, abs=0.00005)
    assert 0.884 * np.log(10) == pytest.approx(2.035, abs=0.0005)
    assert 0.0153 * np.log(10) == pytest.approx(0.0352, abs=0.00005)
    assert 25.4 / 3600 / 1000 == pytest.approx(7.0556e-6, abs=5e-11)


def test_a_class_without_a_row_says_what_to_do() -> None:
    with pytest.raises(InputError, match="no row for it") as caught:
        soil_for(load_soil_set("rawls1982", Path()), "silt")
    for words in ("rawls1982", '"silt loam"', "[soil.classes]", "CSV of your own"):
        assert words in str(caught.value)


def test_a_users_csv_works_like_a_shipped_set(tmp_path: Path) -> None:
    text = "\ufeff# my own\n" + HEAD + "silt, 20, 5, 10, my laboratory\n"
    (tmp_path / "mine.csv").write_text(text, encoding="utf-8")
    mine = load_soil_set("mine.csv", tmp_path)
    row = soil_for(mine, "silt").profile
    assert (mine.name, row.air_entry_m, row.b, row.ks_mm_per_day) == (
        "mine",
        0.2,
        5.0,
        100.0,
    )


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "is empty"),
        (HEAD, "has no rows"),
        (HEAD.replace("b,", ""), "missing column b"),
        (HEAD.replace("ks_cm_per_day", "ks_cm_day"), "did you mean 'ks_cm_per_day'"),
        (HEAD.replace(",", ";"), "separated by commas"),
        (HEAD + "sand,7,1.7,504", "mine.csv:2: has 4 cells, the header has 5"),
        (HEAD + "sandy,7,1.7,504,me", "mine.csv:2: texture: is 'sandy'"),
        (HEAD + "sand,7,1.7,504,me\nsand,7,1.7,504,me", "mine.csv:3: texture: 'sand' has a row"),
        (HEAD + "sand,x,1.7,504,me", "mine.csv:2: air_entry_cm: is 'x', must be a number"),
        (HEAD + "sand,7,1.7,,me", "ks_cm_per_day: is ''"),
        (HEAD + "sand,-7,1.7,504,me", "air_entry_cm: is -7, must be from"),
        (HEAD + "sand,7,nan,504,me", "b: is nan"),
        (HEAD + "sand,7,1.7,504,", "source: is empty"),
    ],
)
def test_faults_name_row_column_and_value(text: str, words: str) -> None:
    with pytest.raises(InputError) as caught:
        parse_soil_set(text.encode(), "mine", "mine.csv", None)
    assert words in str(caught.value)


def test_every_fault_of_a_csv_comes_at_once() -> None:
    with pytest.raises(InputError) as caught:
        parse_soil_set((HEAD + "sand,x,y,0,me\nclay,1,1,1,\n").encode(), "m", "m.csv", None)
    assert len(caught.value.faults) == 4


def test_names_that_are_no_set_or_file(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="did you mean 'rawls1982'"):
        load_soil_set("rawls82", tmp_path)
    with pytest.raises(InputError, match="no such file"):
        load_soil_set("gone.csv", tmp_path)
    with pytest.raises(InputError, match="not UTF-8"):
        parse_soil_set(b"\xff\xfe\x00", "m", "m.csv", None)


LAWS_OF_A_CSV = {
    "brooks-corey": ("texture,air_entry_cm,b,ks_cm_per_day,source\nclay,37.3,7.6,1.44,me\n", 1.0),
    "van-genuchten": (
        "texture,alpha_per_cm,n,ks_cm_per_day,source\nclay,.036,1.56,24.96,me\n",
        1.0,
    ),
    "gardner-power": ("texture,a,b,n,source\nclay,1100,565,2,me\n", 0.9),
    "gardner-exponential": ("texture,ks_cm_per_day,alpha_per_cm,source\nclay,10,0.05,me\n", 0.5),
}


@pytest.mark.parametrize(
    ("law", "expected"),
    [
        # By quadrature outside this project, mm/day at the depth beside the CSV.
        ("brooks-corey", None),
        ("van-genuchten", 0.544716),
        # Chino clay, Gardner & Fireman (1958) Soil Science 85:244-249 (constants from memory).
        ("gardner-power", 2.91449),
        # Gardner (1958), E = Ks / (exp(alpha L) - 1).
        ("gardner-exponential", 8.942548984),
    ],
)
def test_a_csv_of_every_law(tmp_path: Path, law: str, expected: float | None) -> None:
    text, depth = LAWS_OF_A_CSV[law]
    (tmp_path / "mine.csv").write_text(text)
    mine = load_soil_set("mine.csv", tmp_path, law)
    assert mine.conductivity == law
    rate = mine.rows["clay"].profile.evaporation(np.array([depth]))[0][0]
    if expected is not None:
        assert rate == pytest.approx(expected, rel=2e-6)
    else:
        same = load_soil_set("mine.csv", tmp_path, "campbell").rows["clay"].profile
        assert rate == same.evaporation(np.array([depth]))[0][0]


def test_a_law_without_its_columns_names_them(tmp_path: Path) -> None:
    (tmp_path / "mine.csv").write_text(HEAD + "clay,37.3,7.6,1.44,me\n")
    with pytest.raises(InputError) as caught:
        load_soil_set("mine.csv", tmp_path, "van-genuchten")
    assert "missing column alpha_per_cm, n; conductivity 'van-genuchten' needs" in str(caught.value)


def test_a_law_that_contradicts_a_shipped_set(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="is for conductivity 'campbell', not 'van-genuchten'"):
        load_soil_set("rawls1982", tmp_path, "van-genuchten")
    assert load_soil_set("rawls1982", tmp_path, "brooks-corey").conductivity == "campbell"
