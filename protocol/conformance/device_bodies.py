"""Checks of B and H on a device: bodies, refusals and hello."""

from __future__ import annotations

from typing import Any

from conformance.bench import HELLO_S, Bench, guarded, hello_body, new_nonce
from conformance.checks import Check
from conformance.report import Broken, Unseen
from conformance.wire import Frame
from kneewire import PROTOCOL, catalogue, framing
from kneewire.fields import FIXED
from kneewire.messages import NO_SESSION, fingerprint, pack

OTHER_ID = bytes(range(1, 17))
READING = ("status", "read_profile", "heartbeat", "read_manifest")
SEQUENCES = (0, 1, 0x01020304, 0x7FFFFFFF, 0xFFFFFFFF)
AT_ONCE = 8
# What is asked while no sweep is held and nothing is armed: none of these closes anything.
NOTHING: dict[str, dict[str, Any]] = {
    "fetch": {"sweep_id": OTHER_ID, "first": 0, "count": 1, "a_block": 0},
    "fetch_raw": {"sweep_id": OTHER_ID, "first": 0, "count": 1, "a_block": 0},
    "acknowledge": {"sweep_id": OTHER_ID},
    "arm": {
        **dict.fromkeys(("knots", "closed_limit_ms", "confirmed", "raw_from_us", "raw_pairs"), 0),
        **{"limit_mv": 0, "limit_ma": 0, "exercise": 0},
    },
    "note_proof": {"day": 0, "digest": bytes(16)},
    "fire": {"token": 0, "sweep_id": OTHER_ID},
}


def to_device() -> list[str]:
    """Names of all messages that a device understands, those that leave for the prompt apart."""
    rows = catalogue.MESSAGES.values()
    return [row[0] for row in rows if row[1] == catalogue.TO_DEVICE and row[0] != "prompt"]


def same_header(frame: Frame, session: int, sequence: int, what: str) -> None:
    message = frame.message
    if message is None or (message.session, message.sequence) != (session, sequence):
        raise Broken(f"session or sequence of {frame} not those of {what}")


def answers_name_their_request(bench: Bench) -> str:
    for name in READING:
        kind = catalogue.KINDS[name]
        for sequence in SEQUENCES:
            frame = bench.ask(name, sequence=sequence)
            same_header(frame, bench.session, sequence, name)
            if frame.refusal():
                if frame.reply("refusal")["of_kind"] != kind:
                    raise Broken(f"a refusal of another kind to {name}")
            elif frame.body[0] != kind | catalogue.REPLY:
                raise Broken(f"{frame} to {name}")
    return "kind, session and sequence agree"


def every_request_is_answered(bench: Bench) -> str:
    names = [name for name in to_device() if name not in ("hello", "abort")]
    if bench.state() == "fault":
        names.remove("clear_fault")
    bench.next()  # no sequence of its own for what changes nothing
    for name in names:
        frames = bench.answers(bench.frame(name, NOTHING.get(name)))
        if len(frames) != 1:
            raise Broken(f"{len(frames)} answers to {name}")
    hello = framing.GUARD + framing.encode(hello_body(bench.nonce), True)
    for name, raw in (("hello", hello), ("abort", bench.abort_frame())):
        if len(frames := bench.answers(raw)) != 1:
            raise Broken(f"{len(frames)} answers to {name}")
    many = b"".join(bench.frame("heartbeat", sequence=number) for number in range(AT_ONCE))
    heard = [frame.sequence for frame in bench.answers(many)]
    if heard != list(range(AT_ONCE)):
        raise Broken(f"answers {heard} to {AT_ONCE} requests at once")
    return f"one answer to each of {len(names) + 2} kinds, and in order"


def extra_bytes_are_ignored(bench: Bench) -> str:
    tail = bytes(range(40))
    bench.answer(guarded(hello_body(bench.nonce) + tail)).reply("hello_reply")
    bench.hello()
    for name in READING:
        plain = bench.ask(name, sequence=9)
        longer = bench.answer(guarded(pack(name, bench.session, 9) + tail))
        if (plain.name, plain.refusal()) != (longer.name, longer.refusal()):
            raise Broken(f"{longer} to {name} with extra bytes, {plain} without")
    body = pack("acknowledge", bench.session, bench.next(), NOTHING["acknowledge"])
    bench.answer(guarded(body + tail)).reply("acknowledge_reply")
    return "the same answers"


