"""The hazards H1 to H21 as data: what is let go wrong, and what must come of it.

A row is one case. `hazard_plays.py` plays it on any rung; `test_hazards.py`, the chip's
`test_chip_hazards.py` and `python -m tests.bench safety` all take their cases from here. Limits
are those of DESIGN.md, in plant time; rows by the time at which a hazard comes are in
`hazards_before.py`, `hazards_charging.py` and `hazards_after.py`, what is easily told as something
else in `hazards_mistaken.py`.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

IN_PROCESS, MICROPYTHON, CHIP = "in-process", "micropython", "chip"
RUNGS = (IN_PROCESS, MICROPYTHON, CHIP)
OWN_PLANT = (IN_PROCESS, MICROPYTHON)
"""Where the plant can be told to act in the middle of one of the firmware's own calls."""

PIN_US = 2000
"""From what trips, or is heard, to the pin."""
SWITCH_US = 50
RELAY_US = 5000
"""What the parts of the plant take to break, from the pin."""

Change = tuple[str, Any]


@dataclass(frozen=True, kw_only=True)
class Case:
    """One thing that goes wrong. Times in us; where a field says nothing, its default does not."""

    hazard: int
    title: str
    injected: str
    """What is let go wrong, and when; with what the test does not show."""
    play: str = "sweep"
    """How it is played: a name in `PLAYS`."""
    rungs: tuple[str, ...] = RUNGS
    scenario: Mapping[str, Any] = field(default_factory=dict)
    profile: Mapping[str, Any] = field(default_factory=dict)
    before: tuple[Change, ...] = ()
    """Changed before the arming."""
    strikes: Change | None = None
    """Changed in mid-charge."""
    at_us: tuple[int, ...] = (5000,)
    """After the closing. In-process all of them are tried, elsewhere the first."""
    closes: bool = True
    """Whether the firmware commands the contact to close."""
    end_reason: str = ""
    """Of the sweep that is held afterwards; "": there is none."""
    told: tuple[str, ...] = ()
    """Patterns that the host's text must hold, all of them."""
    latched: bool = True
    """Whether it stays a fault until it is cleared."""
    pin_us: int | None = None
    """From what goes wrong to `pulse` 0, at most."""
    current_us: int | None = None
    """And to `conducting` 0."""
    runs_out: bool = False
    """The contact opens cold, within the predicted time of a charge and 30 % of it."""
    hot: int = 0
    """Openings under load, in the plant and in the logbook."""
    clear_while_wrong: str = ""
    """What comes of a clear before it is put right: "refused", "latches", "arming refused", "next
    sweep latches"; "": not asked."""
    mended: tuple[Change, ...] | None = ()
    """What puts it right; afterwards a sweep is sound. None: nothing that a test can change."""

    @property
    def name(self) -> str:
        return f"H{self.hazard} {self.title}"


H = {
    1: r"H1 capacitor still charged: .*, [\d.]+ V; expected at most 0\.\d+ V\. Next: keep away",
    2: r"H2 contact welded or switch shorted: .*, [\d.]+ V; expected at most 0\.\d+ V",
    4: r"H4 source above the rated voltage: the source's voltage is above the limit",
    5: r"H5 leads reversed: the comparator sees plus and minus swapped",
    6: r"H6 current above the rating: the current went above the limit, 2[01]\.\d+ A; "
    r"expected at most 20\.000 A\. Next: check that the source is a single PV source",
    7: r"H7 supervision stopped: the supervision did not advance .*Next: power the tracer off",
    10: r"H10 bleed resistor overheats",
    11: r"H11 sensor open, shorted or stuck: a channel does not read what it must",
    12: r"H12 lid or stop switch open: the stop loop is open.*Next: close the lid",
    14: r"H14 no valid profile: .*Next: store the profile of this board",
    15: r"H15 capacitor aged, wrong or reversed",
    19: r"H19 isolation not declared: above 60 V dc .*, 7\d\.\d+ V; expected at most 60\.000 V\. "
    r"Next: have the barrier tested and declare its rating and date",
    20: r"H20 source not confirmed to stand alone: .*Next: isolate battery, inverter and parallel",
}
"""What a person reads of a guard: its name, the measured value, the limit, what to do."""

ISOLATE = r"Next: LIVE: isolate at the disconnector, then replace the contact or the switch"
CHECK_SENSORS = r"Next: isolate the source, check sense leads, shunt amplifier and capacitor"

LEAK = {"permanent_bleeder_ohm": 2200.0}
"""A permanent bleeder that empties the capacitor in seconds, so that a test can wait for it."""
BARE = {"contact": "relay"}
BREAKS = {"contact_breaks_dc": True}
SLOW = {"capacitance_f": 10e-3}
"""70 ms of charge in full sun, most of it near Isc."""


def all_cases() -> tuple[Case, ...]:
    from .hazards_after import AFTER
    from .hazards_before import BEFORE
    from .hazards_charging import CHARGING
    from .hazards_mistaken import OFTEN_MISTAKEN

    return tuple(
        sorted((*BEFORE, *CHARGING, *AFTER, *OFTEN_MISTAKEN), key=lambda case: case.hazard)
    )


def cases_on(rung: str) -> tuple[Case, ...]:
    return tuple(case for case in all_cases() if rung in case.rungs)
