"""Recordings: every byte of a session, each way, with its time, a line of JSON a read or write.

Comes in: what a port reads and writes, or a file. Goes out: the file, or its chunks and frames.
What the frames mean to a host is the business of `replay.py`. The lines of a file:

{"kneewise_recording": 1, "protocol": "0.2", "target": "COM5", "begun_utc": "2031-05-06T..."}
{"t": 0.000214, "to": "device", "hex": "2300..."}   t: s since the beginning, by the port's clock
{"t": 7.5, "event": "opened"}                       the port was opened again
"""

from __future__ import annotations

import json
import logging
from collections.abc import Iterator
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any, BinaryIO

from kneewire import PROTOCOL, catalogue, framing
from kneewire.messages import Refused, unpack
from kneewise.errors import UsageError
from kneewise.link.frames import TO_DEVICE, TO_HOST, Seen, of_bad
from kneewise.link.port import Port

log = logging.getLogger(__name__)
log.addHandler(logging.NullHandler())

FORMAT = 1
OPENED = "opened"
LONGEST_S = 1e8  # more than three years
LINE_BYTES = 1 << 20
RUN_BYTES = 4096
_WAYS = {"device": TO_DEVICE, "host": TO_HOST}


def protocol() -> str:
    """The protocol of this host, as a recording's header names it."""
    return f"{PROTOCOL[0]}.{PROTOCOL[1]}"


class Recorder:
    """Writes one recording, over however many ports; `stopped` says why it ended early, or "".

    The file is made with the first port. Each line goes out in one unbuffered write, so that
    what ends the program leaves whole lines.
    """

    def __init__(self, path: Path | str, target: str) -> None:
        self.path = Path(path)
        self.stopped = ""
        self._target = target
        self._file: BinaryIO | None = None
        self._begun_s: float | None = None

    def wrap(self, port: Port) -> RecordingPort:
        """`port`, recorded. UsageError where the file exists already or cannot be made."""
        if self._begun_s is None:
            try:
                self._begin(port.clock())
            except BaseException:
                port.close()
                raise
        else:
            self._put({"t": self._since(port.clock()), "event": OPENED})
        return RecordingPort(port, self)

    def note(self, way: str, data: bytes, time_s: float) -> None:
        """One read or write of a port, at that time of its clock."""
        to = "device" if way == TO_DEVICE else "host"
        self._put({"t": self._since(time_s), "to": to, "hex": data.hex()})

    def outcome(self) -> str:
        """What became of it, for people."""
        if self.stopped:
            return f"The recording {self.path} stopped early ({self.stopped}); it is not whole."
        return f"Recorded in {self.path}"

    def close(self) -> None:
        """Close the file; twice is harmless."""
        if self._file is not None:
            self._file.close()
            self._file = None

    def _begin(self, time_s: float) -> None:
        what = f"recording to {self.path}"
        try:
            self._file = self.path.open("xb", buffering=0)
        except FileExistsError as error:
            raise UsageError(
                what,
                found="a file of that name",
                expected="a new file: a recording is never overwritten",
                next_step="choose another name, or take that file away",
            ) from error
        except OSError as error:
            raise UsageError(
                what,
                found=error.strerror or str(error),
                expected="a file that can be made",
                next_step="choose another folder, or make room",
            ) from error
        self._begun_s = time_s
        header = {"kneewise_recording": FORMAT, "protocol": protocol(), "target": self._target}
        self._put({**header, "begun_utc": datetime.now(UTC).isoformat()})

    def _since(self, time_s: float) -> float:
        return round(max(time_s - (self._begun_s or 0.0), 0.0), 6)

    def _put(self, values: dict[str, Any]) -> None:
        if self._file is None:
            return
        line = (json.dumps(values) + "\n").encode()
        try:
            if self._file.write(line) != len(line):
                raise OSError("no room left on the disk")
        except OSError as error:
            # A sweep under way is worth more than its recording.
            self.stopped = error.strerror or str(error)
            log.warning("the recording %s has stopped: %s", self.path, self.stopped)
            self._give_up()

    def _give_up(self) -> None:
        try:
            self.close()
        except OSError:
            self._file = None


