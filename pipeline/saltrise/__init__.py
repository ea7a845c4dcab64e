"""saltrise: maps how much salt shallow groundwater brings to the land surface."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from saltrise.job import run
    from saltrise.result import Result

__all__ = ["Result", "run"]


def __getattr__(name: str) -> Any:
    # Late, so that `saltrise --help` does not wait for the raster libraries. The module is not
    # called run: importing it would put the module in the place of the function.
    if name == "run":
        from saltrise.job import run

        return run
    if name == "Result":
        from saltrise.result import Result

        return Result
    raise AttributeError(f"module 'saltrise' has no attribute {name!r}")
