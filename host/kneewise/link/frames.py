"""What went over a link lately: the last frames each way, text outside frames, and counts.

Comes in: frames as they are sent and received. Goes out: rows for people and scripts. Lost and
late are told apart here: an answer that comes after its request was given up counts as late.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Iterator
from dataclasses import asdict, dataclass
from itertools import count
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
    "unit": {**catalogue.UNITS, 0: "none"},
}


_HEX = (
    *("fingerprint", "profile_crc", "knots_crc", "raw_crc"),
    *("boot_nonce", "host_nonce", "token"),
)


def shown(name: str, value: Any) -> Any:
    """A field's value as people read it; JSON can hold it."""
    if isinstance(value, bytes):
        return value.hex() if len(value) <= 16 else f"{len(value)} bytes"
    if name in _HEX:
        return f"{value:08x}"
    return _CODES[name].get(value, value) if name in _CODES else value


def of_bad(time_s: float, way: str, bad: framing.Bad) -> Seen:
    """The entry of what is no frame: as text where people can read it."""
    text = bad.text()
    remark = f"text: {text.strip()}" if text else f"bad frame: {bad.reason}"
    return Seen(time_s, way, len(bad.raw), b"", remark)


class FrameLog:
    """The last KEPT entries each way, and the counters. `watch` is told of each entry."""

    def __init__(self) -> None:
        self.counters = Counters()
        self.watch: Callable[[Seen], object] = lambda seen: None
        self._sent: deque[tuple[int, Seen]] = deque(maxlen=KEPT)
        self._received: deque[tuple[int, Seen]] = deque(maxlen=KEPT)
        self._numbers = count()

    def sent(self, time_s: float, coded: bytes, body: bytes, *, again: bool) -> None:
        self.counters.sent += 1
        self.counters.sent_again += again
        self._keep(self._sent, Seen(time_s, TO_DEVICE, len(coded), body))

    def received(self, time_s: float, body: bytes) -> None:
        self.counters.received += 1
        coded_bytes = len(framing.encode(body, toward_device=False))
        self._keep(self._received, Seen(time_s, TO_HOST, coded_bytes, body))

    def bad(self, time_s: float, bad: framing.Bad) -> str:
        """Note what is no frame; its text where it is one."""
        text = bad.text()
        if text:
            self.counters.texts += 1
        else:
            self.counters.bad += 1
        self._keep(self._received, of_bad(time_s, TO_HOST, bad))
        return text

    def _keep(self, entries: deque[tuple[int, Seen]], seen: Seen) -> None:
        entries.append((next(self._numbers), seen))
        self.watch(seen)

    def entries(self) -> Iterator[Seen]:
        """Both ways, in the order in which they went."""
        for _, seen in sorted([*self._sent, *self._received], key=lambda numbered: numbered[0]):
            yield seen

    def summary(self) -> str:
        """The counters that are not zero, for messages."""
        words = {name.replace("_", " "): found for name, found in asdict(self.counters).items()}
        return ", ".join(f"{found} {name}" for name, found in words.items() if found)


__all__ = [
    "KEPT",
    "TO_DEVICE",
    "TO_HOST",
    "Counters",
    "FrameLog",
    "Message",
    "Seen",
    "of_bad",
    "shown",
]
