"""A port whose other end is a list of answers, for the session's own tests."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from kneewire import PROTOCOL, catalogue, framing
from kneewire.messages import Message, fingerprint, pack, unpack

SESSION = 77
HELLO = {
    "major": PROTOCOL[0],
    "minor": PROTOCOL[1],
    "fingerprint": fingerprint(),
    "firmware_major": 0,
    "firmware_minor": 1,
    "firmware_patch": 0,
    "flags": 1,
    "device_id": bytes(8),
    "boot_nonce": 5,
    "session": SESSION,
    "reset_cause": 1,
    "profile_crc": 0,
    "max_frame": 256,
    "window": 16,
    "max_knots": 512,
    "ticks_per_s": 1_000_000,
}


def reply(message: Message, values: dict[str, Any]) -> bytes:
    kind = catalogue.KINDS[message.name] | catalogue.REPLY
    name = catalogue.MESSAGES[kind][0]
    return framing.encode(pack(name, message.session, message.sequence, values), False)


def notice(name: str, values: dict[str, Any]) -> bytes:
    return framing.encode(pack(name, SESSION, 0, values), False)


class ScriptedPort:
    """`answer` is given each message and returns bytes; hello is answered by itself.

    `asked` holds the messages that came, `written` the bytes as they were written.
    """

    name = "scripted"

    def __init__(self, answer: Callable[[Message], bytes] = lambda message: b"") -> None:
        self.answer = answer
        self.hello: dict[str, Any] | None = HELLO
        self.asked: list[Message] = []
        self.written: list[bytes] = []
        self.out = b""
        self.now = 0.0
        self._decoder = framing.Decoder(1024, toward_device=True)

    def clock(self) -> float:
        return self.now

    def sleep(self, seconds: float) -> None:
        self.now += seconds

    def read(self, timeout_s: float) -> bytes:
        self.now += 0.001 if self.out else max(timeout_s, 0.0)
        out, self.out = self.out, b""
        return out

    def write(self, data: bytes) -> None:
        self.written.append(data)
        for item in self._decoder.feed(data):
            if isinstance(item, framing.Bad):
                continue
            message = unpack(item)
            self.asked.append(message)
            if message.name == "hello":
                self.out += reply(message, self.hello) if self.hello else b""
            else:
                self.out += self.answer(message)

    def close(self) -> None:
        pass
