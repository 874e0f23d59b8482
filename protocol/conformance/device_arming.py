"""Checks of W1 to W3 on a device: arming, and every fire that must be refused.

Nothing closes here on a device that keeps the clauses. They are tried only where a contact may
close all the same: on an emulated device, or with the operator's word.
"""

from __future__ import annotations

from conformance.bench import Bench, new_nonce
from conformance.checks import Check
from conformance.report import Broken
from kneewire import catalogue
from kneewire.hazards import HAZARDS

ARMINGS = 4
LATER_S = 0.2


def arm_or_name_the_guard(bench: Bench) -> str:
    frame = bench.ask("arm", bench.arm_values(confirmed=0))
    if frame.refusal() == "interlock":
        refusal = frame.reply("refusal")
        if refusal["guard"] not in HAZARDS or refusal["unit"] not in catalogue.UNITS:
            raise Broken(f"guard {refusal['guard']}, unit {refusal['unit']}")
        return f"refused by guard H{refusal['guard']}"
    if frame.refusal() == "wrong state" and bench.state() == "fault":
        return "refused in a fault"
    reply = frame.reply("arm_reply")
    return f"armed for {reply['life_ms']} ms"


def tokens_are_drawn(bench: Bench) -> str:
    replies = [bench.arm() for _ in range(ARMINGS)]
    tokens = {reply["token"] for reply in replies}
    if 0 in tokens or len(tokens) < ARMINGS:
        raise Broken(f"tokens {', '.join(f'{token:08x}' for token in sorted(tokens))}")
    if not all(reply["life_ms"] for reply in replies):
        raise Broken("a token without any life")
    return f"{ARMINGS} tokens, all different, for {replies[0]['life_ms']} ms each"


def tokens_end(bench: Bench) -> str:
    old = bench.arm()["token"]
    bench.arm()
    bench.refused_fire(old, "the token of an arming before the last")
    old = bench.arm()["token"]
    bench.answer(bench.abort_frame())
    bench.refused_fire(old, "a token whose arming was aborted")
    old = bench.arm()["token"]
    bench.hello(new_nonce())
    bench.refused_fire(old, "a token of another session")
    return "after an arming, an abort and a new session"


def tokens_expire(bench: Bench) -> str:
    armed = bench.arm()
    bench.listen(armed["life_ms"] / 1000 + LATER_S)
    bench.refused_fire(armed["token"], "an expired token")
    if (state := bench.state()) != "safe":
        raise Broken(f"{state} after the life of the token")
    return f"after {armed['life_ms']} ms"


def only_the_token_fires(bench: Bench) -> str:
    bench.refused_fire(0x5EED5EED, "a token and no arming")
    token = bench.arm()["token"]
    bench.refused_fire(token ^ 1, "a wrong token")
    bench.refused_fire(token, "a token that a refused fire has spent")
    bench.arm()
    bench.refused_fire(0, "the token 0")
    token = bench.arm()["token"]
    frame = bench.ask("fire", {"token": token, "sweep_id": bytes(16)})
    if frame.refusal() == "":
        bench.abort_charge(frame.reply("fire_reply")["quiet_ms"])
        raise Broken("fired for a sweep without an id")
    return "refused, and nothing closed"


CHECKS = (
    Check(
        "armed, or a guard named",
        ("W1",),
        "a token, or `interlock` with guard, value, limit and unit",
        arm_or_name_the_guard,
    ),
    Check("tokens are drawn", ("W2",), "another token each time, never 0", tokens_are_drawn),
    Check("tokens end", ("W2",), "no fire with a token that has ended", tokens_end),
    Check("tokens expire", ("W2",), "no fire after `life_ms`", tokens_expire),
    Check(
        "only the token fires",
        ("W3",),
        "a refusal of each fire without the one good token, which every fire spends",
        only_the_token_fires,
    ),
)
