"""The rules that a host keeps in every script, read off the log of what it sent and was told.

A rule gives the number of its occasions, and what broke it. A rule without any occasion has not
been seen.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from zlib import crc32

from conformance.bursts import BLOCKS, BURSTS, REPLIES
from conformance.host_watch import (
    CHANGING,
    CLOSED,
    CONTROL,
    LEFT,
    RESET,
    SHOWN,
    STARTED,
    Event,
    Heard,
    Log,
    Said,
)
from kneewire import catalogue, framing
from kneewire.messages import HEADER_BYTES, NO_SESSION, pack

FIRST_FRAME = 64
BEAT_S = 0.65  # 500 ms, and what a clock or a system may add
FLIGHT_S = 0.1  # for an answer that has been given and not been read yet
HELLO_SEQUENCE = int.from_bytes(b"iKne", "little")
NEVER_MINOR = (9, 10, 11, 13, 14, 16, 21, 23, 27)
MIN_KNOTS, MAX_LIMIT_MS, LATEST_US = 16, 120000, 120000000


@dataclass
class Seen:
    """How often a rule applied, and how it was broken."""

    occasions: int = 0
    broken: list[str] = field(default_factory=list)

    def expect(self, holds: bool, otherwise: str) -> None:
        self.occasions += 1
        if not holds:
            self.broken.append(otherwise)


def heard(log: Log, *names: str) -> Iterator[Heard]:
    """Messages of the host, of those names or all."""
    for entry in log:
        if isinstance(entry, Heard) and entry.message and (not names or entry.name in names):
            yield entry


def frames(log: Log) -> Iterator[Heard]:
    return (entry for entry in log if isinstance(entry, Heard))


def _decodes(*reasons: str) -> Callable[[Log, Seen], None]:
    def rule(log: Log, seen: Seen) -> None:
        for entry in frames(log):
            seen.expect(entry.reason not in reasons, f"a run that is no frame: {entry.reason}")

    return rule


def lengths(log: Log, seen: Seen) -> None:
    for entry in frames(log):
        size = len(entry.body) + framing.CRC_BYTES
        fits = size <= catalogue.MAX_FRAME and entry.reason != framing.BAD_SHORT
        seen.expect(fits and entry.reason != framing.BAD_LONG, f"{size} bytes of body and CRC")


def no_control_bytes(log: Log, seen: Seen) -> None:
    for entry in log:
        if isinstance(entry, Event) and entry.what == CONTROL:
            seen.expect(False, f"a bare {entry.detail}")
        elif isinstance(entry, Heard):
            seen.expect(entry.reason != framing.BAD_ESCAPE, "a 02 that is no escape")


def rescue_where_a_prompt_is(log: Log, seen: Seen) -> None:
    """A rescue interrupts, so it needs a reason; and its line must be whole."""
    shown = left = False
    for entry in log:
        if not isinstance(entry, Event):
            continue
        if entry.what == SHOWN:
            shown = True
        elif entry.what == LEFT:
            seen.expect(shown, "0d 03 03 02 where no prompt was")
            seen.expect(not entry.detail, f"{entry.detail} before 0d 03 03 02")
            left = True
        elif entry.what == STARTED:
            seen.expect(left, "the line that starts the firmware, without 0d 03 03 02")
            shown = left = False


def bodies(log: Log, seen: Seen) -> None:
    for entry in frames(log):
        message = entry.message
        if message is None:
            seen.expect(bool(entry.reason), f"a body that is no message: {entry.body.hex()}")
            continue
        way = catalogue.MESSAGES[entry.body[0]][1]
        seen.expect(way == catalogue.TO_DEVICE, f"{message.name} toward the device")
        whole = pack(message.name, message.session, message.sequence, message.values)
        seen.expect(whole == entry.body, f"{message.name} with bytes behind its last field")


def hello_first(log: Log, seen: Seen) -> None:
    for entry in frames(log):
        hello = entry.name == "hello" and entry.session == NO_SESSION
        seen.expect(hello, f"{entry.name or 'no hello'} first")
        return


def hello_does_no_harm(log: Log, seen: Seen) -> None:
    for entry in heard(log, "hello"):
        body = entry.body
        crc = crc32(body).to_bytes(4, "little")
        nonce = body[HEADER_BYTES : HEADER_BYTES + 4]
        seen.expect(entry.sequence == HELLO_SEQUENCE, "a sequence other than iKne")
        seen.expect(nonce.isalpha() and nonce.isascii(), f"a nonce of {nonce!r}, not of letters")
        harmless = all(byte >= 0x20 and byte != 0x7F for byte in crc)
        seen.expect(harmless, f"a CRC of {crc.hex(' ')}")
        print_of = entry.get("fingerprint")
        seen.expect(print_of & 0x80808080 == 0x80808080, f"fingerprint {print_of:08x}")
        seen.expect(entry.get("minor") not in NEVER_MINOR, f"minor version {entry.get('minor')}")


def guard_before_each_frame(log: Log, seen: Seen) -> None:
    for entry in frames(log):
        seen.expect(entry.guarded or bool(entry.reason), f"{entry.name} without 23 00 before it")


def sessions(log: Log, seen: Seen) -> None:
    """As the last hello_reply said; for a moment still the one before."""
    known: list[tuple[float, int]] = []
    for entry in log:
        if isinstance(entry, Said) and entry.name == "hello_reply":
            known.append((entry.at_s, entry.message["session"]))
        elif isinstance(entry, Heard) and entry.message and entry.name not in ("hello", "prompt"):
            good = {session for _, session in known[-1:]}
            if known and entry.at_s - known[-1][0] < FLIGHT_S:
                good |= {session for _, session in known[-2:-1]}
            seen.expect(entry.session in good, f"{entry.name} in a session that hello did not give")


def sequences(log: Log, seen: Seen) -> None:
    highest: dict[int, int] = {}
    known: set[tuple[int, int]] = set()
    for entry in heard(log, *CHANGING):
        key = (entry.session, entry.sequence)
        if key not in known:
            last = highest.get(entry.session, 0)
            seen.expect(entry.sequence > last, f"{entry.name} {entry.sequence} after {last}")
            highest[entry.session] = max(entry.sequence, last)
        known.add(key)


def repeats(log: Log, seen: Seen) -> None:
    first: dict[tuple[int, int], bytes] = {}
    for entry in heard(log, *CHANGING):
        key = (entry.session, entry.sequence)
        if key in first:
            seen.expect(first[key] == entry.body, f"{entry.name} again with other bytes")
        first[key] = entry.body


def aborts(log: Log, seen: Seen) -> None:
    for entry in heard(log, "abort"):
        seen.expect(entry.sequence == 0, f"abort with sequence {entry.sequence}")
        seen.expect(len(entry.body) == HEADER_BYTES, "abort with fields")


def arms_in_range(log: Log, seen: Seen) -> None:
    most = 65535
    for entry in log:
        if isinstance(entry, Said) and entry.name == "hello_reply":
            most = entry.message["max_knots"]
        elif isinstance(entry, Heard) and entry.name == "arm":
            knots, limit = entry.get("knots"), entry.get("closed_limit_ms")
            seen.expect(MIN_KNOTS <= knots <= most, f"arm with {knots} knots")
            seen.expect(1 <= limit <= MAX_LIMIT_MS, f"arm for {limit} ms")


def asks_for_raw_in_range(log: Log, seen: Seen) -> None:
    for entry in heard(log, "arm"):
        many, from_us = entry.get("raw_pairs"), entry.get("raw_from_us")
        seen.expect(many <= catalogue.MAX_RAW_PAIRS, f"arm with {many} raw pairs")
        seen.expect(from_us <= LATEST_US, f"arm for raw pairs from {from_us} us on")


def fires_the_token(log: Log, seen: Seen) -> None:
    token, spent = 0, {0}
    known: set[tuple[int, int]] = set()
    for entry in log:
        if isinstance(entry, Said) and entry.name == "arm_reply":
            token = entry.message["token"]
        elif isinstance(entry, Heard) and entry.name == "fire":
            key = (entry.session, entry.sequence)
            if key in known:
                continue
            known.add(key)
            fired = entry.get("token")
            seen.expect(fired == token and fired not in spent, "a token that was not granted")
            seen.expect(any(entry.of_id()), "a sweep id of zeros")
            spent.add(fired)


def quiet(log: Log, seen: Seen) -> None:
    """From fire_reply until the charge has ended, or `quiet_ms` are over."""
    for fired, entry in charging(log):
        until = fired.at_s + fired.message["quiet_ms"] / 1000
        if isinstance(entry, Heard) and entry.message and entry.at_s < until:
            late = entry.name == "fire" and entry.at_s - fired.at_s < FLIGHT_S
            allowed = late or entry.name in ("abort", "heartbeat")
            seen.expect(allowed, f"{entry.name} while charging")


def heartbeats(log: Log, seen: Seen) -> None:
    """No longer silence from fire_reply until the charge has ended."""
    fired: Said | None = None
    last = 0.0
    for begun, entry in charging(log):
        if begun is not fired:
            fired, last = begun, begun.at_s
        silence = entry.at_s - last
        seen.expect(silence <= BEAT_S, f"{silence:.2f} s of silence while charging")
        last = entry.at_s


def charging(log: Log) -> Iterator[tuple[Said, Heard | Said]]:
    """All that the host sends between a fire_reply and the end of its charge, and that end.

    While charging a device answers nothing (W6), so any answer ends it too. What only came late
    (a fire_reply again, a notice of another sweep) does not.
    """
    fired: Said | None = None
    sweep_id = b""
    for entry in log:
        if isinstance(entry, Heard):
            if fired is not None:
                yield fired, entry
            sweep_id = entry.of_id() if entry.name == "fire" else sweep_id
        elif isinstance(entry, Event):
            fired = None if entry.what in (RESET, SHOWN, CLOSED) else fired
        elif entry.name == "fire_reply":
            fired = fired or entry
        elif fired is not None and not _of_another(entry, sweep_id):
            yield fired, entry
            fired = None


def _of_another(said: Said, sweep_id: bytes) -> bool:
    if said.name not in ("charge_ended", "bleed_ended"):
        return False
    return bool(said.message["sweep_id"] != sweep_id)


def frame_sizes(log: Log, seen: Seen) -> None:
    most = FIRST_FRAME
    for entry in log:
        if isinstance(entry, Said) and entry.name == "hello_reply":
            most = entry.message["max_frame"]
        elif isinstance(entry, Heard) and entry.body:
            size = len(entry.body) + framing.CRC_BYTES
            seen.expect(size <= most, f"{entry.name} of {size} bytes where {most} may be sent")


def within_the_window(log: Log, seen: Seen) -> None:
    window = 0
    for entry in log:
        if isinstance(entry, Said) and entry.name == "hello_reply":
            window = entry.message["window"]
        elif isinstance(entry, Heard) and entry.name in BURSTS:
            a_block = entry.get("a_block") or BURSTS[entry.name].most_a_block
            blocks = -(-entry.get("count") // a_block)
            seen.expect(blocks <= window, f"{blocks} blocks in one fetch, {window} at most")


def _within_the_sweep(name: str) -> Callable[[Log, Seen], None]:
    burst = BURSTS[name]

    def rule(log: Log, seen: Seen) -> None:
        there: dict[bytes, int] = {}
        for entry in log:
            if isinstance(entry, Said) and entry.name == "manifest":
                there[entry.message["sweep_id"]] = entry.message[burst.count]
            elif isinstance(entry, Heard) and entry.name == name:
                first, count = entry.get("first"), entry.get("count")
                whole = there.get(entry.of_id(), 0)
                what = f"{name} {first}, {count} of {whole} {burst.what}"
                seen.expect(count > 0 and first + count <= whole, what)
                fits = entry.get("a_block") <= burst.most_a_block
                seen.expect(fits, f"{what}, blocks too large")

    return rule


def _agree(name: str) -> Callable[[Log, Seen], None]:
    """At an acknowledgement the records last received are those of the manifest.

    Raw pairs need not be fetched; knots do.
    """
    burst = BURSTS[name]
    size = burst.record_bytes

    def rule(log: Log, seen: Seen) -> None:
        records: dict[int, bytes] = {}
        crcs: dict[bytes, tuple[int, int]] = {}
        done: set[bytes] = set()
        asked: set[int] = set()
        for entry in log:
            if isinstance(entry, Heard) and entry.name == name:
                asked.add(entry.sequence)
            elif isinstance(entry, Said) and entry.name == burst.block:
                if entry.message.sequence not in asked:
                    continue
                first, data = entry.message["first"], entry.message["data"]
                for place in range(len(data) // size):
                    records[first + place] = data[place * size : (place + 1) * size]
            elif isinstance(entry, Said) and entry.name == "manifest":
                values = entry.message.values
                crcs[values["sweep_id"]] = (values[burst.count], values[burst.crc])
            elif isinstance(entry, Heard) and entry.name == "acknowledge":
                sweep_id = entry.of_id()
                if sweep_id in crcs and sweep_id not in done:
                    done.add(sweep_id)
                    count, crc = crcs[sweep_id]
                    whole = b"".join(records.get(place, b"") for place in range(count))
                    if records or name == "fetch":
                        what = f"acknowledged with {burst.what} that do not agree with the CRC"
                        seen.expect(crc32(whole) == crc, what)
                    records = {}

    return rule


def acknowledges_the_held(log: Log, seen: Seen) -> None:
    known: set[bytes] = set()
    for entry in log:
        if isinstance(entry, Said) and entry.name in ("manifest", "status_reply", "charge_ended"):
            known.add(entry.message["sweep_id"])
        elif isinstance(entry, Heard) and entry.name == "acknowledge":
            seen.expect(entry.of_id() in known, "acknowledged without having read what is held")


def one_fire(log: Log, seen: Seen) -> None:
    """No second fire after an unknown session, a reset or a new boot nonce behind a fire."""
    fired: tuple[int, int] | None = None
    unknown, nonce = False, None
    for entry in log:
        if isinstance(entry, Heard) and entry.name == "fire":
            key = (entry.session, entry.sequence)
            if fired is not None and key != fired:
                seen.expect(not unknown, "a second fire, with the outcome of the first unknown")
            fired = key
        elif isinstance(entry, Heard) and entry.name == "acknowledge":
            fired, unknown = None, False
        elif isinstance(entry, Said) and entry.name == "refusal":
            if entry.message["code"] == 3 and fired is not None:
                unknown = True
                seen.expect(True, "")
        elif isinstance(entry, Said) and entry.name == "hello_reply":
            if fired is not None and nonce not in (None, entry.message["boot_nonce"]):
                unknown = True
                seen.expect(True, "")
            nonce = entry.message["boot_nonce"]


def no_probe_in_a_burst(log: Log, seen: Seen) -> None:
    """While blocks come; after a moment without one the burst is over for the host."""
    last: float | None = None
    for entry in log:
        if isinstance(entry, Heard) and entry.name in BURSTS:
            last = entry.at_s
        elif last is None:
            continue
        elif isinstance(entry, Said) and entry.name in BLOCKS:
            last = entry.at_s
        elif isinstance(entry, Said) and entry.name in REPLIES:
            seen.expect(True, "")
            last = None
        elif isinstance(entry, Heard) and entry.name == "heartbeat":
            seen.expect(entry.at_s - last > FLIGHT_S, "a heartbeat in a burst")


@dataclass(frozen=True, slots=True)
class Rule:
    name: str
    clauses: tuple[str, ...]
    expected: str
    look: Callable[[Log, Seen], None]


RULES = (
    Rule("coded by COBS", ("F1",), "frames", _decodes(framing.BAD_COBS)),
    Rule("the CRC agrees", ("F2",), "the CRC-32 of each body", _decodes(framing.BAD_CRC)),
    Rule("lengths", ("F3",), "1 to 252 bytes of body", lengths),
    Rule("no control bytes", ("F4",), "01 to 05 escaped, and none bare", no_control_bytes),
    Rule("a rescue has a reason", ("R3",), "a rescue only at a prompt", rescue_where_a_prompt_is),
    Rule("bodies", ("B1",), "fields as in the tables, toward the device", bodies),
    Rule("hello first", ("H1",), "hello, with session ffffffff", hello_first),
    Rule("hello does no harm", ("H5",), "a hello that a prompt passes over", hello_does_no_harm),
    Rule("a guard before each frame", ("R1",), "23 00", guard_before_each_frame),
    Rule("sessions", ("H2",), "the session of the last hello_reply", sessions),
    Rule("sequences", ("S1",), "sequences that rise from 1 on", sequences),
    Rule("repeats", ("S6",), "the same bytes for the same sequence", repeats),
    Rule("aborts", ("A2",), "sequence 0 and no fields", aborts),
    Rule("arms", ("W1",), "values within their range", arms_in_range),
    Rule("fires", ("W3",), "the granted token once, and an id", fires_the_token),
    Rule("quiet", ("W5",), "nothing but abort and heartbeat while charging", quiet),
    Rule("heartbeats", ("W7",), "one at least every 500 ms while charging", heartbeats),
    Rule("frame sizes", ("C1",), "64 bytes before hello, max_frame after it", frame_sizes),
    Rule("the window", ("C2",), "no more than `window` blocks a fetch", within_the_window),
    Rule("fetches", ("W11",), "knots of the sweep", _within_the_sweep("fetch")),
    Rule("the manifest's CRC", ("W12",), "knots that agree with it", _agree("fetch")),
    Rule("raw pairs asked for", ("K5",), "values within their range", asks_for_raw_in_range),
    Rule("raw fetches", ("K7",), "raw pairs of the sweep", _within_the_sweep("fetch_raw")),
    Rule("the raw pairs' CRC", ("K8",), "raw pairs that agree with it", _agree("fetch_raw")),
    Rule("acknowledgements", ("W10",), "the id of the held sweep", acknowledges_the_held),
    Rule("one fire", ("W14",), "no fire while an outcome is unknown", one_fire),
    Rule("no probe in a burst", ("T2",), "no heartbeat between blocks", no_probe_in_a_burst),
)
