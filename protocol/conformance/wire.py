"""The tester's end of a byte stream: raw bytes out, frames and text in, one deadline each.

Comes in: a port, which is anything with the few methods of `Port`. What a check means by the
bytes is its own business.
"""

from __future__ import annotations

import time
from collections import deque
from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol

from conformance.report import Broken
from kneewire import catalogue, framing
from kneewire.messages import Message, Refused, pack, unpack

ANSWER_S = 3.0
PIECE = 200  # bytes written at once; a device's input ring may hold no more than 512
PIECE_S = 0.01  # between two pieces
FENCES_FROM = 0x66000000  # sequences of the heartbeats that end an exchange
TEXT_CHARACTERS = 8192


class Port(Protocol):
    """A byte stream with a clock."""

    name: str

    def clock(self) -> float:
        """Seconds."""

    def sleep(self, seconds: float) -> None:
        """Let time pass without reading."""

    def read(self, timeout_s: float) -> bytes:
        """Bytes that have come, b"" when none came in time. OSError when the port is gone."""

    def write(self, data: bytes) -> None:
        """OSError when the port is gone or takes no more."""

    def close(self) -> None:
        """Twice is harmless."""


class SerialPort:
    """A serial port, a pseudo-terminal, or a URL of pyserial's (socket://host:port).

    On a `slow` device, an emulated chip for one, all times are so many times longer.
    """

    def __init__(self, name: str, *, slow: float = 1.0) -> None:
        import serial  # the host's side of this package does without

        self.name = name
        self._slow = slow
        alone = {} if "://" in name else {"exclusive": True}
        self._port = serial.serial_for_url(
            name, baudrate=115200, timeout=0, write_timeout=2.0 * slow, **alone
        )

    def clock(self) -> float:
        return time.monotonic() / self._slow

    def sleep(self, seconds: float) -> None:
        time.sleep(seconds * self._slow)

    def read(self, timeout_s: float) -> bytes:
        self._port.timeout = max(timeout_s, 0.0) * self._slow
        data: bytes = self._port.read(1)
        return data + self._port.read(self._port.in_waiting) if data else data

    def write(self, data: bytes) -> None:
        self._port.write(data)

    def close(self) -> None:
        self._port.close()


@dataclass(frozen=True, slots=True)
class Frame:
    """One good frame of the device. `coded` is without its delimiter."""

    at_s: float
    coded: bytes
    body: bytes
    message: Message | None
    """None where the body is no message of this catalogue."""

    @property
    def name(self) -> str:
        return "" if self.message is None else self.message.name

    @property
    def sequence(self) -> int:
        return -1 if self.message is None else self.message.sequence

    def reply(self, name: str) -> Message:
        """The message, which must be of that name."""
        if self.message is None or self.message.name != name:
            raise Broken(f"{self} where {name} was due")
        return self.message

    def refusal(self) -> str:
        """What the refusal says, "" where it is none."""
        if self.message is None or self.message.name != "refusal":
            return ""
        return catalogue.REFUSALS.get(self.message["code"], str(self.message["code"]))

    def __str__(self) -> str:
        if self.refusal():
            return f"a refusal ({self.refusal()})"
        return self.name or f"a frame of kind {self.body[0]:02x}"


class Wire:
    """One device on one port. Frames are kept as they came, for checks that look at all."""

    def __init__(self, port: Port) -> None:
        self.port = port
        self.heard: list[Frame] = []
        self.bad: list[framing.Bad] = []
        """Runs that are neither frames nor text."""
        self._text = ""
        self._run = b""
        self._fresh: deque[Frame] = deque()
        self._fence = FENCES_FROM

    # -- out ---------------------------------------------------------------------------

    def send(self, raw: bytes) -> None:
        """Write, no faster than a small input ring can be emptied."""
        for place in range(0, len(raw), PIECE):
            if place:
                self._hear(self.port.read(PIECE_S))
            self.port.write(raw[place : place + PIECE])

    # -- in ----------------------------------------------------------------------------

    def listen(self, seconds: float, until: Callable[[Frame], bool] | None = None) -> list[Frame]:
        """Frames as they come: the last is the first that satisfies `until`, if one does."""
        end = self.port.clock() + seconds
        found: list[Frame] = []
        while True:
            while self._fresh:
                found.append(self._fresh.popleft())
                if until is not None and until(found[-1]):
                    return found
            left = end - self.port.clock()
            if left <= 0:
                return found
            self._hear(self.port.read(left))

    def said(self) -> str:
        """Text outside frames, with what is pending."""
        return self._text + framing.readable(self._run)

    def forget(self) -> None:
        """Drop the run that is under way, and all text."""
        self._run = b""
        self._text = ""

    def _hear(self, data: bytes) -> None:
        *runs, self._run = (self._run + data).split(framing.DELIMITER)
        for run in runs:
            if not run:
                continue
            body = framing.decode_run(run, False)
            if not isinstance(body, framing.Bad):
                frame = Frame(self.port.clock(), run, body, _message(body))
                self.heard.append(frame)
                self._fresh.append(frame)
            elif body.text():
                self._text = (self._text + body.text())[-TEXT_CHARACTERS:]
            else:
                self.bad.append(body)

    # -- one exchange --------------------------------------------------------------------

    def heartbeat(self, session: int) -> tuple[int, bytes]:
        """A heartbeat that no other exchange has sent: its sequence, and its body."""
        self._fence += 1
        return self._fence, pack("heartbeat", session, self._fence)

    def exchange(
        self, raw: bytes, session: int, *, guard: bool = True, seconds: float = ANSWER_S
    ) -> list[Frame]:
        """What the device sends between `raw` and its answer to a heartbeat right behind it.

        Answers come in the order of requests, so nothing needs to be waited for. Broken where
        the heartbeat goes unanswered.
        """
        number, body = self.heartbeat(session)
        before = framing.GUARD if guard else b""
        self.send(raw + before + framing.encode(body, True))
        frames = self.listen(seconds, lambda frame: frame.sequence == number)
        if not frames or frames[-1].sequence != number:
            raise Broken(f"no answer to a heartbeat within {seconds:g} s" + self._instead())
        return frames[:-1]

    def _instead(self) -> str:
        said = self.said().strip()
        return f"; the device says {said[-200:]!r}" if said else ""


def _message(body: bytes) -> Message | None:
    try:
        return unpack(body)
    except Refused:
        return None
