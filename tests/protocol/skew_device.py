"""A device of another version, built from the frozen vectors of that version alone."""

from __future__ import annotations

import json
import struct
import zlib
from pathlib import Path
from typing import Any

import wire_coder
import wire_golden

from kneewire import framing

SESSION = 0x1234567


class SkewDevice:
    """A port with a device behind it that knows the catalogue of a folder, and no other.

    It answers hello with its version, every other request that it knows with zeros, the rest
    with a refusal. `changes` come on top of its hello; `extra` bytes behind every answer stand
    for fields of a later minor version. `asked` holds the names of what was asked.
    """

    name = "a device of another version"

    def __init__(
        self,
        catalogue: dict[str, Any],
        *,
        changes: dict[str, Any] | None = None,
        extra: bytes = b"",
    ) -> None:
        self.asked: list[str] = []
        self._kinds = {row["kind"]: row for row in catalogue["messages"]}
        major, minor = catalogue["protocol"]
        version = {"major": major, "minor": minor, "fingerprint": catalogue["fingerprint"]}
        limits = {"session": SESSION, "max_frame": 256, "window": 16}
        self._hello = {**version, **limits, **(changes or {})}
        self._extra = extra
        self._decoder = framing.Decoder(1024, toward_device=True)
        self._out = b""
        self._now = 0.0

    def clock(self) -> float:
        return self._now

    def sleep(self, seconds: float) -> None:
        self._now += seconds

    def read(self, timeout_s: float) -> bytes:
        self._now += 0.001 if self._out else timeout_s
        out, self._out = self._out, b""
        return out

    def write(self, data: bytes) -> None:
        for item in self._decoder.feed(data):
            if isinstance(item, bytes):
                self._answer(item)

    def close(self) -> None:
        pass

    def _answer(self, body: bytes) -> None:
        kind, session, sequence = struct.unpack_from("<BII", body)
        row = self._kinds.get(kind)
        if row is None or not row["to_device"]:
            self._say(0xFF, session, sequence, {"of_kind": kind, "code": 1})
            return
        self.asked.append(row["name"])
        given = self._hello if row["name"] == "hello" else {}
        self._say(kind | 0x80, given.get("session", session), sequence, given)

    def _say(self, kind: int, session: int, sequence: int, given: dict[str, Any]) -> None:
        out = struct.pack("<BII", kind, session, sequence)
        for name, form in self._kinds[kind]["fields"]:
            nothing: Any = {"b8": bytes(8), "b16": bytes(16), "bytes": b"", "text": ""}.get(form, 0)
            out += wire_coder.field(form, given.get(name, nothing))
        self._out += wire_coder.frame(out + self._extra, False)


def frozen(version: str) -> dict[str, Any]:
    """The catalogue of a released version."""
    path = Path(wire_golden.VECTORS) / version / "catalogue.json"
    found: dict[str, Any] = json.loads(path.read_text(encoding="ascii"))
    return found


def with_a_field_more(catalogue: dict[str, Any]) -> dict[str, Any]:
    """The same version with another status_reply, as a later 0.x may have."""
    made: dict[str, Any] = json.loads(json.dumps(catalogue))
    for row in made["messages"]:
        if row["name"] == "status_reply":
            row["fields"].append(["later", "u8"])
    made["fingerprint"] = zlib.crc32(json.dumps(made).encode()) | 0x80808080
    return made
