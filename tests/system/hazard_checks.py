"""What the plays of the hazards have in common: the pieces that they are made of, and what is asked
of a tracer in the end. An AssertionError says what does not hold.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable
from dataclasses import dataclass

from kneewire import framing
from kneewire.catalogue import STATES
from kneewire.messages import pack
from kneewise.errors import KneewiseError
from kneewise.instrument.arming import Asked, arm
from kneewise.instrument.full_rate import NO_WINDOW
from kneewise.instrument.status import fault_of
from kneewise.instrument.trace import Trace
from kneewise.instrument.tracer import Tracer

from .hazard_world import World
from .hazards import CHIP, Case, Change

SLICE_US = 1000  # of what was measured last: a slice, and what a bin holds
SWEEP = Asked()
SWEEP_ID = bytes(range(16))
RAN_OUT = 1.3


@dataclass(frozen=True, slots=True)
class Found:
    """What a case has shown; latencies from what went wrong, None where there was no charge."""

    pin_us: int | None = None
    current_us: int | None = None
    of_bound: float | None = None
    """Closed for so much of the time that a bare relay may be, where that is asked."""


# -- pieces of a play -------------------------------------------------------------------------


def change(world: World, changes: Iterable[Change]) -> None:
    for what, value in changes:
        world.change(what, value)


def said(action: Callable[[], object]) -> str:
    """What a person reads of it, "" where nothing is wrong."""
    try:
        action()
    except KneewiseError as error:
        return str(error)
    return ""


def bled(tracer: Tracer) -> None:
    """Safe; a fault is raised as soon as it is latched. The bleed resistor may be hot."""
    session = tracer._session
    session.abort()
    while (state := STATES[(message := session.request("status"))["state"]]) != "safe":
        if state == "fault":
            raise fault_of(message)
        session.port.sleep(0.02)


def rested(world: World, tracer: Tracer) -> None:
    """Safe, and the bleed resistor cool enough for a sweep."""
    bled(tracer)
    world.let_pass(tracer.status().rest_s + 0.05, turn_us=1_000_000)


def fire(tracer: Tracer, asked: Asked = SWEEP) -> None:
    """As a sweep does, without waiting for what comes of it."""
    token, _ = arm(tracer._session, asked, NO_WINDOW, True)
    tracer._session.request("fire", {"token": token, "sweep_id": SWEEP_ID})


def frame(tracer: Tracer, name: str, sequence: int) -> bytes:
    body = pack(name, tracer._session.session, sequence)
    return framing.DELIMITER + framing.encode(body, toward_device=True)


def in_mid_charge(world: World, tracer: Tracer, at_us: int, action: Callable[[], float]) -> float:
    """Fire, and do this so long after the closing; when it says that it was (us)."""
    if world.rung != CHIP:
        moments: list[float] = []
        world.on_mishap(lambda: moments.append(action()))
        world.after_closing(at_us, "link_cut", 0)
        fire(tracer)
        tracer._session.wait_notice("charge_ended", 5.0)
        return moments[0]
    fire(tracer)
    while not world.closings():
        world.let_pass(0.001)
    world.let_pass((world.closings()[0] + at_us - world.now_us) / 1e6)
    moment_us = action()
    tracer._session.wait_notice("charge_ended", 5.0)
    return moment_us


# -- what is asked in the end -----------------------------------------------------------------


def check_told(case: Case, text: str) -> None:
    for pattern in case.told:
        assert re.search(pattern, text), f"{pattern!r} is not in: {text}"
    assert case.told or not text, f"nothing was to be told, but: {text}"


def check_contact(case: Case, world: World, event_us: float | None = None) -> Found:
    """What the contact did, and how long after the event."""
    commanded = [entry for entry in world.record() if entry[1:] in (("relay", 1), ("pulse", 1))]
    if not case.closes:
        assert not commanded
        return Found()
    assert commanded
    if not world.scenario.board.contact_welded:
        assert case.hazard == 2 or world.together_us() == 0, "contact and bleed together"
    assert len(world.hot_openings) == case.hot, world.hot_openings
    if case.runs_out:
        return Found(of_bound=check_ran_out(world))
    if case.current_us is None:
        return Found()
    assert event_us is not None
    pin_us = world.after(event_us, "pulse", 0, None)
    current_us = world.after(event_us, "conducting", 0)
    assert case.pin_us is None or pin_us <= case.pin_us, pin_us
    assert current_us <= case.current_us, current_us
    return Found(pin_us, current_us)


MEASURED_US = 1500  # the current, from which the time is predicted


def check_ran_out(world: World) -> float:
    """A bare relay is told to open when the predicted time and 30 % of it have passed since it
    closed, at the latest; how much of that it was.
    """
    (began_us,) = [us for us, level in world.at("pulse") if level == 1]
    operate_us = 1000 * world.profile.timing.relay_operate_ms
    bound_us = operate_us + MEASURED_US + RAN_OUT * world.predicted_us()
    of_bound = world.after(began_us, "pulse", 0) / bound_us
    assert of_bound <= 1.0, of_bound
    return of_bound


def check_trace(case: Case, trace: Trace | None, lasted_us: float = 0.0) -> None:
    """The held sweep has come whole: its knots, its pairs, its CRC, up to what ended it."""
    if not case.end_reason:
        assert trace is None
        return
    assert trace is not None
    assert trace.end_reason == case.end_reason
    integrity = trace.integrity
    assert integrity.manifest_crc_ok
    assert len(trace.raw) == integrity.knots >= 16
    pairs = int(trace.raw.pairs.sum())
    assert pairs == integrity.pairs
    assert pairs * trace.profile["pair_us"] >= lasted_us - SLICE_US


def check_safe(case: Case, world: World) -> None:
    """Contact open, bleed engaged; in H2 the bleed may have been let go."""
    assert case.hazard == 2 or not world.conducting
    assert case.hazard == 2 or world.bleed_engaged


def check_logbook(case: Case, tracer: Tracer) -> None:
    assert tracer.logbook().hot_openings == case.hot


def latched(tracer: Tracer) -> bool:
    return tracer.status().state == "fault"


def check_clearing(case: Case, world: World, tracer: Tracer) -> None:
    """A fault stays until it is cleared, and a clear does not help while it is still wrong."""
    assert latched(tracer) == case.latched
    if case.latched:
        world.let_pass(1.0)
        assert latched(tracer), "cleared by itself"
        check_told(case, said(lambda: bled(tracer)))
    if case.clear_while_wrong:
        check_clear_while_wrong(case, world, tracer)
    if case.mended is None:
        return
    before = latched(tracer)
    change(world, case.mended)
    if before:
        world.let_pass(0.5)
        assert latched(tracer), "cleared by itself"
        cleared(world, tracer)
    rested(world, tracer)
    assert tracer.sweep().sound


def check_clear_while_wrong(case: Case, world: World, tracer: Tracer) -> None:
    what = case.clear_while_wrong
    guard = rf"found .*H{case.hazard} "
    if what == "refused":
        assert re.search(guard, said(tracer.clear_fault))
        return
    cleared(world, tracer)
    if what == "latches":
        world.let_pass(3.0)
    else:
        rested(world, tracer)
        text = said(tracer.sweep) or said(lambda: bled(tracer))
        assert re.search(guard if what != "arming refused" else "found H", text), text
    assert latched(tracer) == (what != "arming refused")


def cleared(world: World, tracer: Tracer) -> None:
    """A welded contact keeps its fault until the bleed has cooled."""
    for _ in range(20):
        text = said(tracer.clear_fault)
        if not text:
            return
        assert "found H10" in text
        world.let_pass(1.0)
    raise AssertionError("the bleed does not cool")


def swept(tracer: Tracer) -> tuple[Trace | None, str]:
    """The sweep, and what is told with it or afterwards."""
    trace, text = None, ""
    try:
        trace = tracer.sweep()
    except KneewiseError as error:
        text = str(error)
    return trace, text or said(lambda: bled(tracer))
