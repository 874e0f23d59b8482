"""If these fail, the firmware runs against a board that lies about codes, pins or time."""

from __future__ import annotations

import struct
import time

import numpy as np
import pytest

from kneewise.emulator.board import Board, PowerLost
from kneewise.emulator.bus import OPS, dispatch
from kneewise.emulator.converters import CAPACITOR, CURRENT, VOLTAGE, Scaling
from kneewise.emulator.scenario import Scenario

NOON = Scenario.default()
NOISELESS = NOON.varied(board={"adc_noise_codes": 0.0, "wide_code_lsb": 1.0})


class Clock:
    """Seconds that pass only when told."""

    def __init__(self) -> None:
        self.now = 100.0

    def __call__(self) -> float:
        return self.now


def board(scenario: Scenario = NOON) -> Board:
    return Board(scenario, clock=Clock())


def closed(scenario: Scenario = NOON) -> Board:
    """In quiet, relay closed dry, about to conduct at the next pulse."""
    made = board(scenario)
    made.quiet(True)
    made.bleed_release(1)
    made.relay(1)
    made.wait(20_000)
    return made


def pairs(data: bytes) -> np.ndarray:
    return np.frombuffer(data, dtype="<u2").reshape(-1, 2)


def captured(slice_us: int, total_us: int = 12_000, scenario: Scenario = NOON) -> bytes:
    made = closed(scenario)
    made.capture_start()
    made.pulse(total_us)
    taken = b""
    for begin in range(0, total_us, slice_us):
        made.wait(min(slice_us, total_us - begin))
        taken += made.capture_take()
    assert made.capture_written() == total_us // 4
    made.capture_stop()
    return taken


@pytest.mark.parametrize("slice_us", [1, 7, 250, 1000])
def test_a_capture_is_the_same_however_it_is_cut_into_waits(slice_us: int) -> None:
    assert captured(slice_us) == captured(12_000)


def test_codes_are_the_curve_to_half_a_code() -> None:
    found = pairs(captured(500, scenario=NOISELESS)).astype(float)
    volt = (found[1:, 0] - 24.0) * 0.0165
    ampere = (found[1:, 1] - 40.0) * 0.0052
    source = NOISELESS.build_source()
    # The current was taken 2 us later: the mean of two voltages stands at its time.
    middle = 0.5 * (volt[:-1] + volt[1:])
    slack = np.abs(source.slope(source.diode_voltage_at(middle))) * 0.0165 + 0.6 * 0.0052
    assert np.all(np.abs(ampere[:-1] - source.current_at(middle)) < slack)


def test_noise_gain_and_offset_are_as_the_scenario_says() -> None:
    off = {"voltage_gain_error": 0.01, "voltage_offset_codes": 5.0, "current_offset_codes": -3.0}
    off["wide_code_lsb"] = 1.0
    open_code = 24.0 + 39.7537 / 0.0165
    codes = [Board(NOON.varied(board=off), clock=Clock()).read(VOLTAGE, 4096) / 4096]
    assert codes[0] == pytest.approx(24.0 + 5.0 + 1.01 * (open_code - 24.0), abs=0.1)
    noisy = board(NOON.varied(board=off))
    noisy.capture_start()
    noisy.wait(40_000)
    found = pairs(noisy.capture_take())
    assert found[:, 1].mean() == pytest.approx(37.0, abs=0.05)
    assert found.std(axis=0) == pytest.approx([1.235, 1.235], abs=0.03)  # 1.2 and rounding


def test_codes_end_at_the_rails() -> None:
    coarse = Scaling(voltage_v_per_code=0.001, current_zero_code=-50.0)
    railed = Board(NOISELESS, scaling=coarse, clock=Clock())
    assert railed.read(VOLTAGE, 16) == 16 * 4095
    assert railed.read(CURRENT, 16) == 0


def test_a_read_takes_two_microseconds_a_conversion_and_sees_the_bank_bleed() -> None:
    charged = board(NOISELESS.varied(load={"capacitor_start_v": 40.0}))
    before = charged.now_us()
    first = charged.read(CAPACITOR, 100) / 100
    assert charged.now_us() - before == 200
    charged.wait(152_000)
    second = charged.read(CAPACITOR, 100) / 100
    # 100 ohm in parallel to 22 kohm, with 2200 uF: 0.219 s.
    assert (second - 24) / (first - 24) == pytest.approx(np.exp(-0.1522 / 0.21905), abs=1e-3)


def test_reading_a_channel_during_a_capture_is_a_mistake_that_shows() -> None:
    busy = board()
    busy.capture_start()
    with pytest.raises(RuntimeError, match="while a capture has the converter"):
        busy.read(VOLTAGE, 4)


def test_time_follows_the_clock_except_in_quiet() -> None:
    clock = Clock()
    timed = Board(NOON, clock=clock)
    clock.now += 0.5
    assert timed.now_us() == 500_000
    timed.wait(1000)
    clock.now += 0.001
    assert timed.now_us() == 502_000
    timed.quiet(True)
    clock.now += 10.0
    assert timed.now_us() == 502_000
    timed.wait(250)
    timed.quiet(False)
    assert timed.now_us() == 502_250
    clock.now += 0.002
    timed.tick_wall()
    assert timed.virtual_us == 504_250


