"""Checks of W4 to W8 on a device: what a fire does, and what is heard of it."""

from __future__ import annotations

from conformance.bench import Bench
from conformance.checks import Check
from conformance.report import Broken, Unseen
from conformance.sweeping import BEAT_SEQUENCE, STATUS_SEQUENCE, aborted, disturbed, sweep, whole
from kneewire import catalogue

QUIET_MARGIN_S = 0.5


def one_fire_one_closing(bench: Bench) -> str:
    made = disturbed(bench)
    made.only("charge_ended")
    if made.again["opened_us"] != made.manifest["opened_us"]:
        raise Broken("closed again for the same fire")
    return "one charge_ended, and none for the fire sent again"


def fire_reply_first(bench: Bench) -> str:
    made = whole(bench)
    if made.place("fire_reply") > made.place("charge_ended"):
        raise Broken("charge_ended before fire_reply")
    if made.ended_s > made.quiet_ms / 1000 + QUIET_MARGIN_S:
        raise Broken(f"charge_ended after {made.ended_s:.1f} s, quiet_ms {made.quiet_ms}")
    return f"fire_reply first, quiet_ms {made.quiet_ms}"


def silent_while_charging(bench: Bench) -> str:
    made = whole(bench)
    first, last = made.place("fire_reply"), made.place("charge_ended")
    if between := made.frames[first + 1 : last]:
        raise Broken(f"{between[0]} while charging")
    status = made.frames[made.place("status_reply", STATUS_SEQUENCE)].reply("status_reply")
    made.place("heartbeat_reply", BEAT_SEQUENCE)
    if status["contact_closed"] or catalogue.STATES.get(status["state"]) == "charging":
        raise Broken("a request answered before the contact had opened")
    return "nothing between fire_reply and charge_ended, what came meanwhile answered behind"


def abort_ends_a_charge(bench: Bench) -> str:
    made = aborted(bench)
    if made.end_reason != "aborted":
        raise Broken(f"the charge ended as {made.end_reason}")
    made.place("abort_reply")
    return "ended as aborted, and the abort answered"


def only_the_own_abort(bench: Bench) -> str:
    made = disturbed(bench)
    if made.end_reason == "aborted":
        raise Broken("a charge aborted by another session's abort, or by one inside a run")
    return f"the charge ended as {made.end_reason}"


def lost_host_ends_a_charge(bench: Bench) -> str:
    lost_s = bench.profile["heartbeat_lost_ms"] / 1000
    if whole(bench).closed_s < 1.1 * lost_s:
        raise Unseen(f"a charge of {whole(bench).closed_s:.2f} s ends before a host is lost")
    beaten = whole(bench)
    if beaten.end_reason == "host lost":
        raise Broken("host lost, with a heartbeat twice a second")
    silent = sweep(bench, beats=False)
    if silent.end_reason != "host lost":
        raise Broken(f"ended as {silent.end_reason} after {silent.closed_s:.2f} s of silence")
    return f"host lost after {silent.closed_s:.2f} s of silence"


def notices_tell(bench: Bench) -> str:
    made = whole(bench)
    ended, bled = made.only("charge_ended"), made.only("bleed_ended")
    for notice in (ended, bled):
        if notice["sweep_id"] != made.sweep_id:
            raise Broken(f"{notice} of another sweep")
    if ended["end_reason"] != made.manifest["end_reason"]:
        raise Broken("another reason in charge_ended than in the manifest")
    if made.in_bleeding["contact_closed"]:
        raise Broken("the contact closed after charge_ended")
    if bled["state"] != made.after["state"]:
        raise Broken(f"state {bled['state']} in bleed_ended, {made.after['state']} in status")
    return f"ended as {made.end_reason}, then {catalogue.STATES[bled['state']]}"


def notices_have_no_sequence(bench: Bench) -> str:
    """B3, as far as only a sweep shows it."""
    made = whole(bench)
    for name in ("charge_ended", "bleed_ended"):
        if made.frames[made.place(name)].sequence:
            raise Broken(f"{name} with a sequence")
    return "0"


def hello_while_bleeding(bench: Bench) -> str:
    state = catalogue.STATES.get(whole(bench).in_bleeding["state"], "unknown")
    return f"answered right behind charge_ended, while {state}"


CHECKS = (
    Check("fire_reply comes first", ("W5",), "fire_reply before anything else", fire_reply_first),
    Check(
        "silent while charging",
        ("W6",),
        "nothing from fire_reply to charge_ended, all else answered behind",
        silent_while_charging,
    ),
    Check(
        "notices",
        ("W8",),
        "charge_ended and bleed_ended once each, and what status and manifest say as well",
        notices_tell,
    ),
    Check("notices and their sequence", ("B3",), "sequence 0", notices_have_no_sequence),
    Check("hello while bleeding", ("H1",), "hello_reply", hello_while_bleeding),
)
# These fire once more each, so nothing is held afterwards that others look at.
LAST_CHECKS = (
    Check(
        "only the own abort",
        ("A2",),
        "a charge that another session's abort does not end, nor one inside a run",
        only_the_own_abort,
    ),
    Check("one closing a fire", ("W4",), "one charge for one fire", one_fire_one_closing),
    Check("a lost host", ("W7",), "`host lost` after silence, not before", lost_host_ends_a_charge),
    Check("an abort in a charge", ("W6", "A1"), "a charge that it ends", abort_ends_a_charge),
)
