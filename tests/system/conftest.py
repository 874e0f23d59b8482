"""Whole sweeps: host, wire, firmware and plant together, on every rung that is there."""

import pytest
from rig import Bench, needs_micropython

from kneewise.emulator.scenario import Scenario


@pytest.fixture(params=["in-process", pytest.param("micropython", marks=needs_micropython)])
def rung(request):
    return request.param


@pytest.fixture
def bench():
    made = []

    def make(rung, **changes):
        scenario = Scenario.default().varied(**changes) if changes else Scenario.default()
        made.append(Bench(scenario, rung))
        return made[-1]

    yield make
    for one in made:
        one.close()
