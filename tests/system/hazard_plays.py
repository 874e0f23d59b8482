"""How a case of `hazards.py` is played on a tracer.

`prove` plays one case on a world of its own and returns what was measured; an AssertionError says
what does not hold. What is asked of requests alone is in `hazard_requests.py`.
"""

from __future__ import annotations

import contextlib
import re
from collections.abc import Callable

from kneewise.errors import KneewiseError, OutcomeUnknownError
from kneewise.instrument.arming import Asked
from kneewise.instrument.tracer import Tracer

from .hazard_checks import (
    SWEEP_ID,
    Found,
    bled,
    change,
    check_clearing,
    check_contact,
    check_logbook,
    check_safe,
    check_told,
    check_trace,
    cleared,
    fire,
    frame,
    in_mid_charge,
    latched,
    rested,
    said,
    swept,
)
from .hazard_requests import REQUESTS
from .hazard_world import World, bleed_s
from .hazards import CHIP, IN_PROCESS, MICROPYTHON, Case

BACK_AFTER_S = 0.05
WELDED_S = {IN_PROCESS: 600.0, MICROPYTHON: 20.0, CHIP: 10.0}
"""Of a steady weld, plant time: ten minutes where they do not take ten."""
FIRST_S = 4.0  # of it, in which the bleed is let go
SEEN_S = 0.06  # until a live source is seen: the bleed's contact, and three looks
LATE_S = 0.1  # between two looks in a fault
BUSY_S = 2.0  # the same, where looks follow the clock of a machine that may be busy


def prove(case: Case, rung: str, at_us: int = 0) -> Found:
    """Play it, `at_us` after the closing where the case does not say so alone."""
    world = World(rung, case.scenario, case.profile)
    try:
        return PLAYS[case.play](case, world, at_us or case.at_us[0])
    finally:
        world.close()


def sweep(case: Case, world: World, at_us: int) -> Found:
    """A sweep through it; where nothing strikes, the time counts from the closing."""
    tracer = world.tracer()
    rested(world, tracer)
    change(world, case.before)
    if case.strikes is not None:
        world.after_closing(at_us, *case.strikes)
    trace, text = swept(tracer)
    event_us = None
    if case.strikes is not None:
        event_us = world.at(f"event:{case.strikes[0]}")[0][0]
        assert abs(event_us - world.closings()[0] - at_us) <= 1
    elif world.closings():
        event_us = world.closings()[0]
    found = check_contact(case, world, event_us)
    check_told(case, text)
    check_trace(case, trace, at_us if case.strikes is not None else 0)
    check_safe(case, world)
    check_logbook(case, tracer)
    check_clearing(case, world, tracer)
    return found


def found_at_start(case: Case, world: World, at_us: int) -> Found:
    """Nothing is asked of it: the fault is there."""
    tracer = world.tracer()
    world.let_pass(1.0)
    check_told(case, said(lambda: bled(tracer)))
    check_contact(case, world)
    check_safe(case, world)
    check_clearing(case, world, tracer)
    return Found()


def bled_first(case: Case, world: World, at_us: int) -> Found:
    """What was found on the capacitor has gone through the bleed before anything closes."""
    tracer = world.tracer()
    bled(tracer)
    start_v = world.scenario.bank.capacitor_start_v
    stored_j = 0.5 * world.profile.capacitor.capacitance_f * start_v**2
    assert world.bleed_j >= 0.95 * stored_j
    assert not world.closings()
    check_trace(case, tracer.sweep())
    return check_contact(case, world)


