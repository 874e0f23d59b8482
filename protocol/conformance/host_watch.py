"""What a host under test has sent, split into what it means, with what it was told between.

Comes in: raw bytes from the host, and notes of the scripted device. Goes out: one list of
entries in the order of time, which the rules read.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from kneewire import catalogue, framing
from kneewire.messages import Message, Refused, unpack

LEAVE = b"\r\x03\x03\x02"
START = b"from tracer import app; app.main()\r"
INTERRUPTING = (0x01, 0x03, 0x04, 0x05)
# Sent by a host to make a prompt show itself; no frame, and no order to a running firmware.
NUDGES = (b"\x02", b"\r\x02", b"\r")


@dataclass(frozen=True, slots=True)
class Heard:
    """One run from the host. `reason` says why it is no frame."""

    at_s: float
    body: bytes
    message: Message | None
    guarded: bool
    """The run before was the guard alone."""
    reason: str = ""

    @property
    def name(self) -> str:
        return "" if self.message is None else self.message.name

    def get(self, field: str) -> int:
        """A field's value, for messages that have it."""
        assert self.message is not None
        value = self.message[field]
        assert isinstance(value, int)
        return value

    def of_id(self) -> bytes:
        assert self.message is not None
        value = self.message["sweep_id"]
        assert isinstance(value, bytes)
        return value

    @property
    def sequence(self) -> int:
        return -1 if self.message is None else self.message.sequence

    @property
    def session(self) -> int:
        return -1 if self.message is None else self.message.session

    @property
    def changes(self) -> bool:
        """True for a request that changes state, abort apart."""
        return self.name in CHANGING


@dataclass(frozen=True, slots=True)
class Said:
    """One message that has been given to the host."""

    at_s: float
    message: Message

    @property
    def name(self) -> str:
        return self.message.name


@dataclass(frozen=True, slots=True)
class Event:
    """Anything else; `what` is one of the words below."""

    at_s: float
    what: str
    detail: str = ""
    message: Message | None = None


CONTROL = "control byte"  # bare, outside a rescue
LEFT = "leave"  # 0d 03 03 02 has come
STARTED = "start"  # the line that starts the firmware
SHOWN = "prompt"  # a prompt has been shown
RESET = "reset"
LOST = "lost"  # `message` was due and was not sent
OPENED = "opened"
CLOSED = "closed"

Entry = Heard | Said | Event
Log = list[Entry]

CHANGING = frozenset(
    name for name, _, _, changes, _ in catalogue.MESSAGES.values() if changes and name != "abort"
)
FROZEN = frozenset(name for name, _, frozen, _, _ in catalogue.MESSAGES.values() if frozen)


class Watch:
    """Splits what the host sends. `log` grows; nothing is ever taken out of it."""

    def __init__(self) -> None:
        self.log: Log = []
        self._run = bytearray()
        self._guarded = False

    def note(self, entry: Entry) -> None:
        self.log.append(entry)

    def feed(self, data: bytes, at_s: float) -> Iterator[Heard | Event]:
        """Entries that `data` completes; each stands in the log before it is given."""
        for byte in data:
            entry = self._take(byte, at_s)
            if entry is not None:
                self.log.append(entry)
                yield entry

    def _take(self, byte: int, at_s: float) -> Heard | Event | None:
        run = self._run
        if byte == 0:
            return self._close(at_s)
        run.append(byte)
        for line, what in ((LEAVE, LEFT), (START, STARTED)):
            if run.endswith(line):
                before = bytes(run[: -len(line)])
                run.clear()
                return Event(at_s, what, before.hex(" "))
        if byte == 0x03 and (LEAVE.startswith(run[-2:]) or LEAVE.startswith(run[-3:])):
            return None  # may become a rescue
        if byte in INTERRUPTING:
            # A device never sees it in its stream, or does not take the run.
            del run[-1]
            return Event(at_s, CONTROL, f"{byte:02x}")
        return None

    def _close(self, at_s: float) -> Heard | Event | None:
        run = bytes(self._run)
        self._run.clear()
        guarded, self._guarded = self._guarded, run == framing.GUARD[:1]
        if not run or self._guarded or run in NUDGES:
            return None
        body = framing.decode_run(run, True)
        if isinstance(body, framing.Bad):
            return Heard(at_s, b"", None, guarded, body.reason)
        try:
            return Heard(at_s, body, unpack(body), guarded)
        except Refused:
            return Heard(at_s, body, None, guarded)