def refused_as(frame: Frame, kind: int, what: str, *texts: str) -> None:
    if frame.refusal() not in texts:
        raise Broken(f"{frame} to {what}")
    if frame.reply("refusal")["of_kind"] != kind:
        raise Broken(f"a refusal of another kind to {what}")


def unknown_kinds_are_refused(bench: Bench) -> str:
    kinds = [kind for kind in range(256) if kind not in catalogue.MESSAGES]
    for start in range(0, len(kinds), AT_ONCE):
        some = kinds[start : start + AT_ONCE]
        raw = b"".join(
            guarded(bytes([kind]) + pack("status", bench.session, kind)[1:] + b"abc")
            for kind in some
        )
        frames = bench.answers(raw)
        if len(frames) != len(some):
            raise Broken(f"{len(frames)} answers to {len(some)} kinds that nobody knows")
        for kind, frame in zip(some, frames, strict=True):
            refused_as(frame, kind, f"kind {kind:02x}", "unknown kind")
            same_header(frame, bench.session, kind, f"kind {kind:02x}")
    for name, values in of_the_other_way():
        kind = catalogue.KINDS[name]
        frame = bench.answer(guarded(pack(name, bench.session, 5, values)))
        refused_as(frame, kind, f"a {name} toward the device", "unknown kind")
    return f"{len(kinds)} unknown kinds, and those that do not travel toward a device"


def of_the_other_way() -> list[tuple[str, dict[str, Any]]]:
    """Messages to the host, all fields zero."""
    found = []
    for name, way, _, _, rows in catalogue.MESSAGES.values():
        if way == catalogue.TO_HOST:
            found.append((name, {field: _zero(form) for field, form in rows}))
    return found


def _zero(form: str) -> int | bytes:
    size, signed = FIXED.get(form, (0, None))
    return bytes(size) if signed is None else 0


def short_bodies_are_refused(bench: Bench) -> str:
    for name in to_device():
        rows = catalogue.MESSAGES[catalogue.KINDS[name]][4]
        if not rows:
            continue
        values = {field: _zero(form) for field, form in rows}
        body = pack(name, bench.session, bench.next(), values)
        for size in (len(body) - 1, 9):
            what = f"{size} bytes of {name}"
            frame = bench.answer(guarded(body[:size]))
            refused_as(frame, body[0], what, "malformed")
            same_header(frame, bench.session, bench.sequence, what)
    body = pack("status", bench.session, 0x01020304)
    for size in range(1, 9):
        frame = bench.answer(guarded(body[:size]))
        refused_as(frame, body[0], f"{size} bytes of a header", "malformed")
        same_header(frame, 0, 0, f"{size} bytes of a header, which are 0")
    return "refused as malformed"


def values_out_of_range_are_refused(bench: Bench) -> str:
    if bench.state() != "safe":
        raise Unseen("an arm is refused for another reason in a fault")
    most = bench.device["max_knots"]
    wrong = [{"knots": knots} for knots in (0, 15, most + 1, 65535)]
    wrong += [{"closed_limit_ms": limit} for limit in (0, 120001, 0xFFFFFFFF)]
    for change in wrong:
        frame = bench.ask("arm", bench.arm_values(confirmed=0, **change))
        refused_as(frame, catalogue.KINDS["arm"], f"an arm with {change}", "out of range")
    return f"{len(wrong)} arms refused"


def hello_in_every_state(bench: Bench) -> str:
    seen = [bench.state()]
    bench.answer(guarded(hello_body(bench.nonce))).reply("hello_reply")
    bench.hello(new_nonce())
    if bench.may_arm:
        bench.wait_safe()
        frame = bench.ask("arm", bench.arm_values())
        if frame.name == "arm_reply":
            seen.append("armed")
            bench.answer(guarded(hello_body(bench.nonce))).reply("hello_reply")
    return f"answered while {' and '.join(seen)}, and in another session"


