"""Checks of R on a device: to the prompt, and back without a reset. Also what Ctrl-C leaves.

The only place of these checkers where bare control bytes are sent.
"""

from __future__ import annotations

from conformance.bench import LATE_S, Bench
from conformance.checks import Check
from conformance.device_bodies import NOTHING
from conformance.report import Broken, NotTried, Unseen
from conformance.sweeping import await_end, whole
from conformance.wire import ANSWER_S
from kneewire import catalogue
from kneewire.messages import Message

PROMPT_S = 5.0
SAID_S = 0.3
INTERRUPT = b"\x03"
LEAVE = b"\r\x03\x03\x02"
START = b"from tracer import app; app.main()\r"
RAW = b"\x01"
WELDED = 2
INTERRUPTED_S = 1.2
"""Into a charge: an emulated device hears nothing before."""


def at_prompt(bench: Bench) -> None:
    """Wait for the prompt to show itself."""
    end = bench.port.clock() + PROMPT_S
    while ">>>" not in bench.said():
        if bench.port.clock() >= end:
            raise Broken(f"no prompt within {PROMPT_S:g} s; {bench.said()[-200:]!r}")
        bench.listen(0.05)


def back(bench: Bench) -> Message:
    """From the prompt into the firmware, by R3; its answer to hello."""
    bad = len(bench.bad)
    bench.port.write(LEAVE)
    bench.listen(SAID_S)
    bench.port.write(START)
    bench.listen(SAID_S)
    # The echo of the line has no delimiter, and is no part of the first frame.
    bench.forget()
    try:
        return bench.hello()
    finally:
        del bench.bad[bad:]


def stored(bench: Bench) -> tuple[int, bytes]:
    """The sequence of a stored answer, and its bytes when asked for again."""
    sequence = bench.ask("acknowledge", NOTHING["acknowledge"]).sequence
    return sequence, bench.ask("acknowledge", NOTHING["acknowledge"], sequence=sequence).coded


def interrupted(bench: Bench) -> Message:
    """Ctrl-C and back: the status then."""
    bench.forget()
    bench.port.write(INTERRUPT)
    at_prompt(bench)
    back(bench)
    return bench.status()


def ctrl_c_ends_safe(bench: Bench) -> str:
    before = bench.status()
    armed = False
    if bench.may_arm and not before["held"]:
        armed = bench.ask("arm", bench.arm_values()).name == "arm_reply"
    status = interrupted(bench)
    if status["contact_closed"]:
        raise Broken("the contact closed behind the prompt")
    if not status["bleed_engaged"] and status["guard"] != WELDED:
        raise Broken("the bleed not engaged behind the prompt")
    if catalogue.STATES.get(status["state"]) == "armed":
        raise Broken("still armed behind the prompt")
    if (status["held"], status["sweep_id"]) != (before["held"], before["sweep_id"]):
        raise Broken("the held sweep is another than before")
    return "contact open, bleed engaged" + (", no longer armed" if armed else "")


def nothing_is_lost_at_the_prompt(bench: Bench) -> str:
    ways = {"a plain prompt": b"", "a line half typed": b"x = (1,", "a raw prompt": RAW}
    before = bench.hello()
    fault = bench.status()["guard"]
    for what, typed in ways.items():
        sequence, answer = stored(bench)
        bench.forget()
        bench.port.write(INTERRUPT)
        at_prompt(bench)
        bench.port.write(typed)
        bench.listen(LATE_S)
        after = back(bench)
        for field in ("boot_nonce", "session", "profile_crc", "reset_cause"):
            if after[field] != before[field]:
                raise Broken(f"another {field} after {what}")
        again = bench.ask("acknowledge", NOTHING["acknowledge"], sequence=sequence)
        if again.coded != answer:
            raise Broken(f"{again} in place of a stored answer after {what}")
        status = bench.status()
        if status["guard"] != fault:
            raise Broken(f"guard H{status['guard']} after {what}, H{fault} before")
        if catalogue.STATES.get(status["state"]) not in ("bleeding", "safe", "fault"):
            raise Broken(f"state {status['state']} after {what}")
    return f"the same boot, session and answers after {', '.join(ways)}"


def held_through_the_prompt(bench: Bench) -> str:
    made = whole(bench)
    interrupted(bench)
    manifest = bench.ask("read_manifest").reply("manifest")
    if manifest.values != made.manifest.values:
        raise Broken("another manifest after the prompt")
    return "the same manifest"


def the_prompt_on_request(bench: Bench) -> str:
    status = bench.status()
    bench.forget()
    bench.send(bench.frame("prompt"))
    start = len(bench.heard)
    leaving = bench.await_frame("prompt_reply", start, ANSWER_S)["leaving"]
    if catalogue.STATES.get(status["state"]) == "fault" and status["guard"] == WELDED:
        if leaving:
            raise Broken("leaving while a welded contact is latched")
        bench.status()
        return "not left: a welded contact is latched"
    if leaving != 1:
        raise Broken(f"leaving {leaving}")
    at_prompt(bench)
    back(bench)
    status = bench.status()
    if status["contact_closed"] or not status["bleed_engaged"]:
        raise Broken("the outputs are not safe behind the prompt")
    return "left, and came back"


def ctrl_c_in_a_charge(bench: Bench) -> str:
    usual_s = whole(bench).closed_s
    if usual_s < 1.5 * INTERRUPTED_S:
        raise Unseen(f"a charge of {usual_s:.2f} s is over before it can be interrupted")
    armed = bench.arm()
    values = bench.fire_values(armed["token"])
    start = len(bench.heard)
    bench.send(bench.frame("fire", values))
    bench.await_frame("fire_reply", start, ANSWER_S)
    try:
        await_end(bench, start, INTERRUPTED_S, beats=True)
        raise NotTried("the charge was over before it was interrupted")
    except Broken:
        pass
    interrupted(bench)
    bench.wait_safe()
    manifest = bench.ask("read_manifest").reply("manifest")
    if manifest["sweep_id"] != values["sweep_id"]:
        raise Broken("another sweep is held")
    reason = catalogue.END_REASONS.get(manifest["end_reason"])
    if reason != "interrupted" or not manifest["knots"]:
        raise Broken(f"ended as {reason}, {manifest['knots']} knots")
    return f"held as interrupted, {manifest['knots']} knots"


CHECKS = (
    Check(
        "Ctrl-C",
        ("R4",),
        "the prompt, contact open, bleed engaged, what is held kept",
        ctrl_c_ends_safe,
    ),
    Check(
        "back from the prompt",
        ("R3",),
        "the firmware again, with boot nonce, session, stored answers and fault as before",
        nothing_is_lost_at_the_prompt,
    ),
    Check("the prompt on request", ("R5",), "prompt_reply, then the prompt", the_prompt_on_request),
)
# Where a sweep is held already.
HELD_CHECKS = (
    Check(
        "held through the prompt",
        ("W9", "R4"),
        "the held sweep as before",
        held_through_the_prompt,
    ),
)
LAST_CHECKS = (Check("Ctrl-C in a charge", ("W13",), "held as `interrupted`", ctrl_c_in_a_charge),)
