"""The operator of an emulated bench: does what a proof test asks for, at once.

Comes in: tasks by name. Goes out: changes of the board and its plant, and true values of them.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from kneewise.emulator.inprocess import InProcessTracer
from kneewise.emulator.process import ProcessTracer
from kneewise.instrument.hands import Reading, Task

SUPPLY_V = 20.0
SUPPLY_A = 1.0
IN_CHARGE_US = 15_000  # after the closing; a third of the charge of the bench supply
# Of the diode that stands for a supply's voltage limit: as steep as numbers allow.
SATURATION_A = 1e-200

_CHANGES = {
    Task.OPEN_LOOP: ("stop_loop", 1),
    Task.CLOSE_LOOP: ("stop_loop", 0),
    Task.SWAP_LEADS: ("leads_swapped", 1),
    Task.LEADS_RIGHT: ("leads_swapped", 0),
}
# Of a module whose source is taken away; its other keys stay as they are.
_ABSENT: dict[str, Any] = {"photocurrent_a": 0.0}


def bench_supply(voltage_v: float, current_a: float) -> dict[str, Any]:
    """Keys of [source] for a supply: no more than its current, no more than its voltage, and the
    resistor in series that a proof test asks for.
    """
    return {
        "photocurrent_a": current_a,
        "saturation_current_a": SATURATION_A,
        "n_ns_vt_v": voltage_v / math.log(current_a / SATURATION_A),
        "cells_in_series": None,
        "ideality": None,
        "cell_temperature_c": None,
        "series_resistance_ohm": voltage_v / current_a,
        "shunt_resistance_ohm": 1e9,
        "irradiance_w_m2": 1000.0,
    }


class EmulatedHands:
    """Hands for an emulated tracer."""

    def __init__(self, tracer: InProcessTracer | ProcessTracer) -> None:
        self._tracer = tracer

    def do(self, task: Task, values: Mapping[str, float]) -> None:
        tracer = self._tracer
        if task in _CHANGES:
            tracer.change(*_CHANGES[task])
        elif task == Task.DISCONNECT:
            tracer.change("source", _ABSENT)
        elif task == Task.CONNECT_SUPPLY:
            tracer.change("source", bench_supply(values["voltage_v"], values["current_a"]))
        elif task == Task.PULL_POWER:
            tracer.after_closing(IN_CHARGE_US, "power_off")
        elif task == Task.WAIT:
            if isinstance(tracer, ProcessTracer):
                tracer.wait_power_lost()
            tracer.board.settle(round(1e6 * values["seconds"]))
        else:
            # The firmware of a board that lost its power in mid-charge is still to be put away.
            tracer.change("power_off", 1)
            tracer.change("power_off", 0)

    def read(self, reading: Reading) -> float:
        if reading == Reading.SUPPLY_V:
            return SUPPLY_V
        if reading == Reading.SUPPLY_A:
            return SUPPLY_A
        return self._tracer.board.capacitor_v