def a_nonce_is_a_session(bench: Bench) -> str:
    nonce, session = bench.nonce, bench.session
    sequence = bench.ask("acknowledge", NOTHING["acknowledge"]).sequence
    before = bench.ask("acknowledge", NOTHING["acknowledge"], sequence=sequence)
    if bench.hello(nonce)["session"] != session:
        raise Broken("the same nonce got another session")
    after = bench.ask("acknowledge", NOTHING["acknowledge"], sequence=sequence)
    if after.coded != before.coded:
        raise Broken("a session resumed without its stored answers")
    if bench.hello(new_nonce())["session"] == session:
        raise Broken("another nonce got the same session")
    if bench.ask("status", session=session, sequence=1).refusal() != "unknown session":
        raise Broken("the old session goes on beside the new one")
    return "the same nonce resumes, another begins anew"


def a_new_session_disarms(bench: Bench) -> str:
    bench.arm()
    bench.hello(new_nonce())
    if (state := bench.state()) == "armed":
        raise Broken("armed in a new session")
    return f"{state} in the new session"


def hello_is_frozen(bench: Bench) -> str:
    """Of a version that does not exist."""
    other = {"fingerprint": fingerprint() ^ 0x01010101, "major": PROTOCOL[0] + 1, "minor": 200}
    bench.send(guarded(hello_body(bench.nonce, **other)))
    frames = bench.listen(HELLO_S, lambda frame: frame.name == "hello_reply")
    if not frames or frames[-1].name != "hello_reply":
        raise Broken("no answer to a hello of another version")
    reply = frames[-1].reply("hello_reply")
    if (reply["major"], reply["fingerprint"]) != (PROTOCOL[0], fingerprint()):
        raise Broken("the device does not tell its own version")
    kind = catalogue.KINDS["status"] | catalogue.REPLY
    frame = bench.ask("status", session=NO_SESSION, sequence=1)
    if frame.body[0] == kind or frame.body[0] != catalogue.KINDS["refusal"]:
        raise Broken(f"{frame} where a refusal was due")
    return "answered with the device's own version"


def the_boot_nonce_stays(bench: Bench) -> str:
    first = bench.hello()
    for nonce in (bench.nonce, new_nonce(), new_nonce()):
        reply = bench.hello(nonce)
        for field in ("boot_nonce", "reset_cause"):
            if reply[field] != first[field]:
                raise Broken(f"{field} {reply[field]} without a reset, {first[field]} before")
    if first["reset_cause"] not in catalogue.RESET_CAUSES:
        raise Broken(f"reset cause {first['reset_cause']}")
    return f"{first['boot_nonce']:08x} in four sessions"


CHECKS = (
    Check(
        "answers name their request",
        ("B3",),
        "kind, session and sequence of the request in its answer",
        answers_name_their_request,
    ),
    Check("every request is answered", ("B4",), "one answer a request", every_request_is_answered),
    Check(
        "bytes behind the last field",
        ("B2",),
        "the answer that the same request gets without them",
        extra_bytes_are_ignored,
    ),
    Check(
        "unknown kinds",
        ("B5",),
        "`unknown kind` for what is not known or does not travel this way",
        unknown_kinds_are_refused,
    ),
    Check(
        "short bodies",
        ("B5",),
        "`malformed`, with session and sequence 0 where the header is short",
        short_bodies_are_refused,
    ),
    Check("values out of range", ("B7", "W1"), "`out of range`", values_out_of_range_are_refused),
    Check("hello in every state", ("H1",), "hello_reply", hello_in_every_state),
    Check(
        "a nonce is a session",
        ("H2",),
        "the same session and its stored answers for the same nonce, a new one for another",
        a_nonce_is_a_session,
    ),
    Check(
        "a new session disarms", ("H2",), "an arming ended by a new session", a_new_session_disarms
    ),
    Check(
        "hello of another version",
        ("H3",),
        "an answer to any hello, and a refusal that every version reads",
        hello_is_frozen,
    ),
    Check(
        "the boot nonce stays",
        ("H4",),
        "one boot nonce and one known reset cause, whatever hello comes",
        the_boot_nonce_stays,
    ),
)
