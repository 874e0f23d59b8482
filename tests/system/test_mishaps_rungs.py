"""If these fail, the rungs disagree about a fault in mid-charge, and a guard that holds on one of
them says nothing about the others.
"""

import contextlib
import threading
import time

import pytest

from kneewise.emulator.opener import connector, profile_for, start
from kneewise.emulator.scenario import Scenario
from kneewise.errors import KneewiseError
from kneewise.instrument.opened import Opened
from kneewise.instrument.tracer import Tracer


def at(one, what):
    return [(us, level) for us, name, level in one.board.record if name == what]


def closed_us(one):
    ((us, _),) = [entry for entry in at(one, "conducting") if entry[1] == 1]
    return us


@pytest.mark.parametrize(
    ("what", "value"),
    [
        ("stop_loop", 1),
        ("weld", 1),
        ("switch_short", 1),
        ("bleed_open", 1),
        ("bleed_short", 1),
        ("source", {"irradiance_w_m2": 700}),
        ("voltage_stuck", 4095),
        ("current_stuck", 0),
        ("capacitor_stuck", 0),
    ],
)
def test_it_happens_in_mid_charge_at_its_own_moment(what, value, bench, rung):
    one = bench(rung)
    one.emulated.after_closing(5_000, what, value)
    # What the firmware and the host make of it is asked elsewhere.
    with contextlib.suppress(KneewiseError):
        one.tracer().sweep()
    assert at(one, f"event:{what}") == [(closed_us(one) + 5_000, 1)]


def test_an_opened_lid_breaks_the_current_in_the_switch_s_own_time(bench, rung):
    one = bench(rung)
    one.emulated.after_closing(5_000, "stop_loop")
    one.tracer().sweep()
    opened_us = closed_us(one) + 5_000
    assert at(one, "conducting")[-1] == (opened_us + 50, 0)
    (to_the_pin,) = [us for us, level in at(one, "pulse") if us >= opened_us and level == 0]
    assert to_the_pin - opened_us < 5_000
    ((us, broken_a),) = one.board.hot_openings
    assert us == opened_us + 50
    assert broken_a > 5.0


def test_a_sound_sweep_breaks_no_current_and_leaves_its_energy_in_the_bleed(bench, rung):
    """C v^2 / 2 of the charge, less what the permanent bleeder and the ESR take."""
    one = bench(rung)
    tracer = one.tracer()
    trace = tracer.sweep()
    assert trace.sound
    tracer.rest()
    assert one.board.hot_openings == []
    held_j = 0.5 * 2200e-6 * trace.voltage[-1] ** 2
    assert one.board.bleed_energy_j == pytest.approx(held_j, rel=0.01)


def test_a_link_that_is_cut_in_mid_charge_costs_nothing_once_it_is_back(bench, rung):
    one = bench(rung)
    tracer = one.tracer()
    one.emulated.after_closing(5_000, "link_cut")

    def join():
        while one.emulated._cable is not None:
            time.sleep(0.01)
        one.emulated.join_link()

    if rung == "micropython":  # a cable that is pulled must be put in again
        threading.Thread(target=join, daemon=True).start()
    trace = tracer.sweep()
    assert trace.end_reason == "complete"
    assert at(one, "event:link_cut") == [(closed_us(one) + 5_000, 1)]


def test_the_same_seed_gives_the_same_knots_through_a_fault(bench):
    def knots(seed):
        one = bench("in-process", seed=seed)
        one.emulated.after_closing(4_000, "source", {"irradiance_w_m2": 800})
        trace = one.tracer().sweep()
        return trace.raw.voltage_sum.tolist(), list(one.board.record)

    first, second, other = knots(1), knots(1), knots(2)
    assert first == second
    assert first[0] != other[0]


@pytest.mark.parametrize("what", ["stop_loop", "weld", "bleed_open"])
def test_what_is_changed_outside_a_charge_can_be_undone(what, bench, rung):
    one = bench(rung)
    one.emulated.change(what)
    one.emulated.change(what, 0)
    one.board.settle(20_000)
    assert one.tracer().sweep().sound


def test_power_is_taken_and_given_as_any_other(bench, rung):
    one = bench(rung)
    one.emulated.change("power_off")
    assert one.board.bleed_engaged
    one.emulated.change("power_off", 0)
    assert one.tracer().sweep().sound


def test_a_board_can_be_told_another_profile_than_its_own(rung):
    scenario = Scenario.default()
    ready = profile_for(scenario)
    capacitor = ready.capacitor.model_copy(update={"capacitance_f": 4400e-6})
    emulated = start(scenario, rung, ready.model_copy(update={"capacitor": capacitor}))
    try:
        opened = Opened(connect=connector(emulated), close=lambda: None, rung=emulated.rung)
        with Tracer(opened) as tracer:
            assert tracer.profile["capacitance_nf"] == 4_400_000
        assert emulated.board.scenario.bank.capacitance_f == pytest.approx(2200e-6)
    finally:
        emulated.close()