def test_idle_polls_change_nothing_in_a_sweep() -> None:
    """What a quiet stretch draws depends on the seed and its number alone."""
    plain, chatty, other = board(), board(), board(NOON.varied(seed=2))
    chatty.read(VOLTAGE, 777)
    found = []
    for one in (plain, chatty, other):
        for _ in range(2):
            one.quiet(True)
            one.capture_start()
            one.wait(4000)
            found.append(one.capture_take())
            one.capture_stop()
            one.quiet(False)
    assert found[0:2] == found[2:4]
    assert len({found[0], found[1], found[4], found[5]}) == 4


def test_the_record_holds_every_command_and_every_contact() -> None:
    made = closed()
    made.pulse(5000)
    made.wait(1000)
    made.pulse(500)  # a renewal is no change
    made.wait(1000)
    made.relay(0)
    made.bleed_release(0)
    made.wait(6000)
    assert list(made.record) == [
        (0, "bleed_release", 1),
        (0, "relay", 1),
        (5000, "bleed_contact", 0),
        (8000, "relay_contact", 1),
        (20_000, "pulse", 1),
        (20_000, "switch_contact", 1),
        (20_000, "conducting", 1),
        (21_500, "pulse", 0),
        (21_550, "switch_contact", 0),
        (21_550, "conducting", 0),
        (22_000, "relay", 0),
        (22_000, "bleed_release", 0),
        (27_000, "relay_contact", 0),
        (27_000, "bleed_contact", 1),
    ]
    assert made.bleed_engaged
    assert not made.contact_conducting


def test_lost_power_leaves_undriven_pins_and_a_safe_plant() -> None:
    """H21: 3 ms into a charge the board dies; contact open, bleed engaged, capacitor falling."""
    made = closed()
    made.after_closing(3000, "power_off")
    made.pulse(5000)
    made.wait(2999)
    with pytest.raises(PowerLost, match="at 23000 us"):
        made.wait(10_000)
    assert made.virtual_us == 23_000
    assert [entry for entry in made.record if entry[0] == 23_000] == [
        (23_000, "event:power_off", 1),
        (23_000, "relay", None),
        (23_000, "bleed_release", None),
        (23_000, "pulse", None),
    ]
    made.relay(1)  # firmware in its death throes drives nothing
    made.settle(49)
    assert made.contact_conducting
    made.settle(1)
    assert not made.contact_conducting
    made.settle(4950)
    assert made.bleed_engaged
    charged = made.capacitor_v
    assert charged > 10.0
    made.settle(1_000_000)
    assert made.capacitor_v < 0.02 * charged
    made.power(True)
    assert made.now_us() == 0
    assert made.virtual_us == 1_028_000
    made.relay(1)
    made.pulse(10**5)
    made.wait(10**5)  # and with the next closing it is not lost again


@pytest.mark.parametrize("slice_us", [1, 250, 20_000])
def test_power_is_lost_at_the_same_instant_however_time_passes(slice_us: int) -> None:
    made = board()
    made.after_closing(1234, "power_off")
    made.bleed_release(1)
    made.pulse(100_000)
    made.relay(1)  # conducts when the relay closes, 8000 us from here
    whole_slices = 9233 // slice_us
    for _ in range(whole_slices):
        made.wait(slice_us)
    with pytest.raises(PowerLost):
        made.wait(slice_us)
    assert made.virtual_us == 9234


def test_power_can_be_lost_in_a_read_and_while_idle() -> None:
    reading = closed()
    reading.after_closing(100, "power_off")
    reading.pulse(5000)
    with pytest.raises(PowerLost, match="at 20100 us"):
        reading.read(VOLTAGE, 200)
    clock = Clock()
    idle = Board(NOON, clock=clock)
    idle.relay(1)
    idle.pulse(10**6)
    idle.after_closing(0, "power_off")
    clock.now += 1.0
    with pytest.raises(PowerLost, match="at 8000 us"):
        idle.now_us()
    idle.power(False)  # a second loss is none
    idle.settle(100_000)
    idle.power(True)
    idle.relay(1)
    idle.pulse(10**6)
    idle.after_closing(0, "power_off")
    clock.now += 1.0
    idle.power(False)  # unplugged at the moment of its own loss
    assert idle.virtual_us == 116_000


def test_power_off_is_safe_without_any_firmware() -> None:
    made = closed()
    made.pulse(10**6)
    made.wait(500)
    made.power(False)
    made.settle(5000)
    assert made.bleed_engaged
    assert not made.contact_conducting
    assert made.capture_take() == b""


