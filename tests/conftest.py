"""Fixtures shared by the tests."""

from __future__ import annotations

import pytest
from hypothesis import settings

from saltrise.io import durable

# The first call of a compiled loop may have to compile it.
settings.register_profile("compiled", deadline=None)
settings.load_profile("compiled")


@pytest.fixture(autouse=True)
def _no_observers_left():
    yield
    durable.observers.clear()
