"""What the device may do, told from the bytes alone: a second opinion on the service.

It sees every run of bytes that reaches the service and every byte that comes back. From SPEC.md
it knows when a fire is good, that each readable request gets exactly one answer, and that
what is of another session or repeated is not carried out. Frames and headers are read anew;
from kneewire comes the catalogue alone.
"""

from __future__ import annotations

import struct
import sys
from collections import Counter
from collections.abc import Callable
from typing import Any

from kneewire import catalogue
from kneewire.fields import FIXED

from .coding import LONGEST_RUN, unframed

HEADER = struct.Struct("<BII")
NO_ID = bytes(16)
KINDS = catalogue.KINDS
NAMES = {kind: row[0] for kind, row in catalogue.MESSAGES.items()}
TO_DEVICE = {kind for kind, row in catalogue.MESSAGES.items() if row[1] == catalogue.TO_DEVICE}
CHANGES = {kind for kind, row in catalogue.MESSAGES.items() if row[3]}
FROZEN = {kind for kind, row in catalogue.MESSAGES.items() if row[2]}
ABORT, FIRE = KINDS["abort"], KINDS["fire"]
ARM_REPLY, FIRE_REPLY, HELLO_REPLY = KINDS["arm_reply"], KINDS["fire_reply"], KINDS["hello_reply"]
REFUSAL = KINDS["refusal"]
# What comes before the answer to a fetch, and bytes of a record in it; and where its data begin.
BLOCKS = {KINDS["fetch"]: (KINDS["block"], 40, 12), KINDS["fetch_raw"]: (KINDS["raw_block"], 4, 13)}
BLOCK_KINDS = {kind for kind, _, _ in BLOCKS.values()}
UNKNOWN_KIND, MALFORMED, UNKNOWN_SESSION = 1, 2, 3


def _least_bytes(kind: int) -> int:
    """Bytes of a body with nothing in its fields of variable length."""
    lengths = {"text": 1, "bytes": 2, "knots": 1}
    rows = catalogue.MESSAGES[kind][4]
    return HEADER.size + sum(
        FIXED[row[1]][0] if row[1] in FIXED else lengths[row[1]] for row in rows
    )


LEAST_BYTES = {kind: _least_bytes(kind) for kind in catalogue.MESSAGES}


