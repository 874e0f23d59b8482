"""A recording in the place of a device: a port that answers as the device did.

Comes in: a recording, and what a host writes. Goes out: the recorded answers, with the host's
own session, sequences and sweep ids put in. What was not recorded is answered by silence. Time
is virtual: it passes in reads and sleeps alone, and an answer comes as long after its request
as it did, so that deadlines and clock probes hold and nobody waits.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Iterator
from dataclasses import dataclass, field
from datetime import datetime, timedelta
from math import inf, nextafter
from typing import Any

from kneewire import catalogue, framing
from kneewire.messages import (
    KNOT_BYTES,
    KNOTS_A_BLOCK,
    RAW_A_BLOCK,
    RAW_BYTES,
    Message,
    Refused,
    pack,
    unpack,
)
from kneewise.errors import LinkError, UsageError
from kneewise.link.frames import TO_DEVICE
from kneewise.link.recording import OPENED, RUN_BYTES, Recording, protocol

# Answered by what was recorded under the sweep's own id alone.
BY_SWEEP = ("fetch", "fetch_raw", "acknowledge")
# What these tell is another thing after a fire than before it.
OF_A_SWEEP = ("status", "read_manifest")
# By request: the message that its records come in, bytes of a record, records in a block at most.
BURSTS = {
    "fetch": ("block", KNOT_BYTES, KNOTS_A_BLOCK),
    "fetch_raw": ("raw_block", RAW_BYTES, RAW_A_BLOCK),
}

Records = dict[int, bytes]
"""By their number."""


@dataclass(slots=True)
class Piece:
    """What the device sent: a frame's message, else raw bytes; neither where the link went."""

    time_s: float
    raw: bytes = b""
    message: Message | None = None
    lost: bool = False

    @property
    def once(self) -> bool:
        """Damage, text and a lost link happened once, however often an answer is asked for."""
        return self.message is None


@dataclass(slots=True)
class Exchange:
    """A request and what came until the next one; a port's opening has no request."""

    kind: str
    time_s: float
    request: Message | None
    pieces: list[Piece] = field(default_factory=list)
    used: bool = False


def _changes(kind: str) -> bool:
    """True where such a request changes the device's state."""
    return kind != OPENED and catalogue.MESSAGES[catalogue.KINDS[kind]][3]


def _reads_only(kind: str) -> bool:
    """True where such a request neither greets nor changes anything."""
    if kind == OPENED:
        return False
    _, _, frozen, changes, _ = catalogue.MESSAGES[catalogue.KINDS[kind]]
    return not (frozen or changes)


def exchanges_of(recording: Recording) -> list[Exchange]:
    """A recording as exchanges, in order; the first is the opening of the port."""
    script = _Script()
    for chunk in recording.chunks:
        if chunk.way == OPENED:
            script.opened(chunk.time_s)
        elif chunk.way == TO_DEVICE:
            script.to_device(chunk.time_s, chunk.data)
        else:
            script.to_host(chunk.time_s, chunk.data)
    return script.exchanges


class _Script:
    """Exchanges in the making."""

    def __init__(self) -> None:
        self.exchanges = [Exchange(OPENED, 0.0, None)]
        self._requests = framing.Decoder(RUN_BYTES, toward_device=True)
        self._run: list[Piece] = []

    def opened(self, time_s: float) -> None:
        self.exchanges[-1].pieces.append(Piece(time_s, lost=True))
        self.exchanges.append(Exchange(OPENED, time_s, None))
        self._requests = framing.Decoder(RUN_BYTES, toward_device=True)
        self._run = []

    def to_device(self, time_s: float, data: bytes) -> None:
        for item in self._requests.feed(data):
            if isinstance(item, bytes) and (message := _message(item)) is not None:
                self.exchanges.append(Exchange(message.name, time_s, message))

    def to_host(self, time_s: float, data: bytes) -> None:
        while data:
            end = data.find(framing.DELIMITER) + 1 or len(data)
            piece = Piece(time_s, data[:end])
            self._run.append(piece)
            self.exchanges[-1].pieces.append(piece)
            if data[:end].endswith(framing.DELIMITER):
                self._complete()
            data = data[end:]

    def _complete(self) -> None:
        """A run has ended: a frame takes the place of its last piece, all else stays raw."""
        run = b"".join(piece.raw for piece in self._run)[:-1]
        item = framing.decode_run(run, toward_device=False) if 0 < len(run) <= RUN_BYTES else b""
        message = _message(item) if isinstance(item, bytes) else None
        if message is not None:
            for piece in self._run:
                piece.raw = b""
            self._run[-1].message = message
        self._run = []


def _message(body: bytes) -> Message | None:
    try:
        return unpack(body)
    except Refused:
        return None


