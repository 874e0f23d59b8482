"""What went over a link lately: the last frames each way, text outside frames, and counts.

Comes in: frames as they are sent and received. Goes out: rows for people and scripts. Lost and
late are told apart here: an answer that comes after its request was given up counts as late.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Iterator
from dataclasses import asdict, dataclass
from typing import Any

from kneewire import catalogue, framing
from kneewire.messages import Message, Refused, unpack

KEPT = 200
TO_DEVICE = "to device"
TO_HOST = "to host"


@dataclass(slots=True)
class Counters:
    """Since the session began."""

    sent: int = 0
    sent_again: int = 0
    received: int = 0
    late: int = 0
    bad: int = 0
    texts: int = 0
    rescues: int = 0


@dataclass(frozen=True, slots=True)
class Seen:
    """One frame or text. `body` is empty where there was no frame, and `remark` says why."""

    time_s: float
    way: str
    coded_bytes: int
    body: bytes
    remark: str = ""

    def row(self) -> dict[str, Any]:
        """As one row of the table, and as one JSON object."""
        found: dict[str, Any] = {"time_s": round(self.time_s, 6), "way": self.way}
        found["bytes"] = self.coded_bytes
        if not self.body:
            return {**found, "message": "", "remark": self.remark}
        try:
            message = unpack(self.body)
        except Refused as refused:
            return {**found, "message": f"kind {self.body[0]:02x}", "remark": str(refused.args[0])}
        values = {name: shown(name, value) for name, value in message.values.items()}
        header = {"session": message.session, "sequence": message.sequence}
        return {**found, "message": message.name, **header, "fields": values, "remark": ""}


_CODES = {
    "state": catalogue.STATES,
    "reset_cause": catalogue.RESET_CAUSES,
    "end_reason": catalogue.END_REASONS,
    "code": catalogue.REFUSALS,
    "unit": catalogue.UNITS,
}


def shown(name: str, value: Any) -> Any:
    """A field's value as people read it; JSON can hold it."""
    if isinstance(value, bytes):
        return value.hex() if len(value) <= 16 else f"{len(value)} bytes"
    return _CODES[name].get(value, value) if name in _CODES else value


class FrameLog:
    """The last KEPT entries each way, and the counters."""

    def __init__(self) -> None:
        self.counters = Counters()
        self._sent: deque[Seen] = deque(maxlen=KEPT)
        self._received: deque[Seen] = deque(maxlen=KEPT)

    def sent(self, time_s: float, coded: bytes, body: bytes, *, again: bool) -> None:
        self.counters.sent += 1
        self.counters.sent_again += again
        self._sent.append(Seen(time_s, TO_DEVICE, len(coded), body))

    def received(self, time_s: float, body: bytes) -> None:
        self.counters.received += 1
        self._received.append(Seen(time_s, TO_HOST, len(body), body))

    def bad(self, time_s: float, bad: framing.Bad) -> str:
        """Note what is no frame; its text where it is one."""
        text = bad.text()
        if text:
            self.counters.texts += 1
        else:
            self.counters.bad += 1
        remark = f"text: {text.strip()}" if text else f"bad frame: {bad.reason}"
        self._received.append(Seen(time_s, TO_HOST, len(bad.raw), b"", remark))
        return text

    def entries(self) -> Iterator[Seen]:
        """Both ways, in order of time."""
        yield from sorted([*self._sent, *self._received], key=lambda seen: seen.time_s)

    def summary(self) -> str:
        """The counters that are not zero, for messages."""
        words = {name.replace("_", " "): count for name, count in asdict(self.counters).items()}
        return ", ".join(f"{count} {name}" for name, count in words.items() if count)


__all__ = ["KEPT", "TO_DEVICE", "TO_HOST", "Counters", "FrameLog", "Message", "Seen", "shown"]
