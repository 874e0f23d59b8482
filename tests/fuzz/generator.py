"""Messages for a device: good ones, and ones that were good until something happened to them.

A mutation happens to the body, before CRC and COBS, so that the device reads it; or, for a
tenth, to the coded frame. Many mutated bodies are requests still: the oracle knows what they
may do.
"""

from __future__ import annotations

from collections import Counter
from random import Random
from typing import Any

from kneewire import catalogue, framing
from kneewire.fields import FIXED, bounds
from kneewire.messages import HEADER_BYTES, NO_SESSION, fingerprint, pack

from .oracle import NO_ID, TO_DEVICE, Oracle

CODED_SHARE = 0.1
TOP = (1 << 32) - 1
NAMES = sorted(catalogue.MESSAGES[kind][0] for kind in TO_DEVICE)
WEIGHTS = {"fire": 10, "arm": 8, "abort": 3, "prompt": 1}  # 4 for the others
# Where the firmware draws a line, both sides of it.
LIMITS: dict[str, tuple[int, ...]] = {
    "knots": (15, 16, 512, 513),
    "closed_limit_ms": (0, 1, 120_000, 120_001),
    "raw_pairs": (0, 1, 2048, 2049),
    "raw_from_us": (0, 120_000_000, 120_000_001),
    "exercise": (0, 3, 4),
    "a_block": (6, 7, 59, 60),
}


def places(name: str) -> list[tuple[str, str, int]]:
    """(field, type, offset) of a message, as far as the offset is fixed."""
    found = []
    place = HEADER_BYTES
    for field, kind in catalogue.MESSAGES[catalogue.KINDS[name]][4]:
        if kind not in FIXED:
            break
        found.append((field, kind, place))
        place += FIXED[kind][0]
    return found


PLACES = {name: places(name) for name in NAMES}


