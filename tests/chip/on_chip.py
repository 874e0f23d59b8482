"""The firmware whole on an emulated chip, beside the plant of a scenario, for whole sweeps."""

from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from typing import Any

from chip import HERE

from kneewise.emulator.chip import CHIP_DEVICE_ID, ChipTracer
from kneewise.emulator.opener import profile_for, scaling_of
from kneewise.emulator.scenario import Scenario
from kneewise.instrument.opened import Opened
from kneewise.instrument.tracer import Tracer


@contextmanager
def chip_for(
    scenario: Scenario,
    *,
    board: str = "",
    files: Mapping[str, str] | None = None,
    uptime_us: int = 0,
) -> Iterator[ChipTracer]:
    """`board`: a file beside this one, to stand between the firmware and hal_rp2.py.

    The bleed resistor is cool again at once: an emulated second takes many, and how it cools has
    tests of its own.
    """
    held = {path: text.encode() for path, text in (files or {}).items()}
    if board:
        held["/emulated_board.py"] = (HERE / board).read_bytes()
    profile = profile_for(scenario)
    cool = profile.bleed.model_copy(update={"power_w": 1000.0})
    profile = profile.model_copy(update={"bleed": cool})
    record = profile.record(CHIP_DEVICE_ID)
    made = ChipTracer(scenario, scaling_of(profile), record, more_files=held, uptime_us=uptime_us)
    try:
        yield made
    finally:
        made.close()


def tracer_on(made: ChipTracer) -> Tracer:
    return Tracer(Opened(connect=made.connect, close=lambda: None, rung="chip"))


def capacitor(farad: float, **more: Any) -> Scenario:
    """Clear noon with another capacitor, without noise and wide codes."""
    bank = {"capacitance_f": farad}
    ideal = {"adc_noise_codes": 0.0, "wide_code_lsb": 1.0}
    return Scenario.default().varied(load=bank, board=ideal, **more)
