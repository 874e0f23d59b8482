"""Checks of S and A on a device: sequences, stored answers, and abort."""

from __future__ import annotations

from conformance.bench import Bench
from conformance.checks import Check
from conformance.device_bodies import NOTHING, READING, refused_as, to_device
from conformance.report import Broken
from conformance.wire import Frame
from kneewire import catalogue

STORED = 8
NO_SWEEP = NOTHING["acknowledge"]  # changes state in name, and frees nothing


def acknowledge(bench: Bench, sequence: int) -> Frame:
    return bench.ask("acknowledge", NO_SWEEP, sequence=sequence)


def accepted(bench: Bench, sequence: int) -> Frame:
    frame = acknowledge(bench, sequence)
    frame.reply("acknowledge_reply")
    return frame


def stale(bench: Bench, sequence: int, why: str) -> None:
    frame = acknowledge(bench, sequence)
    if frame.refusal() != "stale":
        raise Broken(f"{frame} to sequence {sequence}, {why}")


def sequences_rise(bench: Bench) -> str:
    for sequence in (1, 2, 5, 1000, 0xFFFFFFFF):
        accepted(bench, sequence)
    return "1, 2, 5, 1000 and the highest taken"


def repeats_get_the_same(bench: Bench) -> str:
    """Answers that differ, so that a mix-up would show."""
    asked = []
    for number in range(STORED):
        sequence = bench.next()
        if number % 2:
            first = bench.ask("arm", bench.arm_values(knots=0), sequence=sequence)
        else:
            first = acknowledge(bench, sequence)
        asked.append((sequence, first))
    for sequence, first in [*asked, *reversed(asked)]:
        again = acknowledge(bench, sequence)
        if again.coded != first.coded:
            raise Broken(f"{again} to the repeat of sequence {sequence}, {first} at first")
    return f"the last {STORED} answers repeated, bytes alike"


def repeats_do_nothing(bench: Bench) -> str:
    bench.arm()
    sequence = bench.sequence
    bench.answer(bench.abort_frame()).reply("abort_reply")
    bench.ask("arm", bench.arm_values(), sequence=sequence).reply("arm_reply")
    if (state := bench.state()) != "safe":
        raise Broken(f"{state} after the repeat of an arm that was aborted")
    return "not armed again"


def old_sequences_are_stale(bench: Bench) -> str:
    stale(bench, 0, "where sequences begin with 1")
    for sequence in range(10, 10 + STORED):
        accepted(bench, sequence)
    stale(bench, 3, "which was passed over")
    accepted(bench, 30)
    stale(bench, 10, f"whose answer is older than the last {STORED}")
    stale(bench, 29, "which was passed over")
    accepted(bench, 31)
    return "refused, and the session goes on"


def reading_needs_no_order(bench: Bench) -> str:
    accepted(bench, 100)
    for sequence in (7, 7, 6, 0, 100, 5000):
        for name in READING:
            frame = bench.ask(name, sequence=sequence)
            if frame.refusal() not in ("", "no held sweep"):
                raise Broken(f"{frame} to {name} with sequence {sequence}")
    accepted(bench, 101)
    return "any sequence, as often as asked"


def other_sessions_are_unknown(bench: Bench) -> str:
    for session in (bench.session ^ 1, 0xFFFFFFFF, 0):
        if session == bench.session:
            continue
        for name in to_device():
            if name in ("hello", "abort"):
                continue
            frame = bench.ask(name, NOTHING.get(name), session=session, sequence=1)
            refused_as(
                frame, catalogue.KINDS[name], f"{name} of another session", "unknown session"
            )
    accepted(bench, 1)  # nothing of that counts in this session
    return "refused, each kind of it"


def abort_in_any_state(bench: Bench) -> str:
    states = [bench.state()]
    for _ in range(3):
        bench.answer(bench.abort_frame()).reply("abort_reply")
    frame = bench.ask("arm", bench.arm_values()) if bench.may_arm else None
    if frame is not None and frame.name == "arm_reply":
        states.append("armed")
        for _ in range(3):
            reply = bench.answer(bench.abort_frame()).reply("abort_reply")
            if reply["state"] != 0:
                raise Broken(f"state {reply['state']} after an abort")
    return f"answered while {' and '.join(states)}, and again"


def any_abort_disarms(bench: Bench) -> str:
    bench.arm()
    session = bench.session ^ 1
    frame = bench.answer(bench.frame("abort", session=session, sequence=0))
    frame.reply("abort_reply")
    if (state := bench.state()) != "safe":
        raise Broken(f"{state} after the abort of another session")
    return "no longer armed"


CHECKS = (
    Check("sequences rise", ("S1",), "rising sequences taken, with gaps", sequences_rise),
    Check(
        "a repeat gets the same answer",
        ("S2",),
        "the stored answer, bytes alike",
        repeats_get_the_same,
    ),
    Check("a repeat does nothing", ("S2",), "the first arm not made again", repeats_do_nothing),
    Check("old sequences", ("S3",), "`stale`", old_sequences_are_stale),
    Check(
        "reading needs no order",
        ("S4",),
        "answers to any sequence, repeated or not",
        reading_needs_no_order,
    ),
    Check(
        "another session",
        ("S5",),
        "`unknown session` for all but hello, prompt and abort",
        other_sessions_are_unknown,
    ),
    Check("abort in any state", ("A1",), "abort_reply, as often as asked", abort_in_any_state),
    Check(
        "the abort of any session disarms",
        ("A3",),
        "an answer, and no arming left",
        any_abort_disarms,
    ),
)
