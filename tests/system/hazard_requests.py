"""Plays of hazards that lie in what is asked of a tracer, and when: tokens, sessions, profiles."""

from __future__ import annotations

import contextlib
import re
from collections.abc import Callable

from kneewire import framing
from kneewire.messages import pack
from kneewise.errors import KneewiseError, LinkError
from kneewise.instrument.arming import Asked, arm
from kneewise.instrument.connection import COOL_S
from kneewise.instrument.full_rate import NO_WINDOW
from kneewise.instrument.tracer import Tracer

from .hazard_checks import (
    SWEEP_ID,
    Found,
    bled,
    check_clearing,
    check_contact,
    check_logbook,
    check_safe,
    check_told,
    check_trace,
    frame,
    in_mid_charge,
    latched,
    rested,
    said,
    swept,
)
from .hazard_world import World
from .hazards import CHIP, Case

LOOK_S = 0.2  # a tracer that is safe looks at its capacitor by then
OTHER_BOARD = b"\x11" * 8
CTRL_C, CTRL_D = b"\x03", b"\x04"
STUCK = b"from machine import Pin; Pin(3, Pin.OUT, value=1); Pin(4, Pin.OUT, value=1)\r"
RUN_MAIN = b"import sys; sys.modules.pop('main', None); import main\r"


def token_for(world: World, tracer: Tracer) -> int:
    rested(world, tracer)
    return arm(tracer._session, Asked(), NO_WINDOW, True)[0]


def fire_with(tracer: Tracer, token: int) -> str:
    values = {"token": token, "sweep_id": SWEEP_ID}
    return said(lambda: tracer._session.request("fire", values))


def refused(case: Case, world: World, tracer: Tracer, text: str) -> Found:
    """Nothing has closed, and a sweep that is asked for properly is granted."""
    check_told(case, text)
    found = check_contact(case, world)
    check_safe(case, world)
    assert not latched(tracer)
    world.let_pass(LOOK_S)
    rested(world, tracer)
    assert tracer.sweep().sound
    return found


# -- before closing ---------------------------------------------------------------------------


def creeping_after_arming(case: Case, world: World, at_us: int) -> Found:
    tracer = world.tracer()
    token = token_for(world, tracer)
    world.change("weld")
    world.let_pass(0.003)
    world.change("weld", 0)
    world.let_pass(0.005)
    assert world.capacitor_v > 1.0
    return refused(case, world, tracer, fire_with(tracer, token))


def creeping(case: Case, world: World, at_us: int) -> Found:
    tracer = world.tracer()
    rested(world, tracer)
    world.in_zero_reading(2, lambda level: world.happen("weld", level))
    _, text = swept(tracer)
    return refused(case, world, tracer, text)


def sticking(case: Case, world: World, at_us: int) -> Found:
    tracer = world.tracer()
    rested(world, tracer)
    world.in_zero_reading(2, lambda level: level or world.happen("current_stuck", 1000))
    trace, text = swept(tracer)
    check_told(case, text)
    check_trace(case, trace)
    found = check_contact(case, world)
    check_safe(case, world)
    check_clearing(case, world, tracer)
    return found


def not_confirmed(case: Case, world: World, at_us: int) -> Found:
    tracer = world.tracer()
    rested(world, tracer)
    tracer.source_stands_alone = False
    text = said(tracer.sweep)
    check_contact(case, world)
    tracer.source_stands_alone = True
    return refused(case, world, tracer, text)


# -- tokens and sessions ----------------------------------------------------------------------


def wrong_token(case: Case, world: World, at_us: int) -> Found:
    tracer = world.tracer()
    return refused(case, world, tracer, fire_with(tracer, token_for(world, tracer) ^ 1))


def spent_token(case: Case, world: World, at_us: int) -> Found:
    tracer = world.tracer()
    token = token_for(world, tracer)
    assert fire_with(tracer, token ^ 1)
    return refused(case, world, tracer, fire_with(tracer, token))


def expired_token(case: Case, world: World, at_us: int) -> Found:
    tracer = world.tracer()
    token = token_for(world, tracer)
    world.let_pass(world.profile.limits.token_life_s + 0.1)
    return refused(case, world, tracer, fire_with(tracer, token))


def another_session(case: Case, world: World, at_us: int) -> Found:
    tracer = world.tracer()
    token = token_for(world, tracer)
    session = tracer._session
    own, session.session = session.session, session.session ^ 1
    try:
        text = fire_with(tracer, token)
    finally:
        session.session = own
    return refused(case, world, tracer, text)


def corrupt_frame(case: Case, world: World, at_us: int) -> Found:
    tracer = world.tracer()
    session = tracer._session
    token = token_for(world, tracer)
    bad = session.request("status")["frames_bad"]
    session.sequence += 1
    values = {"token": token, "sweep_id": SWEEP_ID}
    body = pack("fire", session.session, session.sequence, values)
    coded = bytearray(framing.encode(body, toward_device=True))
    coded[8] ^= 0x40
    session.port.write(framing.DELIMITER + bytes(coded))
    session.wait_notice("charge_ended", 0.3)
    assert session.request("status")["frames_bad"] == bad + 1
    return refused(case, world, tracer, "")


