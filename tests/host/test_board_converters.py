"""If these fail, the emulated converters are not those that the profile names, and what the host
corrects on an emulator is not what a board would need.
"""

from __future__ import annotations

import struct
from typing import Any

import numpy as np
import pytest
from test_board import NOISELESS, NOON, board, pairs

from kneewise.emulator.board import Board
from kneewise.emulator.bus import OPS, dispatch
from kneewise.emulator.converters import (
    CAPACITOR,
    CURRENT,
    INTERNAL,
    SPI16,
    VOLTAGE,
    Converters,
    Scaling,
)
from kneewise.emulator.firmware import firmware_module
from kneewise.emulator.opener import profile_for, scaling_of
from kneewise.emulator.scenario import Scenario
from kneewise.errors import ScenarioError

PLAIN = Scaling(
    voltage_v_per_code=1.0,
    voltage_zero_code=0.0,
    current_a_per_code=1.0,
    current_zero_code=0.0,
    capacitor_v_per_code=1.0,
    capacitor_zero_code=0.0,
)
WIDE = (511, 1535, 2559, 3583)
FINE = {"converter": "spi16"}


def of_ramp(channel: int, lsb: float, *, fine: bool = False) -> np.ndarray:
    """Codes of a ramp of 64 steps a code over the whole range, without noise."""
    changes = {"adc_noise_codes": 0.0, "wide_code_lsb": lsb, **(FINE if fine else {})}
    made = Converters(NOON.varied(board=changes), PLAIN)
    ramp = (np.arange(64 * 4096) + 0.5) / 64 - 0.5
    return made.codes(channel, ramp)


def fine_board(scenario: Scenario, **changes: float) -> Board:
    varied = scenario.varied(board={**FINE, **changes})
    return Board(varied, scaling=scaling_of(profile_for(varied)), clock=lambda: 0.0)


# -- wide codes -------------------------------------------------------------------------------


@pytest.mark.parametrize("channel", [VOLTAGE, CURRENT, CAPACITOR])
@pytest.mark.parametrize("lsb", [9.0, 4.5, 32.0])
def test_four_codes_are_wide_and_all_others_equally_narrow(channel: int, lsb: float) -> None:
    """Source: RP2040 datasheet, erratum RP2040-E11: codes 511, 1535, 2559, 3583, about 9 LSB."""
    widths = np.bincount(of_ramp(channel, lsb), minlength=4096) / 64
    assert widths[list(WIDE)] == pytest.approx([lsb] * 4, abs=1 / 32)
    others = np.delete(widths, WIDE)
    assert others == pytest.approx((4096 - 4 * lsb) / 4092, abs=1 / 32)
    assert widths.sum() == 4096


def test_after_gain_and_offset_the_wide_codes_leave_what_the_chip_leaves() -> None:
    """About 4.3 LSB at most and 2.3 rms: own calculation from the erratum."""
    codes = of_ramp(VOLTAGE, 9.0)
    ramp = np.arange(codes.size) / 64
    left = codes - np.polyval(np.polyfit(ramp, codes, 1), ramp)
    assert np.abs(left).max() == pytest.approx(4.3 + 0.5, abs=0.1)  # and half a code of rounding
    assert left.std() == pytest.approx(2.3, abs=0.1)


