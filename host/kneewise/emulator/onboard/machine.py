"""Stands in for MicroPython's `machine` in the emulated process: what `main.py` uses of it."""

from emulated_board import bus

# Outputs of the reference board, as on its pin table.
OUTPUTS = {2: "pulse", 3: "relay", 4: "bleed_release"}

# Registers: written by `main.py` between two slots, of no effect here.
mem32 = {}


class Pin:
    IN = 0
    OUT = 1
    PULL_UP = 1
    PULL_DOWN = 2

    def __init__(self, number, mode=IN, pull=None, value=None):
        self._name = OUTPUTS.get(number)
        if mode == self.OUT and value is not None:
            self.value(value)

    def value(self, level=None):
        # A steady level on the pulse pin keeps its AC-coupled driver off, whatever it is.
        if level is not None and self._name is not None:
            bus.call(self._name, 0 if self._name == "pulse" else level, 0)
        return level

    __call__ = value
