"""One charge on the board of plain numbers: what its tests set up alike."""

from __future__ import annotations

from typing import Any

from fake_board import REFERENCE, Buffers, Capture, FakeBoard, hal, profile

from kneewire import framing
from kneewire.messages import pack
from kneewise.emulator.firmware import firmware_module

module = firmware_module("tracer.charge")
sequencer = firmware_module("tracer.sequencer")
Logbook = firmware_module("tracer.logbook").Logbook
Ear = firmware_module("tracer.ear").Ear
ABORT = framing.encode(pack("abort", 7, 0), toward_device=True)
BEAT = framing.encode(pack("heartbeat", 7, 9), toward_device=True)


# The reference build with converters of 16 bits.
FINE = {
    "converter": hal.SPI16,
    "spi_clock_khz": 20000,
    "spi_convert_ns": 700,
    **{name: REFERENCE[name] // 16 for name in ("voltage_nv_per_code", "current_na_per_code")},
    **{name: REFERENCE[name] * 16 for name in ("voltage_zero_x16", "current_zero_x16")},
}


class Outputs(sequencer.Sequencer):
    """What the sequencer is to a charge: its outputs, and no state."""

    def __init__(self, board: Any) -> None:
        self.hal = board
        self.logbook = Logbook(None)
        self.contact_closed = False
        self.bleed_engaged = True


class Rig:
    """A charge ready to run; `through` stands between the firmware and the board.

    `changes`: of the reference profile.
    """

    def __init__(self, board: FakeBoard, *, through: Any = None, **changes: Any) -> None:
        hal = through or board
        made = profile(**changes)
        board.use_converters(made["converter"], made["pair_us"], 0, 0)
        self.board = board
        self.outputs = Outputs(hal)
        self.ear = Ear(hal)
        self.ear.expect(ABORT)
        self.capture = Capture(board.ring, board.RING_PAIRS, Buffers(), board.CODE_BITS)
        self.result: Any = None
        self.charge = module.Charge(hal, made, self.capture, self.ear)

    def run(
        self,
        closed_limit_ms: int = 120_000,
        raw: Any = None,
        raw_from_us: int = 0,
        meanwhile: Any = None,
        **asked: int,
    ) -> Any:
        """`asked`: more of the settings."""
        settings = module.Settings(closed_limit_ms, raw, raw_from_us)
        for name, value in asked.items():
            setattr(settings, name, value)
        return self.charge.run(settings, self.outputs, meanwhile)

    def pulses(self) -> list[int]:
        """When the wave was renewed, its first start included."""
        calls = self.board.calls
        return [time for name, values, time in calls if name == "pulse" and values[0]]