def welded(case: Case, world: World, at_us: int) -> Found:
    """A weld in mid-charge, told as live, and the bleed in it."""
    tracer = world.tracer()
    rested(world, tracer)
    world.after_closing(at_us, *case.strikes)
    before_j = world.bleed_j
    room_j = world.profile.bleed.energy_j - tracer.status().bleed_heat_j
    trace, text = swept(tracer)
    check_told(case, text)
    check_trace(case, trace, at_us)
    status = tracer.status()
    assert not status.bleed_engaged, "the bleed was not let go"
    assert abs(status.capacitor_v - world.capacitor_v) < 0.5
    assert status.capacitor_v > 0.95 * world.open_v()
    if status.bleed_heat_j >= world.profile.bleed.energy_j:
        assert re.search(r"found H10 .*; expected at most 40000 mJ", said(tracer.clear_fault))
    late_s = BUSY_S if world.rung == "micropython" else LATE_S
    assert world.bleed_j - before_j <= room_j + live_w(world) * (SEEN_S + late_s)
    check_logbook(case, tracer)
    change(world, case.mended)
    while not world.bleed_engaged:
        world.let_pass(0.5)
    assert latched(tracer), "cleared by itself"
    cleared(world, tracer)
    rested(world, tracer)
    assert tracer.sweep().sound
    return Found()


def welded_for_minutes(case: Case, world: World, at_us: int) -> Found:
    """What the resistor takes of a steady weld, from what its account says at the beginning."""
    tracer = world.tracer()
    room_j = max(world.profile.bleed.energy_j - tracer.status().bleed_heat_j, 0.0)
    spent_j = spent_on_a_weld(world)
    check_told(case, said(lambda: bled(tracer)))
    check_contact(case, world)
    assert not world.bleed_engaged
    assert spent_j <= world.profile.bleed.energy_j
    # Elsewhere the firmware takes its time to start, with the bleed across the source.
    assert world.rung != IN_PROCESS or spent_j <= room_j + live_w(world) * SEEN_S
    return Found()


def spent_on_a_weld(world: World) -> float:
    """What the bleed has truly taken in the end (J), since the tracer had power."""
    world.let_pass(FIRST_S, turn_us=10_000)
    world.let_pass(WELDED_S[world.rung] - FIRST_S, turn_us=1_000_000)
    return world.bleed_j


def live_w(world: World) -> float:
    """In the bleed, with the source across it."""
    return world.open_v() ** 2 / world.profile.bleed.ohm


def dead_times(case: Case, world: World, at_us: int) -> Found:
    tracer = world.tracer()
    check_trace(case, tracer.sweep())
    bled(tracer)
    least_us = 1000 * world.profile.timing.dead_time_ms
    times_us = world.dead_times_us()
    assert len(times_us) == 2
    assert min(times_us) >= least_us, times_us
    check_safe(case, world)
    return check_contact(case, world)


def silent(case: Case, world: World, at_us: int) -> Found:
    """The host goes away after the fire, and comes back for what was kept."""
    tracer = world.tracer()
    rested(world, tracer)
    fire(tracer)
    session = tracer._session
    assert session.wait_notice("charge_ended", 10.0) is not None
    event_us = next(us for us, level in world.at("pulse") if level == 1) + at_us
    found = check_contact(case, world, event_us)
    trace = tracer.held()
    check_trace(case, trace, at_us - 1e4)
    check_safe(case, world)
    check_logbook(case, tracer)
    check_clearing(case, world, tracer)
    return found


def struck_by_hand(
    action: Callable[[World, Tracer], Callable[[], float]],
) -> Callable[[Case, World, int], Found]:
    """A play in which something is done in mid-charge that is no mishap of the plant."""

    def play(case: Case, world: World, at_us: int) -> Found:
        tracer = world.tracer()
        rested(world, tracer)
        event_us = in_mid_charge(world, tracer, at_us, action(world, tracer))
        trace = tracer.held()
        found = check_contact(case, world, event_us)
        check_trace(case, trace, at_us)
        check_told(case, said(lambda: bled(tracer)))
        check_safe(case, world)
        check_logbook(case, tracer)
        if case.hazard == 16:
            tracer = over_power_cycle(world, tracer)
            check_logbook(case, tracer)
        check_clearing(case, world, tracer)
        return found

    return play


def over_power_cycle(world: World, tracer: Tracer) -> Tracer:
    tracer.close()
    world.power(False)
    world.power(True)
    return world.tracer()


