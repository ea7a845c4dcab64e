"""Files that are whole or absent."""

from __future__ import annotations

import errno
from pathlib import Path

import pytest

from saltrise.errors import RunError
from saltrise.io import durable


def test_a_file_appears_whole_under_its_name_only(tmp_path: Path) -> None:
    durable.write_whole(tmp_path / "a.bin", [b"one", b"two"])
    assert [p.name for p in tmp_path.iterdir()] == ["a.bin"]
    assert (tmp_path / "a.bin").read_bytes() == b"onetwo"


def test_a_failure_half_way_leaves_the_old_file(tmp_path: Path) -> None:
    path = tmp_path / "a.bin"
    durable.write_whole(path, [b"old"])

    def parts():
        yield b"new"
        raise OSError(errno.ENOSPC, "No space left on device")

    with pytest.raises(RunError, match="free disk space"):
        durable.write_whole(path, parts())
    assert path.read_bytes() == b"old"


def test_observers_hear_of_each_step(tmp_path: Path) -> None:
    heard: list[str] = []
    durable.observers.append(heard.append)
    durable.write_json(tmp_path / "a.json", {"x": 1})
    assert heard == ["a.json"]


def test_json_keeps_numbers_and_text_in_full(tmp_path: Path) -> None:
    content = {"third": 1 / 3, "name": "Ž ن"}
    durable.write_json(tmp_path / "a.json", content)
    assert durable.read_json(tmp_path / "a.json") == content
    assert "Ž ن" in (tmp_path / "a.json").read_text("utf-8")


def test_a_slice_beyond_the_end_is_an_error(tmp_path: Path) -> None:
    path = tmp_path / "a.bin"
    durable.write_whole(path, [b"0123456789"])
    assert durable.read_slice(path, 2, 3) == b"234"
    with pytest.raises(RunError, match="ends before byte 12"):
        durable.read_slice(path, 8, 4)
    with pytest.raises(RunError, match=r"gone\.bin"):
        durable.read_slice(tmp_path / "gone.bin", 0, 1)


def test_unreadable_json_names_the_file(tmp_path: Path) -> None:
    (tmp_path / "a.json").write_text("{")
    with pytest.raises(RunError, match=r"a\.json"):
        durable.read_json(tmp_path / "a.json")
