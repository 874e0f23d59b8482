"""Walks a PIO program instruction by instruction, from the firmware's own source, on CPython.

`spi_program` gives the program of `tracer/spi_pair.py` for a plan of `tracer/spi_timing.py`;
`Walk` executes it beside two converters. It knows the instructions that this program uses, as
the RP2040 datasheet (chapter 3.4) describes them, and nothing else.
"""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator
from types import FunctionType, ModuleType, SimpleNamespace
from typing import Any

from kneewise.emulator.firmware import firmware_module

timing = firmware_module("tracer.spi_timing")

LONG_AGO = -1_000_000_000
SYNC_CYCLES = 2  # of the system clock, from a pin to what an instruction reads
MASK = 0xFFFFFFFF


class Step:
    """One instruction with its side-set level and delay."""

    def __init__(self, name: str, *operands: Any) -> None:
        self.name, self.operands = name, operands
        self.level = 0
        self.delay = 0

    def side(self, level: int) -> Step:
        self.level = level
        return self

    def __getitem__(self, delay: int) -> Step:
        assert 0 <= delay <= 15, "four bits are left for the delay beside one side-set pin"
        self.delay = delay
        return self


class Program:
    """What `asm_pio` makes of a function: steps, places of labels, the wrap."""

    def __init__(self, function: Callable[[], None], how: dict[str, Any]) -> None:
        self.how = how
        self.steps: list[Step] = []
        self.labels: dict[str, int] = {}
        self.wrap_target = 0
        self.wrap = 0
        names = ("pins", "x", "y", "isr", "osr", "null", "x_dec", "not_osre", "noblock")
        scope: dict[str, Any] = {name: name for name in names}
        scope |= {name: self._maker(name) for name in ("set", "jmp", "mov", "out", "push", "nop")}
        scope["in_"] = self._maker("in")
        scope["reverse"] = lambda source: ("reverse", source)
        scope["label"] = lambda name: self.labels.update({name: len(self.steps)})
        scope["wrap_target"] = lambda: setattr(self, "wrap_target", len(self.steps))
        scope["wrap"] = lambda: setattr(self, "wrap", len(self.steps) - 1)
        FunctionType(function.__code__, scope, closure=function.__closure__)()

    def _maker(self, name: str) -> Callable[..., Step]:
        def make(*operands: Any) -> Step:
            self.steps.append(Step(name, *operands))
            return self.steps[-1]

        return make


def _spi_pair() -> Any:
    """The module, with nothing behind its registers."""
    machine: Any = ModuleType("machine")
    machine.Pin = SimpleNamespace
    rp2: Any = ModuleType("rp2")
    rp2.PIO = SimpleNamespace(OUT_LOW=0, SHIFT_LEFT="left", SHIFT_RIGHT="right", JOIN_RX="rx")
    rp2.asm_pio = lambda **how: lambda function: Program(function, how)
    before = {name: sys.modules.get(name) for name in ("machine", "rp2")}
    sys.modules |= {"machine": machine, "rp2": rp2}
    try:
        return firmware_module("tracer.spi_pair")
    finally:
        for name, module in before.items():
            del sys.modules[name]
            if module is not None:
                sys.modules[name] = module


spi_pair = _spi_pair()


def spi_program(plan: tuple[int, ...]) -> Program:
    _, high, low, hold, quiet = plan
    made: Program = spi_pair._program(high, low, timing.loop(hold), timing.loop(quiet))
    return made


class Walk:
    """The program beside two converters, for as long as `words` last: (v, i) for each sampling.

    Times are in system cycles from the start. A data line shows the wrong level until
    `valid` cycles after the edge that asks for a bit, and its old bit until that edge.
    """

    def __init__(self, plan: tuple[int, ...], words: list[tuple[int, int]], valid: int) -> None:
        self.program = spi_program(plan)
        self.divider = plan[0]
        self.words = words
        self.valid = valid
        self.rises: list[int] = []
        self.falls: list[int] = []
        self.clock_falls: list[int] = []
        self.clock_rises: list[int] = []
        self.pushed: list[int] = []
        self._codes = (0, 0)
        self._left = -1
        self._old = self._new = 0b11
        self._changed = LONG_AGO
        self._select = self._clock = 0

    # -- the converters ---------------------------------------------------------------------

    def _show(self, bit: int, now: int) -> None:
        self._left = bit
        self._old, self._changed = self._new, now
        v, i = self._codes
        self._new = 0b11 if bit < 0 else (v >> bit & 1) | (i >> bit & 1) << 1

    def _pins(self, now: int) -> int:
        seen = now - SYNC_CYCLES
        if seen < self._changed:
            return self._old
        return self._new ^ (0b11 if seen < self._changed + self.valid else 0)

    def _set_select(self, level: int, now: int) -> None:
        if level and not self._select:
            self._codes = self.words[len(self.rises)]
            self.rises.append(now)
            self._show(-1, now)
        elif self._select and not level:
            self.falls.append(now)
            self._show(15, now)
        self._select = level

    def _set_clock(self, level: int, now: int) -> None:
        if level and not self._clock:
            self.clock_rises.append(now)
        elif self._clock and not level:
            self.clock_falls.append(now)
            self._show(max(self._left, 0) - 1, now)
        self._clock = level

    # -- the state machine ------------------------------------------------------------------

    def run(self) -> Walk:
        """Until the words are used up."""
        for now, step in self._steps():
            self._set_clock(step.level, now)
        return self

    def _steps(self) -> Iterator[tuple[int, Step]]:
        """Each step's time; its side-set is applied after its inputs have been read."""
        assert self.program.how["in_shiftdir"] == "left"
        assert self.program.how["out_shiftdir"] == "right"
        x = y = isr = osr = 0
        out_count = 32
        place = now = 0
        while True:
            step = self.program.steps[place]
            target = self.program.wrap_target if place == self.program.wrap else place + 1
            match step.name, step.operands:
                case "set", ("pins", 1) if len(self.rises) == len(self.words):
                    return
                case "set", ("pins", level):
                    self._set_select(level, now)
                case "set", ("x", value):
                    assert 0 <= value <= 31
                    x = value
                case "jmp", (label,):
                    target = self.program.labels[label]
                case "jmp", ("x_dec", label):
                    target = self.program.labels[label] if x else target
                    x = (x - 1) & MASK
                case "jmp", ("not_osre", label):
                    target = self.program.labels[label] if out_count < 32 else target
                case "mov", ("y", ("reverse", "isr")):
                    y = int(f"{isr:032b}"[::-1], 2)
                case "mov", ("osr", "y"):
                    osr, out_count = y, 0
                case "in", ("osr", 1):
                    isr = (isr << 1 | osr & 1) & MASK
                case "in", ("pins", 2):
                    isr = (isr << 2 | self._pins(now)) & MASK
                case "out", ("null", count):
                    osr, out_count = osr >> count, min(out_count + count, 32)
                case "push", ("noblock",):
                    self.pushed.append(isr)
                    isr = 0
                case "nop", ():
                    pass
                case _:
                    raise AssertionError(f"{step.name} {step.operands} is not known here")
            yield now, step
            now += (1 + step.delay) * self.divider
            place = target
