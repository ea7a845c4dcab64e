"""Whatever happens to a config: settings, or faults with a line; never anything else."""

from __future__ import annotations

import random
from pathlib import Path

import pytest

from saltrise.errors import InputError
from saltrise.settings import parse_settings
from saltrise.settings.model import TABLES

FULL = (Path(__file__).parent.parent / "config" / "velith.toml").read_text("utf-8")
VALUES = [
    "1",
    "-1",
    "0",
    "nan",
    "inf",
    "true",
    '""',
    '"text"',
    "[]",
    "[1, 2]",
    "{}",
    "1979-05-27",
    '["a", 1]',
    "{a = 1}",
    "99999999999999999999",
    '"' + "x" * 500 + '"',
    "[[1]]",
    "-0.0",
]


def mutations(seed: int) -> str:
    chance = random.Random(seed)
    lines = FULL.splitlines()
    for _ in range(chance.randint(1, 4)):
        at = chance.randrange(len(lines))
        key = lines[at].split("=")[0].strip()
        change = chance.randrange(6)
        if change == 0:
            lines[at] = ""
        elif change == 1 and "=" in lines[at]:
            lines[at] = f"{key} = {chance.choice(VALUES)}"
        elif change == 2:
            lines[at] = lines[at].replace(chance.choice("aeiou"), "", 1)
        elif change == 3:
            lines.insert(at, lines[chance.randrange(len(lines))])
        elif change == 4:
            table = chance.choice(list(TABLES))
            field = chance.choice(list(TABLES[table].model_fields))
            lines += [f"[{table}]", f"{field} = {chance.choice(VALUES)}"]
        else:
            lines[at] = lines[at][: chance.randrange(len(lines[at]) + 1)]
    return "\n".join(lines)


@pytest.mark.parametrize("start", range(0, 2000, 200))
def test_a_mangled_config_never_ends_in_another_exception(start: int) -> None:
    for seed in range(start, start + 200):
        try:
            parse_settings(mutations(seed), "region.toml", Path("/base"))
        except InputError as error:
            for fault in error.faults:
                file, line, *_ = fault.split(":")
                assert file == "region.toml"
                assert int(line) >= 1