class ReplayPort:
    """Plays a recording to a host. Use `connect` to open it, and again after a lost link.

    UsageError where the recording is of another protocol.
    """

    def __init__(self, recording: Recording) -> None:
        if recording.protocol != protocol():
            raise UsageError(
                f"replaying {recording.path}",
                found=f"a recording of protocol {recording.protocol}",
                expected=f"protocol {protocol()}, which this host speaks",
                next_step="replay it with the version of kneewise that recorded it",
            )
        self.name = f"replay:{recording.path}"
        self._begun = recording.begun_utc
        self._exchanges = exchanges_of(recording)
        self._records = {name: _records_of(self._exchanges, name) for name in BURSTS}
        self._place = 0
        self._clock_s = 0.0
        # Virtual time at which the exchange last used began, and when it was recorded.
        self._from_s, self._recorded_s = 0.0, 0.0
        self._due: deque[tuple[float, bytes | None]] = deque()
        self._open = False
        self._decoder = framing.Decoder(RUN_BYTES, toward_device=True)
        self._session = 0
        self._sequences: dict[int, int] = {}
        self._to_recorded: dict[bytes, bytes] = {}
        self._to_host: dict[bytes, bytes] = {}

    # -- a port --------------------------------------------------------------------------

    def connect(self) -> ReplayPort:
        """Open it; what was pending is lost. The port itself, for a session to use."""
        self._due.clear()
        self._decoder = framing.Decoder(RUN_BYTES, toward_device=True)
        self._open = True
        opening = self._first(OPENED, None, self._place, len(self._exchanges))
        if opening is not None:
            self._place = opening + 1
            self._play(self._exchanges[opening], None)
        return self

    def clock(self) -> float:
        return self._clock_s

    def utc(self) -> datetime:
        """When that which is replayed now was recorded."""
        ago_s = min(self._clock_s - self._from_s, 1e6)
        return self._begun + timedelta(seconds=self._recorded_s + ago_s)

    def sleep(self, seconds: float) -> None:
        self._clock_s += max(seconds, 0.0)

    def read(self, timeout_s: float) -> bytes:
        if not self._open:
            raise self._lost("the port is closed")
        end = self._clock_s + timeout_s
        if not self._due or self._due[0][0] > end:
            # However little time was asked for, some of it passes: a host cannot wait for ever.
            self._clock_s = max(end, nextafter(self._clock_s, inf))
            return b""
        self._clock_s = max(self._clock_s, self._due[0][0])
        data = b""
        while self._due and self._due[0][0] <= self._clock_s:
            piece = self._due[0][1]
            if piece is None:
                if data:
                    break
                self._due.clear()
                self._open = False
                raise self._lost("the link was lost here when it was recorded")
            data += piece
            self._due.popleft()
        return data

    def write(self, data: bytes) -> None:
        if not self._open:
            raise self._lost("the port is closed")
        for item in self._decoder.feed(data):
            request = _message(item) if isinstance(item, bytes) else None
            if request is not None:
                self._answer(request)

    def close(self) -> None:
        self._open = False

    def _lost(self, found: str) -> LinkError:
        return LinkError(
            f"talking to {self.name}",
            found=found,
            expected="an open port",
            next_step="`kneewise wire` shows what was recorded",
        )

    # -- answers -------------------------------------------------------------------------

    def _answer(self, request: Message) -> None:
        # All that was recorded before the next request has come by the time of the next request.
        self._due = deque((min(due, self._clock_s), data) for due, data in self._due)
        self._session = request.session
        sweep_id: bytes = request.values.get("sweep_id", b"")
        recorded_id = self._to_recorded.get(sweep_id, sweep_id)
        place = self._find(request.name, recorded_id if request.name in BY_SWEEP else None)
        if place is None:
            return
        exchange = self._exchanges[place]
        # An earlier change, made once more, goes on from there; a reading takes nothing back.
        if place >= self._place or _changes(request.name):
            self._place = place + 1
        recorded = exchange.request
        if request.name == "hello":
            self._sequences.clear()
        if recorded is not None:
            self._sequences[recorded.sequence] = request.sequence
            if request.name == "fire":
                self._to_recorded[sweep_id] = recorded["sweep_id"]
                self._to_host[recorded["sweep_id"]] = sweep_id
        self._play(exchange, request)

    def _find(self, kind: str, sweep_id: bytes | None) -> int | None:
        """The exchange that answers: the next of its kind, else the last before.

        What only reads does not look past a greeting or a change of state that the host has
        not come to, while there is an answer from before it.
        """
        end = len(self._exchanges)
        border = end
        if _reads_only(kind):
            later = range(self._place, end)
            border = next((i for i in later if not _reads_only(self._exchanges[i].kind)), end)
        found = self._first(kind, sweep_id, self._place, border)
        if found is None:
            before = reversed(range(self._known_from(kind), self._place))
            found = next((i for i in before if self._fits(i, kind, sweep_id)), None)
        if found is None:
            found = self._first(kind, sweep_id, border, end)
        return found

    def _known_from(self, kind: str) -> int:
        """From where on what was read still holds: a sweep under way makes all before it old."""
        if kind in OF_A_SWEEP:
            for place in reversed(range(self._place)):
                if self._exchanges[place].kind == "acknowledge":
                    break
                if self._exchanges[place].kind == "fire":
                    return place
        return 0

    def _first(self, kind: str, sweep_id: bytes | None, start: int, end: int) -> int | None:
        return next((i for i in range(start, end) if self._fits(i, kind, sweep_id)), None)

    def _fits(self, place: int, kind: str, sweep_id: bytes | None) -> bool:
        exchange = self._exchanges[place]
        if exchange.kind != kind:
            return False
        request = exchange.request
        return sweep_id is None or (request is not None and request["sweep_id"] == sweep_id)

    def _play(self, exchange: Exchange, request: Message | None) -> None:
        """Put the answers of an exchange in line, each as late as it was."""
        self._from_s, self._recorded_s = self._clock_s, exchange.time_s
        records = self._records_for(request) if request is not None else None
        made_anew: tuple[str, ...] = ()
        if request is not None and records:
            made_anew = (BURSTS[request.name][0], f"{request.name}_reply")
            for frame in self._burst(request, records):
                self._due.append((self._clock_s, frame))
        for piece in exchange.pieces:
            if exchange.used and piece.once:
                continue
            due = self._clock_s + max(piece.time_s - exchange.time_s, 0.0)
            if self._due:
                due = max(due, self._due[-1][0])
            message = piece.message
            if message is None:
                if piece.lost or piece.raw:
                    self._due.append((due, None if piece.lost else piece.raw))
            elif message.name not in made_anew:
                self._due.append((due, self._frame(message)))
        exchange.used = True

    def _frame(self, message: Message) -> bytes:
        """A recorded message as the device would send it to this host."""
        session = message.session if message.name == "hello_reply" else self._session
        values: dict[str, Any] = dict(message.values)
        if "sweep_id" in values:
            values["sweep_id"] = self._to_host.get(values["sweep_id"], values["sweep_id"])
        # An answer to a request that this host never sent must not be taken for one to another.
        sequence = self._sequences.get(message.sequence, 0)
        body = pack(message.name, session, sequence, values)
        return framing.encode(body, toward_device=False)

    # -- knots and raw pairs -------------------------------------------------------------

    def _records_for(self, request: Message) -> Records | None:
        """All recorded knots, or raw pairs, of the sweep that a fetch asks for."""
        if request.name not in BURSTS:
            return None
        sweep_id = request["sweep_id"]
        return self._records[request.name].get(self._to_recorded.get(sweep_id, sweep_id))

    def _burst(self, request: Message, records: Records) -> Iterator[bytes]:
        """The answer to a fetch in blocks of its own size; what was never recorded is left out."""
        block, _, fit = BURSTS[request.name]
        most = min(request["a_block"] or fit, fit)
        first, after = request["first"], request["first"] + request["count"]
        place = first
        while place < after:
            data = b""
            start = place
            while place < min(start + most, after) and place in records:
                data += records[place]
                place += 1
            if data:
                yield self._coded(request, block, {"first": start, "data": data})
            else:
                place += 1
        end = {"first": first, "count": request["count"]}
        yield self._coded(request, f"{request.name}_reply", end)

    def _coded(self, request: Message, name: str, values: dict[str, Any]) -> bytes:
        body = pack(name, request.session, request.sequence, values)
        return framing.encode(body, toward_device=False)


def _records_of(exchanges: list[Exchange], name: str) -> dict[bytes, Records]:
    """By recorded sweep id, what came for requests of that name, whatever blocks brought it."""
    block_name, size, _ = BURSTS[name]
    known: dict[bytes, Records] = {}
    of_sweep: dict[tuple[int, int], bytes] = {}
    for exchange in exchanges:
        request = exchange.request
        if request is not None and request.name == name:
            of_sweep[request.session, request.sequence] = request["sweep_id"]
        for piece in exchange.pieces:
            block = piece.message
            if block is None or block.name != block_name:
                continue
            sweep_id = of_sweep.get((block.session, block.sequence))
            if sweep_id is None:
                continue
            records = known.setdefault(sweep_id, {})
            data: bytes = block["data"]
            for number in range(len(data) // size):
                record = data[number * size : (number + 1) * size]
                records.setdefault(block["first"] + number, record)
    return known