def test_a_converter_without_wide_codes_rounds() -> None:
    codes = of_ramp(VOLTAGE, 1.0)
    assert np.array_equal(codes, np.arange(codes.size) // 64)


def test_noise_spreads_over_a_wide_code_as_over_any_other() -> None:
    """What lies in the middle of a wide code reads as that code and nothing else."""
    still = Converters(NOON.varied(board={"adc_noise_codes": 1.0}), PLAIN)
    middle = np.full(1000, 511.5)  # the code's own range: 506.5 to 515.5 LSB
    assert set(still.codes(VOLTAGE, middle)) == {511}


# -- two SPI converters -----------------------------------------------------------------------


def test_sixteen_bits_over_the_same_range_with_the_capacitor_on_twelve() -> None:
    fine, coarse = fine_board(NOISELESS), board(NOISELESS)
    charged = fine_board(NOISELESS.varied(load={"capacitor_start_v": 40.0}))
    assert (fine.read(VOLTAGE, 1) - 384) / 16 == pytest.approx(coarse.read(VOLTAGE, 1) - 24, abs=1)
    assert fine.read(CURRENT, 10) == 6400
    assert charged.read(CAPACITOR, 1) == pytest.approx(24 + 40 / 0.0165, abs=1)
    railed = Board(
        NOISELESS.varied(board=FINE), scaling=Scaling(voltage_v_per_code=1e-4), clock=lambda: 0.0
    )
    assert railed.read(VOLTAGE, 4096) == 4096 * 65535 < 2**28


@pytest.mark.parametrize("pair_us", [2, 4, 10])
def test_both_codes_of_a_pair_are_of_one_instant(pair_us: int) -> None:
    """Each pair lies on the source's curve; 2 us of skew would be eight of these codes off it."""
    made = fine_board(NOISELESS)
    assert made.use_converters(SPI16, pair_us) == 1
    made.quiet(1)
    made.bleed_release(1)
    made.relay(1)
    made.wait(20_000)
    made.capture_start()
    made.pulse(12_000)
    made.wait(12_000)
    assert made.capture_written() == 12_000 // pair_us
    found = pairs(made.capture_take()).astype(float)
    assert found.max() > 4095
    volt = (found[:, 0] - 384) * 0.0165 / 16
    ampere = (found[:, 1] - 640) * 0.0052 / 16
    source = NOISELESS.build_source()
    # 0.7 codes each: half a code of rounding, and the divider's current.
    slack = np.abs(source.slope(source.diode_voltage_at(volt))) * 0.00072 + 0.00023
    assert np.all(np.abs(ampere - source.current_at(volt)) < slack)


def test_reading_one_of_a_pair_takes_the_pairs_time() -> None:
    made = fine_board(NOON)
    made.use_converters(SPI16, 10)
    began = made.now_us()
    made.read(VOLTAGE, 100)
    assert made.now_us() - began == 1000
    made.read(CAPACITOR, 100)
    assert made.now_us() - began == 1200


def test_noise_is_in_codes_of_the_converter_in_use() -> None:
    made = fine_board(NOON, adc_noise_codes=5.0)
    made.capture_start()
    made.wait(40_000)
    spread = pairs(made.capture_take()).std(axis=0)
    assert spread == pytest.approx([5.0, 5.0], abs=0.1)


def test_supervision_sees_the_newest_pair_at_any_pace() -> None:
    made = fine_board(NOISELESS)
    made.use_converters(SPI16, 3)
    made.capture_start()
    code = 384 + round(39.7540 / 0.00103125)
    made.supervise(code + 50, 65535)
    made.wait(5000)
    assert made.trips() == 0
    made.supervise(code - 50, 65535)
    made.wait(1000)
    assert made.trips() == 2


def test_converters_that_the_board_has_not_are_refused() -> None:
    assert board().use_converters(SPI16, 4) == 0
    assert board().use_converters(INTERNAL, 5) == 0
    assert board().use_converters(INTERNAL, 4) == 1
    assert fine_board(NOON).use_converters(INTERNAL, 4) == 0
    with pytest.raises(ScenarioError, match='expected "internal" or "spi16"'):
        NOON.varied(board={"converter": "spi24"})


def board_file(made: Board) -> Any:
    """The firmware's emulated board file on this board, in this process."""

    class Bus:
        def call(self, name: str, a: int, b: int) -> bytes:
            return dispatch(made, OPS[name], a, b)

    return firmware_module("hal_emulated").EmulatedHal(Bus(), None, bytes(8), 1)


def test_the_board_file_takes_on_the_converters_numbers() -> None:
    hal = board_file(fine_board(NOISELESS))
    hal.use_converters(SPI16, 2, 20_000, 700)
    assert (hal.PAIR_US, hal.SKEW_NS, hal.CODE_BITS) == (2, 0, 16)
    hal.quiet_begin()
    hal.capture_start()
    hal.wait_us(1000)
    assert hal.capture_written() == 500
    # Open: the source's voltage, and no current but the divider's.
    assert hal.ring[499] & 0xFFFF == pytest.approx(384 + 39.7540 / 0.00103125, abs=1)
    assert hal.ring[499] >> 16 == 640
    usual = board_file(board())
    usual.use_converters(INTERNAL, 4, 0, 0)
    assert (usual.PAIR_US, usual.SKEW_NS, usual.CODE_BITS) == (4, 2000, 12)


def test_the_board_file_refuses_what_a_board_would() -> None:
    with pytest.raises(ValueError, match="no such converters"):
        board_file(board()).use_converters(SPI16, 4, 20_000, 700)
    with pytest.raises(ValueError, match="pair_us is too short"):
        board_file(fine_board(NOON)).use_converters(SPI16, 2, 20_000, 1200)


# -- the voltage channel at its zero ----------------------------------------------------------


def test_at_zero_the_voltage_channel_reads_its_zero_and_its_own_error() -> None:
    off = {"voltage_offset_codes": 7.0, "voltage_gain_error": 0.05, "wide_code_lsb": 1.0}
    made = board(NOON.varied(board=off))
    current = made.read(CURRENT, 4096)
    made.zero_input(1)
    assert made.read(VOLTAGE, 4096) / 4096 == pytest.approx(31.0, abs=0.1)
    assert made.read(CURRENT, 4096) == pytest.approx(current, rel=1e-2)
    made.capture_start()
    made.wait(4000)
    assert pairs(made.capture_take())[:, 0].mean() == pytest.approx(31.0, abs=0.2)
    made.capture_stop()
    made.zero_input(0)
    assert made.read(VOLTAGE, 16) > 16 * 2400
    assert [entry[1:] for entry in made.record] == [("zero_input", 1), ("zero_input", 0)]


def test_without_power_the_input_is_back_at_the_source() -> None:
    made = board()
    made.zero_input(1)
    made.power(False)
    made.settle(1000)
    made.power(True)
    assert made.read(VOLTAGE, 16) > 16 * 2400


def test_the_new_requests_go_by_number() -> None:
    made = board()
    assert struct.unpack("<q", dispatch(made, OPS["use_converters"], INTERNAL, 4))[0] == 1
    dispatch(made, OPS["zero_input"], 1)
    assert made.record[-1][1:] == ("zero_input", 1)
    assert made.read(VOLTAGE, 10) < 10 * 40