def test_supervision_looks_every_millisecond_at_the_newest_pair() -> None:
    made = closed(NOISELESS)
    made.capture_start()
    made.supervise(4095, 4095)
    made.pulse(20_000)
    made.wait(999)
    assert made.supervision_ticks() == 0
    made.wait(1)
    assert made.supervision_ticks() == 1
    assert made.trips() == 0
    made.wait(8500)
    newest = pairs(made.capture_take())[-125 - 1]  # the last pair complete by the ninth look
    made.supervise(4095, int(newest[1]))
    made.wait(1000)
    assert made.trips() == 0  # the current has fallen since
    made.supervise(int(newest[0]), 4095)
    made.wait(1000)
    assert made.trips() == 2
    made.supervise_end()
    made.wait(5000)
    assert made.supervision_ticks() == 1


@pytest.mark.parametrize("slice_us", [3, 500, 4000])
def test_trips_do_not_depend_on_how_time_passes(slice_us: int) -> None:
    """A trip at the code that the look at 3 ms is the first to see, twice in a row."""
    looks = pairs(captured(12_000, scenario=NOISELESS))[248::250]
    made = closed(NOISELESS)
    made.capture_start()
    made.supervise(int(looks[2, 0]), 4095)
    made.pulse(20_000)
    tripped_us = None
    for now_us in range(slice_us, 4000 + slice_us, slice_us):
        made.wait(slice_us)
        if made.trips() and tripped_us is None:
            tripped_us = now_us
    assert tripped_us is not None
    assert 3000 <= tripped_us < 3000 + slice_us + (1000 if slice_us > 1000 else 0)


def test_an_over_current_trip_and_an_opened_lid() -> None:
    made = closed()
    made.capture_start()
    made.supervise(4095, 1000)
    made.pulse(20_000)
    made.wait(1000)
    assert made.trips() == 4
    made.change("stop_loop")
    assert made.stop_loop_closed() == 0
    made.wait(1000)
    assert made.trips() == 5
    assert not made.contact_conducting
    lid_open = board(NOON.varied(board={"stop_loop_open": True}))
    lid_open.pulse(1000)
    lid_open.relay(1)
    lid_open.wait(20_000)
    assert not any(entry[1].endswith("_contact") for entry in lid_open.record)


def test_the_comparator_tells_reversed_leads_from_a_dark_source() -> None:
    assert board().leads_reversed() == 0
    reversed_noon = NOON.varied(board={"leads_reversed": True})
    assert board(reversed_noon).leads_reversed() == 1
    assert board(reversed_noon).read(VOLTAGE, 10) == 0
    assert board(reversed_noon.varied(source={"irradiance_w_m2": 0.0})).leads_reversed() == 0


def test_a_firmware_that_comes_late_gets_the_newest_pairs_and_the_true_count() -> None:
    late = board()
    late.quiet(True)
    late.capture_start()
    late.wait(100_000)
    assert late.capture_written() == 25_000
    assert len(late.capture_take()) == 4 * 16_383
    assert late.capture_take() == b""


def test_requests_by_number_are_the_same_calls() -> None:
    direct, numbered = board(), board()

    def call(name: str, a: int = 0, b: int = 0) -> int:
        return int(struct.unpack("<q", dispatch(numbered, OPS[name], a, b))[0])

    for one in ("quiet", "relay", "bleed_release"):
        getattr(direct, one)(1)
        assert call(one, 1) == 0
    direct.wait(20_000)
    assert call("wait", 20_000) == 0
    assert call("read", VOLTAGE, 64) == direct.read(VOLTAGE, 64)
    direct.capture_start()
    direct.pulse(5000)
    direct.supervise(4095, 500)
    direct.wait(5000)
    for name, a, b in (
        ("capture_start", 0, 0),
        ("pulse", 5000, 0),
        ("supervise", 4095, 500),
        ("wait", 5000, 0),
    ):
        assert call(name, a, b) == 0
    assert call("capture_written") == direct.capture_written() == 1250
    assert dispatch(numbered, OPS["capture_take"]) == direct.capture_take()
    assert call("trips") == direct.trips() == 4
    assert call("supervision_ticks") == 5
    assert call("now_us") == direct.now_us()
    assert call("stop_loop_closed") == 1
    assert call("leads_reversed") == 0
    for name in ("supervise_end", "capture_stop", "tick_wall"):
        assert call(name) == 0
    call("relay", -1)
    assert numbered.record[-1] == (25_128, "relay", None)
    with pytest.raises(ValueError, match="no request has the number 99"):
        dispatch(numbered, 99)


def test_request_numbers_stay_as_they_are() -> None:
    """The other side may be older: numbers are appended, never moved."""
    assert list(OPS)[:6] == ["now_us", "wait", "tick_wall", "quiet", "relay", "bleed_release"]
    assert OPS["supervise_end"] == 18
    assert (OPS["use_converters"], OPS["zero_input"]) == (19, 20)


def test_a_sweep_costs_little_processor_time() -> None:
    """15 ms in slices of 500 us: 2 ms here; the bound leaves room for a slow machine."""
    spent = []
    for _ in range(5):
        made = closed()
        made.capture_start()
        made.pulse(20_000)
        began = time.process_time()
        for _ in range(30):
            made.wait(500)
            made.capture_take()
        spent.append(time.process_time() - began)
    assert min(spent) < 0.05
