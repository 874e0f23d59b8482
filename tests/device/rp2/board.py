"""The firmware's board file on the modelled chip: a `Board` for each check.

`loader` imports the firmware's modules with the modules of the board that it is given: on CPython
`from_text.py`, on MicroPython `on_micropython.py`.
"""

import os
from array import array

from fake_machine import FakeGc, FakeMachine, FakeMicropython, FakeTime
from fake_rp2 import FakeRp2, Named, Serial, streams
from memory_model import Uctypes
from pointers import pointers
from rp2040_model import Rp2040


class Board:
    """`chip` the chip, `hal` the firmware's object, `serial` the link; `module` any file of it.

    `before(chip)` is called before the firmware starts.
    """

    def __init__(self, loader, before=None, heap=None):
        self.loader = loader
        self.chip = Rp2040()
        self.serial = Serial(self.chip.clock)
        self.heap = heap
        if before is not None:
            before(self.chip)
        self.start()

    def start(self):
        """Import all of the firmware anew and make the board's object."""
        chip = self.chip
        self.micropython = FakeMicropython()
        self.gc = FakeGc(self.micropython)
        sys, select = streams(self.serial)
        fakes = {
            "machine": FakeMachine(chip),
            "rp2": FakeRp2(chip),
            "micropython": self.micropython,
            "uctypes": Uctypes(chip.memory),
            "time": FakeTime(chip),
            "gc": self.gc,
            "sys": sys,
            "select": select,
            "os": Named(urandom=os.urandom),
            "array": Named(array=array),
        }
        self.machine = fakes["machine"]
        self.loader.begin(fakes, pointers(chip.bus), self.heap)
        self.hal = self.module("hal_rp2").Hal()

    def module(self, name):
        return self.loader.load(name)

    def soft_reset(self):
        self.chip.soft_reset()
        self.start()

    # -- time ------------------------------------------------------------------------------

    def pass_us(self, us):
        """The processor waits; interrupts come."""
        self.chip.clock.sleep(1000 * us)

    def us(self):
        return self.chip.clock.now_ns / 1000
