"""Whole conversations of host and firmware, for `protocol/vectors/conversations.json`.

Host library and firmware on the in-process rung, with everything random fixed, so they repeat
themselves byte by byte. `python tests/protocol/conversations.py` writes the file anew after a
deliberate change.
"""

from __future__ import annotations

import contextlib
import json
from collections.abc import Callable
from pathlib import Path
from typing import Any
from unittest import mock

from kneewire import framing
from kneewire.messages import unpack
from kneewise.emulator.opener import connector, start
from kneewise.emulator.scenario import Scenario
from kneewise.errors import OutcomeUnknownError
from kneewise.instrument.full_rate import FullRate
from kneewise.instrument.opened import Opened
from kneewise.instrument.tracer import Tracer
from kneewise.link.port import Port

FILE = Path(__file__).resolve().parents[2] / "protocol" / "vectors" / "conversations.json"
NONCE = int.from_bytes(b"abcx", "little")
SWEEP_ID = bytes(range(1, 17))
STRETCH = FullRate(start_s=0.0002, duration_s=0.0006)  # three blocks of raw pairs
SCENARIO = Scenario.default().varied(load={"capacitance_f": 470e-6})
ABOUT = (
    "Whole conversations as they went over the link, a row for each piece that was written at "
    "once: which way, its bytes, and what its frames say. A tracer of another make answers with "
    "other numbers; the order of messages, headers and repeats is what these show."
)

Row = dict[str, Any]


class Heard:
    """A port that keeps what goes over it; `lose` names pieces to lose, counted each way."""

    def __init__(self, port: Port, rows: list[Row], lose: dict[str, set[int]]) -> None:
        self.name = port.name
        self._port = port
        self._rows = rows
        self._lose = lose
        self._counts = {"device": 0, "host": 0}

    def __getattr__(self, name: str) -> Any:
        return getattr(self._port, name)

    def _carry(self, to: str, data: bytes) -> bytes:
        if not data:
            return data
        lost = self._counts[to] in self._lose.get(to, set())
        self._counts[to] += 1
        row: Row = {"to": to, "bytes": data.hex(), "messages": said(data, to == "device")}
        self._rows.append(row | ({"lost": True} if lost else {}))
        return b"" if lost else data

    def read(self, timeout_s: float) -> bytes:
        return self._carry("host", self._port.read(timeout_s))

    def write(self, data: bytes) -> None:
        if self._carry("device", data):
            self._port.write(data)


def said(data: bytes, toward_device: bool) -> list[Any]:
    """The messages in one piece; text and bytes outside frames as text."""
    found: list[Any] = []
    for item in framing.Decoder(4096, toward_device).feed(data + framing.DELIMITER):
        if isinstance(item, framing.Bad):
            found.append({"text": item.raw.decode("latin-1")})
            continue
        message = unpack(item)
        values = {
            name: value.hex() if isinstance(value, bytes) else value
            for name, value in message.values.items()
        }
        header = {"session": message.session, "sequence": message.sequence}
        found.append({"message": message.name, **header, "values": values})
    return found


class Stage:
    """An emulated tracer and a host with fixed numbers; `rows` is what went over the link."""

    def __init__(self, lose: dict[str, set[int]] | None = None) -> None:
        self.rows: list[Row] = []
        self.emulated = start(SCENARIO, "in-process")
        connect = connector(self.emulated)

        def heard() -> Any:
            return Heard(connect(), self.rows, lose or {})

        with mock.patch("kneewise.link.session.quiet_nonce", return_value=NONCE):
            self.tracer = Tracer(Opened(connect=heard, close=lambda: None, rung="in-process"))

    def sweep(
        self,
        progress: Callable[[str], None] = lambda stage: None,
        full_rate: FullRate | None = None,
    ) -> None:
        with mock.patch("secrets.token_bytes", return_value=SWEEP_ID):
            self.tracer.sweep(knots=16, progress=progress, full_rate=full_rate)

    def close(self) -> list[Row]:
        self.tracer.close()
        self.emulated.close()
        return self.rows


def plain_sweep() -> list[Row]:
    stage = Stage()
    stage.sweep()
    return stage.close()


def raw_pairs() -> list[Row]:
    """Pairs kept one by one, and all blocks of them lost once."""
    stage = Stage(lose={"host": {8}})
    stage.sweep(full_rate=STRETCH)
    return stage.close()


def resend() -> list[Row]:
    """The reply to arm and the last block are lost."""
    stage = Stage(lose={"host": {3, 8}})
    stage.sweep()
    return stage.close()


def reconnect() -> list[Row]:
    """The cable is pulled while the capacitor bleeds."""
    stage = Stage()
    stage.sweep(lambda name: stage.emulated.cut_link() if name == "bleeding" else None)
    return stage.close()


def reset() -> list[Row]:
    """The device loses power behind the fire: one hello, and no second fire."""
    stage = Stage()

    def pull(name: str) -> None:
        if name == "bleeding":
            stage.emulated.unplug()
            stage.emulated.plug()

    with contextlib.suppress(OutcomeUnknownError):
        stage.sweep(pull)
        raise AssertionError("the host did not see the reset")
    return stage.close()


def rescue() -> list[Row]:
    """A damaged byte became Ctrl-C while the capacitor bled."""
    stage = Stage()
    stage.sweep(lambda name: stage.emulated.put_input(b"\x03") if name == "bleeding" else None)
    return stage.close()


CONVERSATIONS = {
    "a sweep": plain_sweep,
    "raw pairs, their blocks lost once": raw_pairs,
    "a reply and a block lost": resend,
    "the cable pulled while bleeding": reconnect,
    "a reset behind the fire": reset,
    "Ctrl-C while bleeding": rescue,
}


def written() -> str:
    made = {name: make() for name, make in CONVERSATIONS.items()}
    return json.dumps({"about": ABOUT, "conversations": made}, indent=1) + "\n"


if __name__ == "__main__":
    FILE.write_text(written(), encoding="utf-8")