def hang(case: Case, world: World, at_us: int) -> Found:
    """The proof test's exercise; then what the watchdog's reset leaves."""
    tracer = world.tracer()
    bled(tracer)
    asked = Asked(exercise="hang while closed", limit_s=0.5)
    told = ""
    try:
        tracer.connection.after_fire(SWEEP_ID, lambda: hung(tracer, asked), lambda: None)
    except OutcomeUnknownError as error:
        told = str(error)
    check_told(case, told)
    event_us = next(us for us, level in world.at("pulse") if level == 1) + 2000
    found = check_contact(case, world, event_us)
    bled(tracer)
    check_safe(case, world)
    assert tracer.device["reset_cause"] == 3
    assert not tracer.status().held_sweep
    world.change("source", {"photocurrent_a": 9.2})
    rested(world, tracer)
    assert tracer.sweep().sound
    return found


def hung(tracer: Tracer, asked: Asked) -> None:
    fire(tracer, asked)
    tracer._session.wait_quiet(20.0, SWEEP_ID)
    tracer.status()


def lost_power(case: Case, world: World, tracer: Tracer, at_us: int) -> int:
    """Until the board is dead in mid-charge; when that was."""
    assert case.strikes is not None
    world.after_closing(at_us, *case.strikes)
    with contextlib.suppress(KneewiseError):
        fire(tracer)
        tracer._session.wait_notice("charge_ended", 0.3)
        tracer.status()
    world.wait_unpowered()
    return world.at("event:power_off")[0][0]


def brown_out(case: Case, world: World, at_us: int) -> Found:
    tracer = world.tracer()
    rested(world, tracer)
    event_us = lost_power(case, world, tracer, at_us)
    world.let_pass_unpowered(BACK_AFTER_S)
    world.power(True)
    told = said(lambda: tracer.connection.after_fire(SWEEP_ID, tracer.status, lambda: None))
    told = told or said(
        lambda: (tracer.connection.rejoin(), tracer.connection._same_sweep(-1, SWEEP_ID))
    )
    check_told(case, told)
    status = tracer.status()
    assert status.state == "bleeding"
    assert not status.held_sweep
    assert abs(status.capacitor_v - world.capacitor_v) < 2.0
    assert status.capacitor_v > 1.0
    assert tracer.device["reset_cause"] == 1
    found = check_contact(case, world, event_us)
    check_safe(case, world)
    rested(world, tracer)
    assert tracer.sweep().sound
    return found


def power_lost(case: Case, world: World, at_us: int) -> Found:
    """No power, and none comes back: what wiring alone must do, and in what time."""
    tracer = world.tracer()
    rested(world, tracer)
    event_us = lost_power(case, world, tracer, at_us)
    world.let_pass_unpowered(0.02)
    found = check_contact(case, world, event_us)
    check_safe(case, world)
    undriven = {what: level for _, what, level in world.record()}
    assert {undriven[what] for what in ("relay", "bleed_release", "pulse", "zero_input")} == {None}
    bank = world.profile.capacitor
    bled_by = bank.permanent_bleeder_ohm
    if not world.scenario.board.bleed_open:
        bled_by = 1 / (1 / bled_by + 1 / world.profile.bleed.ohm)
    stated_s = bleed_s(bled_by, bank.capacitance_f, world.open_v(), world.profile.limits.safe_v)
    assert world.capacitor_v > world.profile.limits.safe_v
    world.let_pass_unpowered(stated_s)
    assert world.capacitor_v < world.profile.limits.safe_v
    return found


PLAYS: dict[str, Callable[[Case, World, int], Found]] = {
    "sweep": sweep,
    "found": found_at_start,
    "bled first": bled_first,
    "weld": welded,
    "welded for minutes": welded_for_minutes,
    "dead times": dead_times,
    "silent": silent,
    "supervision": struck_by_hand(lambda world, tracer: world.stop_supervision),
    "abort": struck_by_hand(lambda world, tracer: lambda: world.say(frame(tracer, "abort", 0))),
    "hang": hang,
    "brown-out": brown_out,
    "power lost": power_lost,
    **REQUESTS,
}
