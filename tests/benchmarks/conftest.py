"""What benchmarks share: where inputs are kept, and how they say what they measured."""

from __future__ import annotations

import os
import sys
from pathlib import Path

import pytest


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    named = os.environ.get("BENCH_FOLDER")
    return Path(named) if named else tmp_path_factory.mktemp("bench")


@pytest.fixture
def told(capsys: pytest.CaptureFixture[str]):
    def tell(text: str) -> None:
        with capsys.disabled():
            sys.stdout.write(f"\n  {text}\n")

    return tell
