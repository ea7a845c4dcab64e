"""A run's progress as a file of JSON lines, for programs that watch it."""

from __future__ import annotations

import json
import time
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from saltrise.errors import InputError


class LogFile:
    """Writes a line an event; an existing file is continued.

    Every line has `time` (UTC) and `event`: "stage" and "step" with `stage`, `done` and `total`
    (steps of tiles also `cells_per_second`), and "end" with `exit_code` and `message`. A class
    because it holds the open file and where the stage stands.
    """

    def __init__(self, path: Path) -> None:
        try:
            self._file = path.open("a", encoding="utf-8", buffering=1)
        except OSError as error:
            raise InputError(f"--log {path}: cannot be written: {error.strerror}") from error
        self._stage, self._total, self._done, self._earlier, self._cells = "", 0, 0, 0, 0
        self._began = 0.0

    def stage(self, name: str, total: int, cells: int = 0, done: int = 0) -> None:
        """A stage of `total` steps begins, `done` of them by an earlier run; of `cells` cells."""
        self._stage, self._total, self._cells = name, total, cells
        self._done = self._earlier = done
        self._began = time.monotonic()
        self._write("stage", stage=name, done=done, total=total)

    def advance(self) -> None:
        """One step of the stage is done."""
        self._done += 1
        speed = {}
        spent = time.monotonic() - self._began
        if self._cells and spent > 0:
            made = self._cells * (self._done - self._earlier) / self._total
            speed = {"cells_per_second": round(made / spent)}
        self._write("step", stage=self._stage, done=self._done, total=self._total, **speed)

    def end(self, exit_code: int, message: str) -> None:
        """The run is over."""
        self._write("end", exit_code=exit_code, message=message)
        self._file.close()

    def _write(self, event: str, **content: Any) -> None:
        line = {"time": datetime.now(UTC).isoformat(timespec="milliseconds"), "event": event}
        self._file.write(json.dumps(line | content, ensure_ascii=False) + "\n")
