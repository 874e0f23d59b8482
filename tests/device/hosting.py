"""A host of a few lines, and the firmware's loop on the board of plain numbers."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from fake_board import Buffers, FakeBoard, record

from kneewire import PROTOCOL, catalogue, framing
from kneewire.messages import NO_SESSION, Message, fingerprint, pack, unpack
from kneewire.profile_record import seal
from kneewise.emulator.firmware import firmware_module

loop_module = firmware_module("tracer.loop")
service_module = firmware_module("tracer.service")
STATES = catalogue.STATES
SWEEP_ID = bytes(range(16))


class Device:
    """The firmware, started; `host` is greeted already."""

    def __init__(self, board: FakeBoard, folder: Path, *, bare: bool = False, **changes: Any):
        self.board = board
        self.bled: list[Message] = []  # the notices that a bleed has ended
        path = folder / "profile.bin"
        if not bare:
            path.write_bytes(seal(record(**changes)))
        self.loop = loop_module.Loop(board, Buffers(), str(path), str(folder / "logbook.bin"))
        self.service = self.loop.service
        self.sequencer = self.loop.sequencer
        self.decoder = framing.Decoder(1000, toward_device=False)
        self.session = NO_SESSION
        self.sequence = 0
        self.hello()
        self.turns(self.rested)

    # -- the host's side ---------------------------------------------------------------

    def frame(
        self,
        name: str,
        values: dict[str, Any] | None = None,
        *,
        session: int | None = None,
        sequence: int | None = None,
    ) -> bytes:
        if sequence is None:
            self.sequence += 1
            sequence = self.sequence
        session = self.session if session is None else session
        return framing.encode(pack(name, session, sequence, values), toward_device=True)

    def say(self, data: bytes) -> list[Message]:
        """Let bytes arrive, and one turn of polling pass; what came back."""
        self.board.incoming += data
        self.service.poll()
        return self.heard()

    def heard(self) -> list[Message]:
        data = bytes(self.board.sent)
        self.board.sent.clear()
        items = self.decoder.feed(data)
        assert not [item for item in items if isinstance(item, framing.Bad)]
        messages = [unpack(item) for item in items]
        self.bled += [message for message in messages if message.name == "bleed_ended"]
        return [message for message in messages if message.name != "bleed_ended"]

    def ask(self, name: str, values: dict[str, Any] | None = None, **header: int) -> Message:
        """One request, one answer."""
        (answer,) = self.say(self.frame(name, values, **header))
        return answer

    def hello(self, nonce: int = 0x1234) -> Message:
        values = {
            "major": PROTOCOL[0],
            "minor": PROTOCOL[1],
            "fingerprint": fingerprint(),
            "host_nonce": nonce,
        }
        answer = self.ask("hello", values, session=NO_SESSION, sequence=77)
        if answer["session"] != self.session:
            self.sequence = 0
        self.session = answer["session"]
        return answer

    def arm(self, **changes: Any) -> Message:
        values = {
            "knots": 32,
            "closed_limit_ms": 1000,
            "confirmed": 1,
            "raw_from_us": 0,
            "raw_pairs": 0,
            "limit_mv": 0xFFFFFFFF,
            "limit_ma": 0xFFFFFFFF,
            "exercise": 0,
        }
        header = {name: changes.pop(name) for name in ("sequence",) if name in changes}
        return self.ask("arm", {**values, **changes}, **header)

    def fire(self, token: int, sweep_id: bytes = SWEEP_ID, **header: int) -> Message:
        return self.ask("fire", {"token": token, "sweep_id": sweep_id}, **header)

    def abort(self) -> bytes:
        return self.frame("abort", sequence=0)

    # -- the firmware's side -----------------------------------------------------------

    def rested(self) -> bool:
        """Safe, and the bleed resistor has room for a sweep."""
        return self.state() == "safe" and (
            self.loop.profile is None or self.sequencer.rest_ms(60_000) == 0
        )

    def state(self) -> str:
        return STATES[self.sequencer.state]

    def turns(self, until: Any = None, *, ms: int = 5000) -> None:
        """Turns of the loop, one at least."""
        end = self.board.time_us + 1000 * ms
        while True:
            self.loop.step()
            if self.board.time_us >= end or (until is not None and until()):
                return

    def sweep(self, sweep_id: bytes = SWEEP_ID) -> list[Message]:
        """Arm, fire, charge; what the device said of it."""
        fired = self.fire(self.arm()["token"], sweep_id)
        self.turns(ms=1)
        return [fired, *self.heard()]


def refusal(answer: Message) -> int:
    """The code of a refusal."""
    assert answer.name == "refusal", answer
    return answer["code"]