class Generator:
    """Draws from `rng`, and knows what a host knows: `oracle`, and the sweep that is held."""

    def __init__(self, rng: Random, oracle: Oracle, firmware: Any) -> None:
        self.rng = rng
        self.oracle = oracle
        self.held = firmware.held
        self.service = firmware.service
        self.nonce = 1
        self.mutations: Counter[str] = Counter()
        """Mutated messages, by what was mutated: the body, or the coded frame."""
        self.sessions = [0]
        """Sessions of the past."""
        self._names = [name for name in NAMES for _ in range(WEIGHTS.get(name, 4))]
        self._mutations = [
            mutation
            for weight, mutation in (
                (10, self._flip),
                (5, self._overwrite),
                (8, self._truncate),
                (18, self._extend),
                (8, self._splice),
                (8, self._other_kind),
                (24, self._field),
                (6, self._other_session),
                (8, self._other_sequence),
                (5, self._other_token),
            )
            for _ in range(weight)
        ]

    # -- good ones -------------------------------------------------------------------------

    def sequence(self) -> int:
        """The next one. Mutated requests raise it too, so the device itself is asked."""
        return min(self.service.last_sequence + 1, TOP)

    def body(self, name: str, **changes: Any) -> bytes:
        """A request that may be granted now."""
        session = NO_SESSION if name == "hello" else self.oracle.session
        sequence = 0 if name == "abort" else self.sequence()
        values = {field: self._good(name, field, kind) for field, kind in self._rows(name)}
        return pack(name, NO_SESSION if session is None else session, sequence, values | changes)

    def frame(self, name: str, **changes: Any) -> bytes:
        """As a host sends it."""
        return framing.GUARD + framing.encode(self.body(name, **changes), True)

    def hello(self, *, anew: bool) -> bytes:
        """`anew`: as another host, which ends the session there is."""
        if anew:
            self.nonce += 1
            self.sessions = [*self.sessions[-15:], self.oracle.session or 0]
        return self.frame("hello", host_nonce=self.nonce)

    def _rows(self, name: str) -> Any:
        return catalogue.MESSAGES[catalogue.KINDS[name]][4]

    def _good(self, name: str, field: str, kind: str) -> Any:
        rng = self.rng
        if field == "token":
            return self.oracle.token or self._old_token()
        if field == "sweep_id":
            return rng.randbytes(16) if name == "fire" else self.held.sweep_id
        if field == "knots":
            return rng.choice((16, 17, 32, 96) if rng.random() < 0.95 else (511, 512))
        if field == "closed_limit_ms":
            return rng.choice((1, 4, 50, 1000, 120_000))
        if field == "raw_pairs":
            return rng.choice((0, 0, 1, 60, 700, 2048))
        if field in {"limit_mv", "limit_ma"}:
            return rng.choice((TOP, TOP, TOP, 20_000, 70_000))
        if field == "exercise":
            return rng.choice((0, 0, 0, 0, 1, 3))
        if field == "raw_from_us":
            return rng.choice((0, 0, 3, 400, 5000))
        there = self.held.raw_count if name == "fetch_raw" else self.held.count
        if field == "first":
            return rng.randrange(max(there, 1))
        if field == "count":
            return rng.choice((1, 7, max(there, 1)))
        if field == "host_nonce":
            return self.nonce
        if field == "fingerprint":
            return fingerprint()
        if field in {"a_block", "major"}:
            return 0
        if field in {"confirmed", "minor"}:
            return 1
        return self._any(kind)

    def _old_token(self) -> int:
        old, rng = self.oracle.granted, self.rng
        if not old:
            return rng.getrandbits(32)
        return old[-1] if rng.random() < 0.5 else rng.choice(old)

    def _any(self, kind: str) -> Any:
        """A value of that type, at its ends or anywhere."""
        rng = self.rng
        if kind not in FIXED:
            return "" if kind == "text" else b""
        size, signed = FIXED[kind]
        if signed is None:
            return rng.choice((NO_ID[:size], rng.randbytes(size), b"\xff" * size))
        low, high = bounds(kind)
        return rng.choice((low, low + 1, high, high - 1, high // 2 + 1, rng.randint(low, high)))

    # -- mutated ones ----------------------------------------------------------------------

    def mutated(self) -> bytes:
        """The bytes of one mutated message, often with the guard of a host before it."""
        rng = self.rng
        name = rng.choice(self._names)
        body = self.body(name)
        guard = framing.GUARD if rng.random() < 0.7 else b""
        if rng.random() < CODED_SHARE:
            self.mutations["coded"] += 1
            return guard + self._coded(framing.encode(body, True))
        self.mutations["body"] += 1
        changed = body
        while changed == body:
            changed = rng.choice(self._mutations)(name, changed)
        return guard + framing.encode(changed[:300], True)

    def _flip(self, name: str, body: bytes) -> bytes:
        out = bytearray(body or b"\0")
        for _ in range(self.rng.randint(1, 3)):
            place = self.rng.randrange(8 * len(out))
            out[place // 8] ^= 1 << place % 8
        return bytes(out)

    def _overwrite(self, name: str, body: bytes) -> bytes:
        place = self.rng.randrange(len(body))
        piece = self.rng.choice((b"\0", b"\xff", self.rng.randbytes(4)))
        return body[:place] + piece + body[place + len(piece) :]

    def _truncate(self, name: str, body: bytes) -> bytes:
        return body[: self.rng.randrange(1, len(body))]

    def _extend(self, name: str, body: bytes) -> bytes:
        return body + self.rng.randbytes(self.rng.choice((1, 1, 2, 8, 40)))

    def _splice(self, name: str, body: bytes) -> bytes:
        other = self.body(self.rng.choice(self._names))
        return body[: self.rng.randint(1, len(body))] + other[self.rng.randrange(len(other)) :]

    def _other_kind(self, name: str, body: bytes) -> bytes:
        rng = self.rng
        kinds = sorted(catalogue.MESSAGES)
        return bytes([rng.choice((rng.choice(kinds), rng.randrange(256)))]) + body[1:]

    def _field(self, name: str, body: bytes) -> bytes:
        if not PLACES[name]:
            return self._extend(name, body)
        field, kind, place = self.rng.choice(PLACES[name])
        limits = LIMITS.get(field)
        value = self.rng.choice(limits) if limits and self.rng.random() < 0.5 else self._any(kind)
        return self._put(body, place, kind, value)

    def _put(self, body: bytes, place: int, kind: str, value: Any) -> bytes:
        size, signed = FIXED[kind]
        if signed is not None:
            value = (value & ((1 << 8 * size) - 1)).to_bytes(size, "little")
        return body[:place] + value + body[place + size :]

    def _other_session(self, name: str, body: bytes) -> bytes:
        rng = self.rng
        live = self.oracle.session or 0
        other = (NO_SESSION, 0, live ^ 1 << rng.randrange(32), rng.choice(self.sessions))
        return self._put(body, 1, "u32", rng.choice(other))

    def _other_sequence(self, name: str, body: bytes) -> bytes:
        rng = self.rng
        last = self.service.last_sequence
        old = max(last - rng.randrange(12), 0)
        other = (0, last, last, old, old, min(last + 2, TOP), rng.randrange(last + 1))
        # Seldom far ahead: after the last sequence only another session goes on.
        ahead = rng.choice((TOP, rng.getrandbits(32)))
        return self._put(body, 5, "u32", ahead if rng.random() < 0.02 else rng.choice(other))

    def _other_token(self, name: str, body: bytes) -> bytes:
        if name != "fire":
            return self._field(name, body)
        other = (0, self._old_token(), self._old_token(), self.rng.getrandbits(32))
        return self._put(body, HEADER_BYTES, "u32", self.rng.choice(other))

    def _coded(self, coded: bytes) -> bytes:
        rng = self.rng
        place = rng.randrange(len(coded))
        way = rng.randrange(6)
        if way == 0:
            return (
                coded[:place] + bytes([coded[place] ^ 1 << rng.randrange(8)]) + coded[place + 1 :]
            )
        if way == 1:
            return coded[:place] + coded[place + 1 :]
        if way == 2:
            return coded[:place] + bytes([rng.choice((0, 1, 2, 4, 5, 255))]) + coded[place:]
        if way == 3:
            return coded[:place] + rng.randbytes(rng.randint(1, 60)) + coded[place:]
        if way == 4:
            return coded[:-1]
        return coded[: place + 1] + b"\x03" * rng.randrange(2) + coded[place + 1 :] + coded
