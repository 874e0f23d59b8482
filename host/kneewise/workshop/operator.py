"""Who does at the bench what a proof test asks for, and the words it is asked in."""

from __future__ import annotations

import textwrap
from collections.abc import Callable
from typing import Protocol

from kneewise.instrument.hands import Hands, Reading, Task

WIDTH = 98
SERIES_W = 25
"""Of the resistor in series with the bench supply; it carries its current for milliseconds."""

TASKS = {
    Task.DISCONNECT: "Switch the bench supply off, if it is on, and disconnect everything from the "
    "source terminals.",
    Task.CONNECT_SUPPLY: "Put a resistor of about {series_ohm:.0f} ohm, {series_w} W, in series "
    "with the supply: its output capacitor knows no current limit. Connect it, still off, plus to "
    "plus and minus to minus of the source terminals; then switch it on.",
    Task.OPEN_LOOP: "Open the lid, or press the stop switch, and leave it so.",
    Task.CLOSE_LOOP: "Close the lid and release the stop switch.",
    Task.SWAP_LEADS: "Switch the supply off, swap plus and minus at the source terminals, switch "
    "it on.",
    Task.LEADS_RIGHT: "Switch the supply off, put plus and minus right again, switch it on.",
    Task.PULL_POWER: "Leave the supply on. The tracer will now charge and bleed again and again; "
    "pull its USB plug, and any power of its own, at any moment.",
    Task.WAIT: "Keep the power away and the supply on for {seconds:.0f} s.",
    Task.GIVE_POWER: "Plug the tracer in again.",
}
READINGS = {
    Reading.SUPPLY_V: "Voltage of the bench supply, not connected yet, by your own meter",
    Reading.SUPPLY_A: "Current limit that the bench supply is set to",
    Reading.CAPACITOR_V: "Voltage across the capacitor now, by your own meter at its terminals",
}
UNITS = {Reading.SUPPLY_V: "V", Reading.SUPPLY_A: "A", Reading.CAPACITOR_V: "V"}


def wrapped(first: str, text: str) -> str:
    """For a terminal: `text` behind `first`, further lines below it."""
    return textwrap.fill(
        text,
        WIDTH,
        initial_indent=first,
        subsequent_indent=" " * len(first),
        break_on_hyphens=False,
    )


def series_ohm(voltage_v: float, current_a: float) -> float:
    """Of the resistor in series with a bench supply: no more than its current flows, ever."""
    return voltage_v / current_a


def words_of(task: Task, values: dict[str, float]) -> str:
    """What is asked for, with its values in it."""
    shown: dict[str, float] = {"series_w": SERIES_W, **values}
    if task == Task.CONNECT_SUPPLY:
        shown["series_ohm"] = series_ohm(values["voltage_v"], values["current_a"])
    return TASKS[task].format(**shown)


class Operator(Protocol):
    """Asked by a proof test; each call returns once it is done or answered."""

    who: str

    def do(self, task: Task, **values: float) -> None:
        """Do something at the bench."""

    def number(self, reading: Reading, low: float, high: float) -> float:
        """A reading from `low` to `high`, in V or A."""

    def confirm(self, statement: str) -> bool:
        """Is it so?"""

    def tell(self, text: str) -> None:
        """Hear how far the test has come."""


class EmulatedOperator:
    """Does it by the hands of an emulated bench, and says what was asked."""

    who = "emulated operator"

    def __init__(self, hands: Hands, tell: Callable[[str], None] = lambda text: None) -> None:
        self._hands = hands
        self.tell = tell

    def do(self, task: Task, **values: float) -> None:
        self.tell(wrapped("  asked  ", words_of(task, values)))
        self._hands.do(task, values)

    def number(self, reading: Reading, low: float, high: float) -> float:
        value = self._hands.read(reading)
        self.tell(f"  asked  {READINGS[reading]} ({low:g} to {high:g} {UNITS[reading]})")
        self.tell(f"  said   {value:.2f} {UNITS[reading]}")
        return value

    def confirm(self, statement: str) -> bool:
        self.tell(wrapped("  asked  ", statement))
        self.tell("  said   yes")
        return True
