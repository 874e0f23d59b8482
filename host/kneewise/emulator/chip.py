"""The chip rung: the firmware, unchanged, on an emulated RP2040 with the real MicroPython.

For those who have the project's checkout, Node.js, a raw MicroPython image for the Pico and a
raw RP2040 boot ROM; the last two are named by KNEEWISE_PICO_IMAGE and KNEEWISE_PICO_BOOTROM.
The runner and the plant beside the chip stand in tests/chip. Its times are emulated ones, not
those of silicon.
"""

from __future__ import annotations

import importlib.util
import sys
from collections.abc import Mapping
from functools import cache
from types import ModuleType
from typing import Any

import numpy as np

from kneewire.profile_record import seal
from kneewise.emulator.board import Level
from kneewise.emulator.converters import Scaling
from kneewise.emulator.firmware import compiled, device_folder
from kneewise.emulator.mishaps import Value, check
from kneewise.emulator.scenario import Scenario
from kneewise.errors import UsageError
from kneewise.link.port import Port, open_port

CHIP_DEVICE_ID = bytes(8)  # the emulated flash chip has no id of its own
CURVE_POINTS = 2001
REVERSE_A = 100.0
REVERSE_POINTS = 501
# What the two SPI converters at the chip's pins keep to: slower than a fast part.
SPI_PARTS = {"valid_ns": 25, "convert_ns": 700}
START_MS = 1500  # MicroPython, then the compiled firmware


@cache
def _runner() -> ModuleType | None:
    """tests/chip/chip.py of the checkout, or None in an installed package."""
    path = device_folder().parent / "tests" / "chip" / "chip.py"
    if not path.is_file():
        return None
    spec = importlib.util.spec_from_file_location("kneewise_chip_runner", path)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    return module


def missing() -> str:
    """What to set or install before the chip rung can run, or ""."""
    runner = _runner()
    if runner is None:
        return "use a checkout of the project: its tests/chip holds the runner"
    return str(runner.missing() or "")


def plant_description(scenario: Scenario, scaling: Scaling) -> dict[str, Any]:
    """The scenario as the plant beside the chip takes it: a table of I over V, and parts."""
    circuit = scenario.build_circuit()
    bank = scenario.bank
    board = scenario.board
    return {
        **source_table(scenario),
        "c_farad": circuit.capacitance_f,
        "esr_ohm": bank.capacitor_esr_ohm,
        "line_ohm": circuit.line_ohm,
        "bleed_ohm": circuit.bleed_ohm,
        "leak_ohm": bank.permanent_bleeder_ohm,
        "v_start": bank.capacitor_start_v,
        "bare_relay": 1 if circuit.bare_relay else 0,
        "bounce_us": circuit.bounce_us,
        "welded": 1 if board.contact_welded else 0,
        "relay_welded": 1 if board.relay_welded else 0,
        "switch_shorted": 1 if board.switch_shorted else 0,
        "bleed_open": 1 if board.bleed_open else 0,
        "relay_operate_us": circuit.relay_operate_us,
        "relay_release_us": circuit.relay_release_us,
        "bleed_operate_us": circuit.bleed_operate_us,
        "bleed_release_us": circuit.bleed_release_us,
        "switch_open_us": circuit.switch_open_us,
        "volt_per_code": [
            scaling.voltage_v_per_code / (1.0 + board.voltage_gain_error),
            scaling.capacitor_v_per_code,
        ],
        "ampere_per_code": scaling.current_a_per_code / (1.0 + board.current_gain_error),
        "zero_code": [
            scaling.voltage_zero_code + board.voltage_offset_codes,
            scaling.current_zero_code + board.current_offset_codes,
            scaling.capacitor_zero_code,
        ],
        "noise_code": board.adc_noise_codes,
        "wide_code": board.wide_code_lsb,
        "spi": None if board.converter == "internal" else SPI_PARTS,
        "seed": scenario.seed,
        "stop_loop": 0 if board.stop_loop_open else 1,
        "reversed": 1 if board.leads_reversed else 0,
        "stuck": [board.voltage_stuck_code, board.current_stuck_code, board.capacitor_stuck_code],
    }


def source_table(scenario: Scenario) -> dict[str, Any]:
    """The source as the plant beside the chip takes it: its curve from Isc to Voc, and on to
    where a capacitor above Voc drives REVERSE_A back into it.
    """
    source = scenario.build_source()
    voltage, current = source.curve(CURVE_POINTS)
    open_v = float(source.voltage_at(0.0))
    # In the diode voltage, which differs from the terminals' by the drop at Rs.
    farthest = float(source.voltage_at(-REVERSE_A)) - REVERSE_A * source.series_resistance_ohm
    far = np.linspace(open_v, farthest, REVERSE_POINTS)[1:]
    return {
        "u_volt": [*voltage.tolist(), *source.voltage(far).tolist()],
        "i_ampere": [*current.tolist(), *source.current(far).tolist()],
        "open_volt": open_v,
    }


class ChipTracer:
    """An emulated RP2040 running the firmware; `chip` is the runner's handle on it."""

    rung = "chip"

    def __init__(
        self,
        scenario: Scenario,
        scaling: Scaling,
        record: bytes,
        *,
        more_files: Mapping[str, bytes] | None = None,
        uptime_us: int = 0,
    ) -> None:
        """`more_files` come on top of the firmware's; `uptime_us` is the timer's start."""
        lacking = missing()
        if lacking:
            raise UsageError(
                "starting the emulated chip",
                found="not all that it needs",
                expected="a Pico image, a boot ROM, Node.js and the project's checkout",
                next_step=lacking,
            )
        runner = _runner()
        assert runner is not None
        self.scenario = scenario
        self._foreseen = scenario  # once all that is planned has happened
        files: dict[str, bytes] = {
            f"/{path.relative_to(compiled('armv6m'))}": path.read_bytes()
            for path in compiled("armv6m").rglob("*.mpy")
        }
        files["/main.py"] = (device_folder() / "main.py").read_bytes()
        files["/profile.bin"] = seal(record)
        files |= more_files or {}
        self.chip = runner.Chip(
            files=files,
            bare=True,
            plant=plant_description(scenario, scaling),
            uptime_us=uptime_us,
        )
        self.chip.let_pass(START_MS)
        self._port_name = ""

    def connect(self) -> Port:
        """The chip's USB serial as a port."""
        if not self._port_name:
            self._port_name = self.chip.serial_port()
        return open_port(self._port_name)

    # -- what goes wrong ---------------------------------------------------------------

    def after_closing(self, delay_us: int, what: str, value: Value = 1) -> None:
        """Let something of `mishaps.py` happen `delay_us` after the source next conducts."""
        given = self._given(what, value, delay_us)
        self.chip.order("after_closing", delay_us=delay_us, what=what, value=given)

    def change(self, what: str, value: Value = 1) -> None:
        """Let it happen now."""
        self.chip.order("change", what=what, value=self._given(what, value))
        if what == "power_off" and not value:
            self.chip.let_pass(START_MS)

    def _given(self, what: str, value: Value, delay_us: int = 0) -> Any:
        check(what, value, delay_us)
        if what != "source":
            return value
        self._foreseen = self._foreseen.varied(source=value)
        return source_table(self._foreseen)

    def record(self) -> list[tuple[int, str, Level]]:
        """As `Board.record`: (emulated microseconds, what, level) of pins, contacts and mishaps."""
        return [(us, what, level) for us, what, level in self.chip.order("record")["entries"]]

    def close(self) -> None:
        """Stop the emulation; twice is harmless."""
        if self.chip is not None:
            self.chip.close()
            self.chip = None