class RecordingPort:
    """`port`, with all that goes over it noted by `recorder`."""

    def __init__(self, port: Port, recorder: Recorder) -> None:
        self.name = port.name
        self._port = port
        self._recorder = recorder

    def clock(self) -> float:
        return self._port.clock()

    def sleep(self, seconds: float) -> None:
        self._port.sleep(seconds)

    def read(self, timeout_s: float) -> bytes:
        data = self._port.read(timeout_s)
        if data:
            self._recorder.note(TO_HOST, data, self._port.clock())
        return data

    def write(self, data: bytes) -> None:
        # The time before it: a write that blocks belongs to what the answer took.
        began_s = self._port.clock()
        self._port.write(data)
        self._recorder.note(TO_DEVICE, data, began_s)

    def close(self) -> None:
        self._port.close()


@dataclass(frozen=True, slots=True)
class Chunk:
    """One read or write; `way` is TO_DEVICE or TO_HOST, or OPENED where a port was opened."""

    time_s: float
    way: str
    data: bytes = b""


@dataclass(frozen=True, slots=True)
class Recording:
    """A recording as it was read. `cut_short`: its last line is not whole and was left out."""

    path: Path
    protocol: str
    target: str
    begun_utc: datetime
    chunks: tuple[Chunk, ...]
    cut_short: bool

    @property
    def emulated(self) -> bool:
        """True where a device in it says that it is an emulated one."""
        return any(_says_emulated(seen.body) for seen in frames_of(self) if seen.body)

    def remark(self) -> str:
        """What it is, for people."""
        cut = "; its last line is cut short and left out" if self.cut_short else ""
        return f"recorded {self.begun_utc:%Y-%m-%d %H:%M:%S} UTC from {self.target or '?'}{cut}"


def frames_of(recording: Recording) -> Iterator[Seen]:
    """Its frames and texts both ways, in order; an entry without a way where a port was opened."""
    halves = _halves()
    time_s = 0.0
    for chunk in recording.chunks:
        time_s = chunk.time_s
        if chunk.way == OPENED:
            for half in halves.values():
                yield from half.end(time_s)
            halves = _halves()
            yield Seen(time_s, "", 0, b"", "the port was opened again")
        else:
            yield from halves[chunk.way].take(chunk)
    for half in halves.values():
        yield from half.end(time_s)


class _Half:
    """One way of a recording, being decoded."""

    def __init__(self, way: str) -> None:
        self.way = way
        self._decoder = framing.Decoder(RUN_BYTES, toward_device=way == TO_DEVICE)
        self._coded = 0

    def take(self, chunk: Chunk) -> Iterator[Seen]:
        for piece in chunk.data.split(framing.DELIMITER)[:-1]:
            yield from self._feed(chunk.time_s, piece + framing.DELIMITER)
        last = chunk.data[chunk.data.rfind(framing.DELIMITER) + 1 :]
        yield from self._feed(chunk.time_s, last)

    def end(self, time_s: float) -> Iterator[Seen]:
        """What came after the last delimiter."""
        pending = self._decoder.pending()
        if pending:
            yield of_bad(time_s, self.way, framing.Bad("cut short", pending))

    def _feed(self, time_s: float, piece: bytes) -> Iterator[Seen]:
        self._coded += len(piece)
        for item in self._decoder.feed(piece):
            if isinstance(item, framing.Bad):
                yield of_bad(time_s, self.way, item)
            else:
                yield Seen(time_s, self.way, self._coded, item)
            self._coded = 0


def _halves() -> dict[str, _Half]:
    return {way: _Half(way) for way in (TO_DEVICE, TO_HOST)}


def _says_emulated(body: bytes) -> bool:
    try:
        message = unpack(body)
    except Refused:
        return False
    return message.name == "hello_reply" and bool(message["flags"] & catalogue.FLAG_EMULATED)


