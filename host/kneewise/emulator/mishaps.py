"""What goes wrong on a test's word: at once, or a set time after the source begins to conduct.

Comes in: what is to happen, by name, and when the path closes. Goes out: what is due. What each
does to the board is in `board.py`, and for the emulated chip in plant.mjs beside it.

    what            value
    power_off       1: the board loses power; 0: it has it again
    stop_loop       1: the loop opens; 0: it closes
    weld            1: both contacts conduct, whatever is commanded; 0: they are free again
    switch_short    likewise the series switch alone
    bleed_open      1: the bleed resistor is not in circuit; 0: it is
    bleed_short     1: a thousandth of it is left; 0: it is whole
    leads_swapped   1: plus and minus are swapped at the terminals; 0: they are right
    source          keys of a scenario's [source] that change
    voltage_stuck   the 12-bit code that this channel reads from now on; None: it measures again
    current_stuck, capacitor_stuck
    link_cut        1: the cable to the host is pulled
"""

from __future__ import annotations

import heapq
from collections.abc import Mapping
from typing import Any

Value = int | Mapping[str, Any] | None

CIRCUIT = {
    "weld": "contact_welded",
    "switch_short": "switch_shorted",
    "bleed_open": "bleed_open",
    "bleed_short": "bleed_shorted",
    "leads_swapped": "leads_reversed",
}
"""Fields of `Circuit`."""
STUCK = {"voltage_stuck": 0, "current_stuck": 1, "capacitor_stuck": 2}
"""Numbers of channels."""
KINDS = (*CIRCUIT, *STUCK, "power_off", "stop_loop", "source", "link_cut")


def check(what: str, value: Value, delay_us: int = 0) -> None:
    """ValueError for what cannot happen."""
    if what not in KINDS:
        raise ValueError(f"nothing is called {what!r}; there are {', '.join(KINDS)}")
    if delay_us < 0:
        raise ValueError(f"{delay_us} us after a closing lies before it")
    if what == "source":
        fits, expected = isinstance(value, Mapping), "a dict of keys of [source]"
    elif what in STUCK:
        fits = value is None or (isinstance(value, int) and 0 <= value <= 4095)
        expected = "a code from 0 to 4095, or None"
    else:
        fits, expected = value in (0, 1), "0 or 1"
    if not fits:
        raise ValueError(f"{what} was given {value!r}; expected {expected}")


def undoes(what: str, value: Value) -> bool:
    """True where this puts right what went wrong before."""
    return value is None if what in STUCK else what != "source" and not value


class Mishaps:
    """What waits for a closing, and what is due at a time since one; each happens once."""

    def __init__(self) -> None:
        self._waiting: list[tuple[int, str, Any]] = []
        self._due: list[tuple[int, int, str, Any]] = []
        self._count = 0

    def after_closing(self, delay_us: int, what: str, given: Any) -> None:
        """`given` is handed out with it."""
        self._waiting.append((delay_us, what, given))

    @property
    def waiting(self) -> bool:
        """True where the next closing must not be passed over."""
        return bool(self._waiting)

    @property
    def next_us(self) -> int | None:
        return self._due[0][0] if self._due else None

    def closed(self, now_us: int) -> None:
        """The source has begun to conduct."""
        for delay_us, what, given in self._waiting:
            self._count += 1
            heapq.heappush(self._due, (now_us + delay_us, self._count, what, given))
        self._waiting.clear()

    def take(self, now_us: int) -> list[tuple[str, Any]]:
        """What is due by now, in its order."""
        taken = []
        while self._due and self._due[0][0] <= now_us:
            taken.append(heapq.heappop(self._due)[2:])
        return taken

    def power_is_gone(self) -> None:
        """A loss of power that has not come yet will not come any more."""
        self._due = [entry for entry in self._due if entry[2] != "power_off"]
        heapq.heapify(self._due)
