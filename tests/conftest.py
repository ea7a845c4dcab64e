"""Fixtures shared by the tests."""

from __future__ import annotations

import pytest

from saltrise.io import durable


@pytest.fixture(autouse=True)
def _no_observers_left():
    yield
    durable.observers.clear()
