"""The firmware on CPython, with a board of plain numbers (`fake_board.py`)."""

import pytest
from fake_board import FakeBoard, profile
from hypothesis import HealthCheck, settings

settings.register_profile("device", deadline=None, suppress_health_check=[HealthCheck.too_slow])
settings.load_profile("device")


@pytest.fixture
def board():
    return FakeBoard()


@pytest.fixture
def reference():
    """The reference profile, as the firmware holds it."""
    return profile()