# -- reading a file ------------------------------------------------------------------------


def read_recording(path: Path | str) -> Recording:
    """The recording in `path`, whatever else the file holds: UsageError names the line.

    A last line that is cut short is left out, and told by `cut_short` and in the log.
    """
    path = Path(path)
    try:
        with path.open("rb") as file:
            return _read(path, file)
    except OSError as error:
        raise UsageError(
            f"reading the recording {path}",
            found=error.strerror or str(error),
            expected="a file that can be read",
            next_step="check the path; `--record FILE` makes a recording, --on names a tracer",
        ) from error


def _read(path: Path, file: BinaryIO) -> Recording:
    header: dict[str, Any] = {}
    chunks: list[Chunk] = []
    cut_short = False
    number = 0
    while line := file.readline(LINE_BYTES):
        number += 1
        try:
            values = _object(line)
        except ValueError as error:
            # The program or its disk ended in the middle of a line; the first one must be whole.
            if number > 1 and not line.endswith(b"\n") and len(line) < LINE_BYTES:
                cut_short = True
                log.warning("the last line of %s is cut short and left out", path)
                break
            raise _damaged(path, number, str(error)) from error
        try:
            if number == 1:
                header = _header(path, values)
            else:
                chunks.append(_chunk(values))
        except ValueError as error:
            raise _damaged(path, number, str(error)) from error
    if not number:
        raise _damaged(path, 1, "an empty file")
    return Recording(path=path, chunks=tuple(chunks), cut_short=cut_short, **header)


def _object(line: bytes) -> dict[str, Any]:
    """The JSON object of a line; ValueError."""
    try:
        values = json.loads(line)
    except (ValueError, RecursionError):
        raise ValueError("no JSON object") from None
    if not isinstance(values, dict):
        raise ValueError("no JSON object")
    return values


def _header(path: Path, values: dict[str, Any]) -> dict[str, Any]:
    version = values.get("kneewise_recording")
    if type(version) is not int:
        raise ValueError("no header of a recording")
    if version != FORMAT:
        raise UsageError(
            f"reading the recording {path}",
            found=f"line 1: format {version}",
            expected=f"format {FORMAT}",
            next_step="read it with the version of kneewise that recorded it",
        )
    named = {name: values.get(name) for name in ("protocol", "target")}
    for name, value in named.items():
        if not isinstance(value, str):
            raise ValueError(f"no text for {name!r}")
    try:
        begun = datetime.fromisoformat(values["begun_utc"]).astimezone(UTC)
        _ = begun + timedelta(seconds=2 * LONGEST_S)
    except (KeyError, TypeError, ValueError, OverflowError, OSError):
        raise ValueError("no date and time for 'begun_utc'") from None
    return {**named, "begun_utc": begun}


def _chunk(values: dict[str, Any]) -> Chunk:
    time_s = values.get("t")
    if isinstance(time_s, bool) or not isinstance(time_s, int | float):
        raise ValueError("no time in seconds for 't'")
    if not 0 <= time_s <= LONGEST_S:
        raise ValueError(f"a time 't' that is not from 0 to {LONGEST_S:g} s")
    if values.get("event") == OPENED:
        return Chunk(float(time_s), OPENED)
    way = values.get("to")
    if not isinstance(way, str) or way not in _WAYS:
        raise ValueError('neither "to": "device" or "host" nor "event": "opened"')
    try:
        return Chunk(float(time_s), _WAYS[way], bytes.fromhex(values["hex"]))
    except (KeyError, TypeError, ValueError):
        raise ValueError("no bytes for 'hex'") from None


def _damaged(path: Path, number: int, found: str) -> UsageError:
    return UsageError(
        f"reading the recording {path}",
        found=f"line {number}: {found}",
        expected="a recording as `--record FILE` makes it",
        next_step="take the file from a backup, or record anew; "
        "the lines before that one make a recording of their own",
    )
