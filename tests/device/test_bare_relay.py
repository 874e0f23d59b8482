"""If these fail, a bare relay opens under load and draws an arc, or is held closed without a bound.

A relay without a switch in series: the wave holds its coil. A closed contact on a capacitor limits
itself, so what asks for an early end is noted and the charge runs out.
"""

from __future__ import annotations

import pytest
from charging import ABORT, Rig, module
from fake_board import FakeBoard, profile
from hypothesis import given, settings
from hypothesis import strategies as st
from narrow import SmallWord

from kneewise.emulator.firmware import firmware_module

contact = firmware_module("tracer.contact")
BARE = {"contact": 2, "bounce_ms": 1, "breaks_dc": 0}
CHARGE_US = 1.6 * 220e-6 * 40.0 / 9.0 * 1e6  # 1.6 C Voc / Isc: the design's estimate
COLD_A = 0.2  # 1 % of the rating


def rig(**changes) -> Rig:
    made = Rig(FakeBoard(), **BARE | changes)
    made.board.use_contact(True)
    return made


def pulses(board: FakeBoard) -> list[tuple[int, int]]:
    """(when, how long) of each pulse."""
    return [
        (time, values[0]) for name, values, time in board.calls if name == "pulse" and values[0]
    ]


def test_a_sweep_has_one_pulse_and_one_that_takes_its_place_once_the_current_is_known():
    made = rig()
    result = made.run(1000)
    assert result.end_reason == module.COMPLETE
    (closed, first), (_, second), *more = pulses(made.board)
    assert len(more) <= 2
    assert all(length == second for _, length in more)
    assert first == 1_000_000
    assert second == contact.LEAST_US > 1.3 * CHARGE_US
    assert made.board.closings == 1
    assert made.board.opened_at_a == [pytest.approx(0.0, abs=COLD_A)]
    assert not result.hot
    assert not made.outputs.logbook.hot_openings
    assert made.board.time_us - closed < 3.1 * second + 60_000
    assert not made.board.when("relay True")


def abort(board):
    board.incoming += ABORT


def lid(board):
    board.loop_closed = False


EARLY = {
    "abort": (abort, module.ABORTED, {}),
    "lid": (lid, module.STOP_LOOP, {}),
    "supervision": (
        lambda board: setattr(board, "supervision_stops_us", board.time_us),
        module.SUPERVISION_LOST,
        {},
    ),
    "ring": (
        lambda board: setattr(board, "overtaken", 5000),
        module.RING_OVERRUN,
        {},
    ),
    "current": (lambda board: None, module.OVER_CURRENT, {"limit_ma": 5000}),
}


@pytest.mark.parametrize("what", EARLY)
def test_what_asks_for_an_early_end_is_told_and_the_charge_runs_out(what):
    happens, reason, asked = EARLY[what]
    made = rig()
    made.board.after_closing(1500, lambda: happens(made.board))
    result = made.run(500, **asked)
    assert result.end_reason == reason
    (current,) = made.board.opened_at_a
    assert current < COLD_A
    assert made.board.closings == 1
    closed = pulses(made.board)[0][0]
    assert made.board.time_us - closed <= 500_000 + 60_000
    assert not made.board.relay_closed
    assert made.board.bleed_engaged


def test_a_contact_that_is_rated_to_break_opens_at_once():
    made = rig(breaks_dc=1)
    made.board.after_closing(1500, lambda: lid(made.board))
    result = made.run(500)
    assert result.end_reason == module.STOP_LOOP
    assert made.board.opened_at_a[0] > 1.0
    assert result.hot
    assert made.outputs.logbook.hot_openings == 1


def test_ctrl_c_lets_the_charge_run_out_too():
    made = rig()

    def interrupt():
        def raising(buffer):
            made.board.link_read = read
            raise KeyboardInterrupt

        read, made.board.link_read = made.board.link_read, raising

    made.board.after_closing(1500, interrupt)
    result = made.run(500)
    assert result.end_reason == module.INTERRUPTED
    assert made.board.opened_at_a[0] < COLD_A


def test_the_relay_lets_go_by_itself_where_nobody_stops_it():
    """The pulse is all that holds it."""
    made = rig()
    made.board.after_closing(1500, lambda: setattr(made.board, "pairs_stop_at", 0))
    made.run(400)
    assert max(length for _, length in pulses(made.board)) <= 400_000


def test_no_pulse_is_longer_than_the_program_can_give():
    made = rig()
    made.run(120_000)
    assert pulses(made.board)[0][1] == 5_000_000


@settings(max_examples=300)
@given(
    st.integers(10, 10_000_000),  # uF x 1000
    st.integers(60, 3600),
    st.integers(20, 3800),
)
def test_the_prediction_is_that_of_the_design(nf, volt_code, ampere_code):
    made = profile(capacitance_nf=max(nf, 10_000))
    told = contact.Contact(None, made)
    most = 5_000_000
    found = told.predicted_us(16 * volt_code, 16 * ampere_code, 0, most)
    volt, ampere = volt_code * 0.0165, ampere_code * 0.0052
    right = max(1.3e6 * 1.6 * made["capacitance_nf"] * 1e-9 * volt / ampere, contact.LEAST_US)
    assert found <= most
    # A volt and a 64th of a millisecond are the steps of the arithmetic.
    assert found >= min(0.99 * right, most) - 70
    assert found <= right * (1.01 + 1.1 / volt) * (1 + 1e6 / made["capacitance_nf"] / 1e3) + 100


@settings(max_examples=300)
@given(st.integers(0, 65535), st.integers(0, 65535), st.integers(1, 4_000_000_000))
def test_the_prediction_stays_within_a_word(volt_code, ampere_code, nf):
    made = profile(capacitance_nf=nf)
    told = contact.Contact(None, made)
    told._micro_farad = SmallWord(min(told._micro_farad, 2**30 - 1))
    told._micro_volt = SmallWord(told._micro_volt)
    told._micro_ampere = SmallWord(told._micro_ampere)
    volt_code, ampere_code = min(volt_code, 4095), min(ampere_code, 4095)
    told.predicted_us(SmallWord(16 * volt_code), SmallWord(16 * ampere_code), 1000, 5_000_000)