class Oracle:
    """`watch` puts it between the link and the service of one firmware."""

    def __init__(self, now_us: Callable[[], int]) -> None:
        self.now_us = now_us
        self.session: int | None = None
        self.highest = 0
        """Sequence of the last request that changed state."""
        self.token: int | None = None
        self.until_us = 0
        self.permit = False
        """A good fire was delivered, and its closing has not come yet."""
        self.closings = 0
        self.carried = 0
        """Handlers called for the request in hand."""
        self.replies: Counter[str] = Counter()
        self.refusals: Counter[tuple[str, int]] = Counter()
        self.fires: Counter[str] = Counter()
        """Fires of this session that were read, by their token."""
        self.granted: list[int] = []
        """Tokens of the past, for those who want to try them again."""
        self.end_reasons: Counter[int] = Counter()
        self.reads_all = True
        """False while the host does not read all that is written."""
        self._run = b""
        self._body: bytes | None = None
        self._fresh = False
        self._highest_before = 0
        self._unsure: set[int] = set()  # sequences of requests that were cut short

    # -- what the contact asks ---------------------------------------------------------------

    def closing(self) -> None:
        assert self.permit, "the contact closes without a valid arm and fire"
        self.permit = False
        self.closings += 1

    # -- what arrives ------------------------------------------------------------------------

    def hears(self, piece: bytes) -> None:
        """Bytes about to reach the service: up to a delimiter, or less."""
        assert not (self.permit and self.reads_all), "a good fire was left to wait"
        self.permit = False
        self._body = None
        self.carried = 0
        self._run += piece
        if self._run[-1:] == b"\0":
            run, self._run = self._run[:-1], b""
            if run and run != b"#":
                self._body = unframed(run, toward_device=True)
                if self._body is not None:
                    self._request(self._body)
        elif len(self._run) > 2 * LONGEST_RUN:
            self._run = self._run[-LONGEST_RUN - 1 :]  # too long, and stays so

    def _request(self, body: bytes) -> None:
        self._fresh = False
        self._highest_before = self.highest
        if len(body) < HEADER.size:
            return
        kind, session, sequence = HEADER.unpack_from(body)
        if kind == ABORT:
            self.token = None
        if not self._is_ours(kind, session, body) or kind not in CHANGES or kind == ABORT:
            return
        self._fresh = sequence > self.highest
        if not self._fresh:
            return
        self.highest = sequence
        if kind == FIRE:
            (token,) = struct.unpack_from("<I", body, HEADER.size)
            place = HEADER.size + 4
            kind_of_token = self._judged(token)
            self.fires[kind_of_token] += 1
            self.permit = kind_of_token == "valid" and body[place : place + 16] != NO_ID
            self.token = None

    def _judged(self, token: int) -> str:
        if token == self.token:
            return "valid" if self.now_us() < self.until_us else "expired"
        return "used" if token in self.granted else "never granted"

    def _is_ours(self, kind: int, session: int, body: bytes) -> bool:
        known = kind in TO_DEVICE and len(body) >= LEAST_BYTES[kind]
        return known and session == self.session

    # -- what is answered --------------------------------------------------------------------

    def said(self, data: bytes) -> None:
        """All that came back for the bytes just heard."""
        body = self._body
        if body is None:
            assert not data, "an answer to bytes that are no request"
            assert not self.carried, "a handler was called for bytes that are no request"
            return
        frames = self._frames(data)
        answers = [frame for frame in frames if frame[0] not in BLOCK_KINDS]
        if not self.reads_all:
            self._said_in_part(body, answers)
            return
        assert len(answers) == 1, f"{len(answers)} answers to one request"
        answer = answers[0]
        kind, session, sequence = HEADER.unpack_from(answer)
        code = answer[HEADER.size + 1] if kind == REFUSAL else 0
        self._count(answer)
        if len(body) < HEADER.size:
            assert code in {UNKNOWN_KIND, MALFORMED}, "a short body was not refused"
            return
        asked, asked_session, asked_sequence = HEADER.unpack_from(body)
        assert sequence == asked_sequence, "the answer has another sequence"
        if kind != HELLO_REPLY:
            assert session == asked_session, "the answer has another session"
        readable = asked in TO_DEVICE and len(body) >= LEAST_BYTES[asked]
        bound = readable and asked not in FROZEN and asked != ABORT
        if bound and asked_session != self.session:
            assert code == UNKNOWN_SESSION, "another session is not refused"
            assert not self.carried, "a handler was called for another session"
        elif bound and asked in CHANGES and not self._fresh:
            assert not self.carried, "a repeated or stale request was carried out"
        elif bound and asked_sequence in self._unsure and not self.carried:
            self.permit = False  # the answer of the request that was cut short, kept and repeated
        elif code:
            assert answer[HEADER.size] == asked, "another kind was refused"
        else:
            assert kind == asked | 0x80, "the answer is of another kind"
            self._answered(kind, session, answer)
        _check_blocks(body, frames[: frames.index(answer)], answer)
        if code:
            self.permit = False

    def _said_in_part(self, body: bytes, answers: list[bytes]) -> None:
        """The host has stopped reading: what was cut is unknown to it, and so to this."""
        if not answers or len(body) < HEADER.size:
            return
        asked, _, asked_sequence = HEADER.unpack_from(body)
        kind, session, sequence = HEADER.unpack_from(answers[-1])
        self._count(answers[-1])
        if kind == REFUSAL:
            self.permit = False
        elif (kind, sequence) == (asked | 0x80, asked_sequence) and (
            self._fresh or kind == HELLO_REPLY
        ):
            self._answered(kind, session, answers[-1])

    def _answered(self, kind: int, session: int, answer: bytes) -> None:
        if kind == HELLO_REPLY:
            given = struct.unpack_from("<I", answer, HELLO_SESSION)[0]
            if given != self.session:
                self.session, self.highest, self.token = given, 0, None
                self._unsure.clear()
        elif kind == ARM_REPLY:
            self.token, life_ms = struct.unpack_from("<IH", answer, HEADER.size)
            self.until_us = self.now_us() + 1000 * life_ms
            self.granted = [*self.granted[-15:], self.token]
        elif kind == FIRE_REPLY:
            assert self.permit, "a fire was accepted that is not good"

    def notices(self, data: bytes) -> None:
        """What was said unasked."""
        for frame in self._frames(data):
            self.replies[NAMES[frame[0]]] += 1
            if frame[0] == KINDS["charge_ended"]:
                self.end_reasons[frame[HEADER.size + 16]] += 1

    def _frames(self, data: bytes) -> list[bytes]:
        found = [unframed(run, toward_device=False) for run in data.split(b"\0") if run]
        if self.reads_all:
            assert data[-1:] in (b"", b"\0"), "the last frame has no end"
            assert None not in found, "a damaged frame was sent"
        return [frame for frame in found if frame is not None]

    def _count(self, answer: bytes) -> None:
        self.replies[NAMES[answer[0]]] += 1
        if answer[0] == REFUSAL:
            of_kind, code = answer[HEADER.size], answer[HEADER.size + 1]
            self.refusals[NAMES.get(of_kind, "unknown kind"), code] += 1

    # -- ways out ----------------------------------------------------------------------------

    def left(self) -> None:
        """To the prompt: whatever was granted is void."""
        self.token = None
        self.permit = False

    def cut_short(self) -> None:
        """Interrupted in the middle of a request: nobody knows how far it came."""
        if self._body is not None and len(self._body) >= HEADER.size:
            self.highest = self._highest_before
            self._unsure.add(HEADER.unpack_from(self._body)[2])


