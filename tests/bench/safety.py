"""The numbers of safety: how fast a hazard is answered, and what a weld leaves in the bleed.

Every case of tests/system/hazards.py is played, in plant time; a case that fails has no latency,
and is missing in the count. Without `--quick` on every rung that is there, each moment that a case
names; with it in-process, one moment each.
"""

from __future__ import annotations

import sys
from collections.abc import Iterator

from kneewise.emulator import chip, process

from ..system.hazard_checks import Found
from ..system.hazard_plays import prove, spent_on_a_weld
from ..system.hazard_world import World
from ..system.hazards import CHIP, IN_PROCESS, MICROPYTHON, Case, cases_on
from .row import Row

ALLOWANCE_J = 40.0
COOL_S = (5.0, 5.03, 5.07)
"""After a reset the resistor is cool by then; at other times between two looks of the firmware."""


def rows(quick: bool) -> Iterator[Row]:
    yield from energy()
    for rung in rungs(quick):
        yield from cases(rung, quick)


def rungs(quick: bool) -> Iterator[str]:
    yield IN_PROCESS
    if not quick and process.available():
        yield MICROPYTHON
    if not quick and not chip.missing():
        yield CHIP


# -- energy ----------------------------------------------------------------------------------------


def energy() -> Iterator[Row]:
    """In the bleed resistor, ten minutes of a contact that stays welded."""
    name = "welded for 10 minutes, {}: in the bleed"
    worst = max(spent(cool_s) for cool_s in COOL_S)
    yield Row(name.format("cool"), worst, "J", ALLOWANCE_J, at_least=False)
    yield Row(name.format("just after a reset"), spent(0.0), "J", ALLOWANCE_J, at_least=False)


def spent(cool_s: float) -> float:
    """By a weld that comes so long after the reset; 0: it was there before."""
    world = World(IN_PROCESS, {"board": {"contact_welded": not cool_s}})
    try:
        assert world.profile.bleed.energy_j == ALLOWANCE_J
        if cool_s:
            world.let_pass(cool_s)
            world.change("weld")
        return spent_on_a_weld(world)
    finally:
        world.close()


# -- cases -----------------------------------------------------------------------------------------


def cases(rung: str, quick: bool) -> Iterator[Row]:
    played = cases_on(rung)
    passed = 0
    for case in played:
        moments = case.at_us if rung == IN_PROCESS and not quick else case.at_us[:1]
        try:
            found = [prove(case, rung, at_us) for at_us in moments]
        except Exception as error:  # whatever it is, the others are to be seen
            print(f"{case.name}, {rung}: {error or type(error).__name__}", file=sys.stderr)
            continue
        passed += 1
        yield from latencies(case, rung, found)
    yield Row(f"cases passed, {rung}", passed, "cases", len(played), at_least=True)


def latencies(case: Case, rung: str, found: list[Found]) -> Iterator[Row]:
    """The worst of all moments; for a bare relay that runs out, of the time that it may take."""
    name = f"{case.name}, {rung}"
    if case.pin_us is not None:
        worst = max(one.pin_us or 0 for one in found)
        yield Row(f"{name}: to the pin", worst, "us", case.pin_us, at_least=False)
    if case.current_us is not None:
        worst = max(one.current_us or 0 for one in found)
        yield Row(f"{name}: to no current", worst, "us", case.current_us, at_least=False)
    if case.runs_out:
        share = max(one.of_bound or 0.0 for one in found)
        yield Row(f"{name}: of its time", share, "1", 1.0, at_least=False)
