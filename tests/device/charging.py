"""One charge on the board of plain numbers: what its tests set up alike."""

from __future__ import annotations

from typing import Any

from fake_board import Buffers, Capture, FakeBoard, profile

from kneewire import framing
from kneewire.messages import pack
from kneewise.emulator.firmware import firmware_module

module = firmware_module("tracer.charge")
Ear = firmware_module("tracer.ear").Ear
ABORT = framing.encode(pack("abort", 7, 0), toward_device=True)
BEAT = framing.encode(pack("heartbeat", 7, 9), toward_device=True)


class Outputs:
    """What the sequencer is to a charge."""

    def __init__(self, board: Any) -> None:
        self.board = board
        self.contact_closed = False
        self.bleed_engaged = True

    def make_safe(self) -> None:
        self.board.safe()
        self.contact_closed = False
        self.bleed_engaged = True


class Rig:
    """A charge ready to run; `through` stands between the firmware and the board."""

    def __init__(self, board: FakeBoard, *, through: Any = None, **changes: Any) -> None:
        hal = through or board
        self.board = board
        self.outputs = Outputs(hal)
        self.ear = Ear(hal)
        self.ear.expect(ABORT)
        self.capture = Capture(board.ring, board.RING_PAIRS, Buffers())
        self.result: Any = None
        self.charge = module.Charge(hal, profile(**changes), self.capture, self.ear)

    def run(self, closed_limit_ms: int = 120_000) -> Any:
        return self.charge.run(closed_limit_ms, self.outputs)

    def pulses(self) -> list[int]:
        """When the wave was renewed, its first start included."""
        calls = self.board.calls
        return [time for name, values, time in calls if name == "pulse" and values[0]]