# -- heat -------------------------------------------------------------------------------------


def too_many_sweeps(case: Case, world: World, at_us: int) -> Found:
    tracer = world.tracer()
    rested(world, tracer)
    check_trace(case, tracer.sweep())
    bled(tracer)
    text = said(lambda: arm(tracer._session, Asked(), NO_WINDOW, True))
    check_told(case, text)
    assert len(world.closings()) == 1
    rest_s = tracer.status().rest_s
    stored_j = 0.5 * world.profile.capacitor.capacitance_f * world.open_v() ** 2
    assert 0.2 < rest_s < 1.1 * stored_j / world.profile.bleed.power_w
    if rest_s > COOL_S:
        told = rf"H10: the bleed resistor has taken up [12]\.\d J and needs {rest_s:.0f} s to cool"
        assert re.search(told, said(tracer.sweep))
    world.let_pass(rest_s - 0.2, turn_us=10_000)
    assert said(lambda: arm(tracer._session, Asked(), NO_WINDOW, True))
    world.let_pass(0.3)
    check_trace(case, tracer.sweep())
    check_safe(case, world)
    return check_contact(case, world)


# -- profiles ---------------------------------------------------------------------------------


def stored(content: Callable[[World], bytes | None]) -> Callable[[Case, World, int], Found]:
    """A play with that on the flash in place of the profile; then with the right one again."""

    def play(case: Case, world: World, at_us: int) -> Found:
        world.store_profile(content(world))
        tracer = world.tracer()
        assert tracer.device["profile_crc"] == 0
        text = said(tracer.sweep)
        check_contact(case, world)
        tracer.close()
        world.store_profile(world.record_of_profile())
        return refused(case, world, world.tracer(), text)

    return play


def with_a_bit_turned(world: World) -> bytes:
    record = bytearray(world.record_of_profile())
    record[60] ^= 4
    return bytes(record)


# -- the prompt -------------------------------------------------------------------------------


def prompt(case: Case, world: World, at_us: int) -> Found:
    tracer = world.tracer()
    rested(world, tracer)
    asked = tracer._session.sequence + 100
    event_us = in_mid_charge(
        world, tracer, at_us, lambda: world.say(frame(tracer, "prompt", asked))
    )
    trace = tracer.held()
    ended_us = world.after(event_us, "pulse", 0)
    assert ended_us > world.predicted_us() / 2 - at_us, "obeyed before the end"
    check_trace(case, trace, at_us)
    assert tracer._session.frames.counters.rescues == 1, "it did not leave"
    check_logbook(case, tracer)
    check_safe(case, world)
    rested(world, tracer)
    assert tracer.sweep().sound
    return check_contact(case, world)


def soft_reset(case: Case, world: World, at_us: int) -> Found:
    tracer = world.tracer()
    rested(world, tracer)
    event_us = in_mid_charge(world, tracer, at_us, lambda: world.say(CTRL_C))
    found = check_contact(case, world, event_us)
    world.say(CTRL_D)
    with contextlib.suppress(KneewiseError):
        tracer.status()
    with contextlib.suppress(LinkError):
        tracer.connection.rejoin()
    bled(tracer)
    assert tracer.device["reset_cause"] == 4
    assert not tracer.status().held_sweep
    check_safe(case, world)
    rested(world, tracer)
    assert tracer.sweep().sound
    return found


def outputs_stuck(case: Case, world: World, at_us: int) -> Found:
    """Outputs left on, as a soft reset leaves them, and then main.py."""
    tracer = world.tracer()
    rested(world, tracer)
    world.say(CTRL_C)
    world.let_pass(0.2)
    world.say(STUCK)
    world.let_pass(0.2)
    assert not world.bleed_engaged
    assert world.at("relay")[-1][1] == 1
    place = len(world.record())
    world.say(CTRL_D if world.rung == CHIP else RUN_MAIN)
    world.let_pass(1.0)
    after = [
        entry[1:] for entry in world.record()[place:] if entry[1] in ("relay", "bleed_release")
    ]
    assert after == [("relay", 0), ("bleed_release", 0)]
    with contextlib.suppress(KneewiseError):
        tracer.connection.rejoin()
    check_safe(case, world)
    rested(world, tracer)
    assert tracer.sweep().sound
    return Found()


REQUESTS: dict[str, Callable[[Case, World, int], Found]] = {
    "creeping after arming": creeping_after_arming,
    "creeping": creeping,
    "sticking": sticking,
    "not confirmed": not_confirmed,
    "wrong token": wrong_token,
    "spent token": spent_token,
    "expired token": expired_token,
    "another session": another_session,
    "corrupt frame": corrupt_frame,
    "too many sweeps": too_many_sweeps,
    "no profile": stored(lambda world: None),
    "corrupt profile": stored(with_a_bit_turned),
    "strange profile": stored(lambda world: world.record_of_profile(OTHER_BOARD)),
    "prompt": prompt,
    "soft reset": soft_reset,
    "outputs stuck": outputs_stuck,
}
