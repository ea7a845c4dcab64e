"""Errors that reach a user: each knows the exit code it stands for."""

from __future__ import annotations


class SaltriseError(Exception):
    """Base of every error a user is meant to read; `exit_code` is the process's answer."""

    exit_code = 1


class InputError(SaltriseError):
    """Something the user has to mend: config or input.

    Parameters
    ----------
    *faults : str
        One line a fault, each naming the thing, the rule and the value. All faults found
        together are reported together.
    """

    exit_code = 2

    def __init__(self, *faults: str) -> None:
        self.faults: tuple[str, ...] = faults
        super().__init__("\n".join(faults))


class RunError(SaltriseError):
    """The run failed for a reason outside the config: a broken file, a full disk."""


class UnusableInputError(RunError):
    """An input broke, or holds what it cannot hold, while tiles ran.

    A survey of the whole region then tells whether the user has something to mend.
    """


class BrokenInputError(UnusableInputError):
    """An input could not be read."""
