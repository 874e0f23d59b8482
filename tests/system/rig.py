"""An emulated tracer to pull about, for whole sweeps through host, wire, firmware and plant."""

import pytest

from kneewise.emulator import process
from kneewise.emulator.opener import connector, start
from kneewise.instrument.opened import Opened
from kneewise.instrument.tracer import Tracer

needs_micropython = pytest.mark.skipif(
    not process.available(),
    reason="no MicroPython is packaged for this platform; the in-process rung is tested",
)


class Bench:
    """An emulated tracer to pull about, and the host's `Tracer` on it."""

    def __init__(self, scenario, rung):
        self.emulated = start(scenario, rung)
        self.board = self.emulated.board
        self._tracers = []

    def tracer(self):
        opened = Opened(
            connect=connector(self.emulated), close=lambda: None, rung=self.emulated.rung
        )
        tracer = Tracer(opened)
        self._tracers.append(tracer)
        return tracer

    def close(self):
        for tracer in self._tracers:
            tracer.close()
        self.emulated.close()


def knots_alike(one, other):
    """True where two sweeps hold the same knots; times count from the first conduction."""
    names = ("voltage_sum", "current_sum", "pairs", "voltage_scatter", "current_scatter")
    same = all((getattr(one.raw, name) == getattr(other.raw, name)).all() for name in names)
    return same and (one.time == other.time).all()