def _check_blocks(body: bytes, blocks: list[bytes], answer: bytes) -> None:
    """Blocks belong to the fetch before them, follow each other and hold what its reply says."""
    asked = body[0]
    if asked not in BLOCKS or answer[0] == REFUSAL:
        assert not blocks, "blocks that nobody asked for"
        return
    kind, size, head = BLOCKS[asked]
    place, count = struct.unpack_from("<HH", answer, HEADER.size)
    end = place + count
    for block in blocks:
        assert block[0] == kind, "blocks of another kind"
        assert block[1 : HEADER.size] == body[1 : HEADER.size], "a block of another fetch"
        assert struct.unpack_from("<H", block, HEADER.size)[0] == place, "a block out of place"
        many, rest = divmod(len(block) - head, size)
        assert not rest, "a block of no whole records"
        assert many > 0, "a block of nothing"
        place += many
    assert place == end, "other blocks than the reply says"


def _offset(kind: int, field: str) -> int:
    place = HEADER.size
    for name, width in catalogue.MESSAGES[kind][4]:
        if name == field:
            return place
        place += FIXED[width][0]
    raise KeyError(field)


HELLO_SESSION = _offset(HELLO_REPLY, "session")


def watch(service: Any, board: Any, oracle: Oracle) -> None:
    """Let the oracle see all that reaches this service and all that it answers."""
    feed = service.feed
    leave = sys.modules[type(service).__module__].Leave
    board.closing = oracle.closing

    def taken() -> bytes:
        data = bytes(board.sent)
        board.sent.clear()
        return data

    def watched(data: bytes) -> None:
        oracle.notices(taken())
        place = 0
        while place < len(data) and service.fired is None:
            end = data.find(b"\0", place) + 1 or len(data)
            oracle.hears(data[place:end])
            try:
                feed(data[place:end])
            except KeyboardInterrupt:
                oracle.cut_short()
                taken()
                raise
            except leave:
                oracle.said(taken())
                raise
            oracle.said(taken())
            place = end
        feed(data[place:])

    service.feed = watched
