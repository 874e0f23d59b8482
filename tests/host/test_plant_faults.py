"""If these fail, an interlock is proved against a fault that no real board would show: a bleed,
a capacitor, a contact or a sensor that goes wrong in another way than physics has it.
"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from test_board import NOISELESS, NOON, board, closed, pairs
from test_plant import BANK, MODULE, Watched

from kneewise.emulator.board import Board
from kneewise.emulator.circuit import SHORTED, Circuit
from kneewise.emulator.contacts import BOUNCES_AT_MOST, bounces_us
from kneewise.emulator.converters import CAPACITOR, CURRENT, VOLTAGE
from kneewise.emulator.opener import profile_for, scaling_of
from kneewise.emulator.plant import Plant
from kneewise.emulator.scenario import Scenario

RELAY_BUILD = {"contact": "relay", "bounce_ms": 3.0}
OPERATE_US, RELEASE_US = 8000, 5000


def relay_board(seed: int = 1, **more: float) -> Board:
    """About to close: from here on the wave has the coil of a bare relay."""
    made = board(NOISELESS.varied(seed=seed, board={**RELAY_BUILD, **more}))
    made.quiet(True)
    made.bleed_release(1)
    made.wait(20_000)
    return made


def moves(made: Board, what: str) -> list[tuple[int, int | None]]:
    return [(us, level) for us, name, level in made.record if name == what]


# -- capacitor and bleed --------------------------------------------------------------------


@pytest.mark.parametrize(
    ("of_c", "of_r"), [(1.0, 1.0), (0.5, 1.0), (3.0, 1.0), (1.0, 100.0), (0.05, 0.001), (5.0, 1e-4)]
)
def test_a_bank_empties_by_its_true_values(of_c: float, of_r: float) -> None:
    """v(t) = v0 exp(-t / ((R + ESR) C)), R of both bleeders together."""
    load = {
        "capacitance_of_nominal": of_c,
        "bleed_of_nominal": of_r,
        "capacitor_start_v": 40.0,
    }
    made = board(NOON.varied(load=load))
    bleeders = 1 / (1 / (100.0 * of_r) + 1 / 22e3)
    tau_s = (bleeders + 0.02) * 2200e-6 * of_c
    for taus in (0.5, 1.0, 2.0):
        made.settle(max(1, round(0.5e6 * tau_s)) if taus < 2 else round(1e6 * tau_s))
        since_s = made.virtual_us / 1e6
        assert made.capacitor_v == pytest.approx(40.0 * math.exp(-since_s / tau_s), rel=1e-9)


def test_the_profile_keeps_what_the_parts_are_meant_to_be() -> None:
    worn = NOON.varied(load={"capacitance_of_nominal": 0.5, "bleed_of_nominal": 0.001})
    assert profile_for(worn) == profile_for(NOON)
    assert worn.build_circuit().capacitance_f == pytest.approx(1100e-6)
    assert worn.build_circuit().bleed_ohm == pytest.approx(0.1)


def test_a_charge_takes_as_long_as_the_true_capacitor_needs() -> None:
    took = []
    for of_nominal in (1.0, 0.5):
        plant = Watched(replace(BANK, capacitance_f=2200e-6 * of_nominal)).close()
        begin = plant.now_us
        while plant.capacitor_v < 30.0:
            plant.advance_to(plant.now_us + 1)
        took.append(plant.now_us - begin)
    assert took[1] == pytest.approx(0.5 * took[0], rel=1e-3)


def test_what_the_bleed_takes_of_a_full_capacitor() -> None:
    """C v0^2 / 2, less what goes to the permanent bleeder and to the ESR."""
    circuit = replace(BANK, capacitor_start_v=40.0)
    plant = Plant(MODULE, circuit)
    assert plant.bleed_energy_j == 0.0
    plant.advance_to(10_000_000)
    bleed, both = 1 / 100, 1 / 100 + 1 / 22e3
    whole = 0.5 * 2200e-6 * 40.0**2
    assert plant.bleed_energy_j == pytest.approx(
        whole * bleed / both / (1 + 0.02 * both), rel=1e-12
    )


def test_what_the_bleed_takes_from_a_live_source() -> None:
    """Against a sum of v^2 / R over every microsecond, and at rest a line in time."""
    plant = Plant(MODULE, replace(BANK, contact_welded=True))
    bank = plant.sample(np.arange(60_001.0))[2]
    summed = float(np.sum(0.5 * (bank[1:] ** 2 + bank[:-1] ** 2))) * 1e-6 / 100.0
    assert plant.bleed_energy_j == pytest.approx(summed, rel=1e-6)
    plant.advance_to(10_000_000)
    before = plant.bleed_energy_j
    plant.advance_to(20_000_000)
    at_rest_v = plant.sample(np.array([2e7]))[2][0]
    assert plant.bleed_energy_j - before == pytest.approx(10 * at_rest_v**2 / 100.0, rel=1e-6)


def test_how_often_somebody_asks_for_the_energy_makes_no_difference() -> None:
    asked, quiet = (Plant(MODULE, replace(BANK, contact_welded=True)) for _ in range(2))
    for us in range(0, 50_000, 777):
        asked.advance_to(us)
        assert asked.bleed_energy_j >= 0.0
    for plant in (asked, quiet):
        plant.advance_to(50_000)
    assert asked.bleed_energy_j == quiet.bleed_energy_j


def test_an_open_bleed_takes_nothing() -> None:
    plant = Plant(MODULE, replace(BANK, bleed_open=True, capacitor_start_v=40.0))
    plant.advance_to(1_000_000)
    assert plant.bleed_energy_j == 0.0


# -- contacts that conduct always -----------------------------------------------------------


@pytest.mark.parametrize("bleed_ohm", [100.0, 10.0, 1.0, 0.1])
def test_a_welded_contact_rests_where_the_bleed_meets_the_curve(bleed_ohm: float) -> None:
    """I(V) = V / R, past the drop of the line."""
    circuit = replace(BANK, bleed_ohm=bleed_ohm, contact_welded=True)
    plant = Plant(MODULE, circuit)
    plant.advance_to(1_000_000)
    v, i, bank = (float(value[0]) for value in plant.sample(np.array([1e6])))
    assert i == pytest.approx(float(MODULE.current_at(v)) - v / 1e6, rel=1e-9)
    assert bank == pytest.approx(i / (1 / bleed_ohm + 1 / 22e3), rel=1e-9)
    assert v - bank == pytest.approx(i * circuit.line_ohm, rel=1e-9)
    assert plant.loop_current_a == pytest.approx(i, rel=1e-12)


def test_a_shorted_switch_conducts_as_soon_as_the_relay_closes() -> None:
    watched = Watched(replace(BANK, switch_shorted=True))
    watched.plant.relay(True)
    watched.plant.advance_to(20_000)
    watched.plant.relay(False)
    watched.plant.advance_to(30_000)
    assert watched.notices == [
        (8000, "relay_contact", 1),
        (8000, "conducting", 1),
        (25_000, "relay_contact", 0),
        (25_000, "conducting", 0),
    ]
    ((us, broken_a),) = watched.plant.hot_openings
    assert us == 25_000
    assert 0.1 < broken_a < 9.2


def test_a_welded_relay_leaves_the_switch_to_break() -> None:
    watched = Watched(replace(BANK, relay_welded=True))
    watched.plant.pulse(3000)
    watched.plant.advance_to(10_000)
    assert [n for n in watched.notices if n[1] == "conducting"] == [
        (0, "conducting", 1),
        (3050, "conducting", 0),
    ]


def test_the_current_broken_is_that_of_the_last_moment() -> None:
    watched = Watched()
    plant = watched.close(3000)
    plant.advance_to(plant.now_us + 3049)
    before_a = plant.loop_current_a
    plant.advance_to(plant.now_us + 100)
    assert plant.loop_current_a == 0.0
    ((us, broken_a),) = plant.hot_openings
    assert us == 23_050
    assert broken_a == pytest.approx(before_a, abs=0.01)
    calm = Watched().close(60_000)  # the current has died by then
    calm.advance_to(calm.now_us + 70_000)
    assert not calm.conducting
    assert calm.hot_openings == []


def test_a_weld_in_mid_charge_closes_and_a_free_contact_opens_in_its_own_time() -> None:
    watched = Watched()
    plant = watched.plant
    plant.alter(circuit=replace(BANK, contact_welded=True))
    assert plant.conducting
    plant.pulse(100)
    plant.advance_to(1000)
    assert plant.conducting
    plant.alter(circuit=BANK)
    plant.advance_to(20_000)
    assert watched.notices == [
        (0, "relay_contact", 1),
        (0, "switch_contact", 1),
        (0, "conducting", 1),
        (100, "pulse", 0),
        (1050, "switch_contact", 0),
        (1050, "conducting", 0),
        (6000, "relay_contact", 0),
    ]


def test_another_source_in_mid_charge_leaves_the_capacitor_as_it_is() -> None:
    plant = Watched().close()
    plant.advance_to(25_000)
    before = plant.capacitor_v
    brighter = replace(MODULE, photocurrent_a=11.96)
    plant.alter(source=brighter)
    assert plant.capacitor_v == pytest.approx(before, abs=1e-9)
    v, i, _ = plant.sample(np.array([25_000.0, 26_000.0]))
    np.testing.assert_allclose(i, brighter.current_at(v) - v / 1e6, rtol=1e-9)
    plant.pulse(0)
    plant.advance_to(30_000)
    open_v = float(plant.sample(np.array([3e4]))[0][0])
    assert open_v == pytest.approx(float(brighter.voltage_at(open_v / 1e6)), rel=1e-12)


def test_the_bleed_opens_and_shorts_on_the_way() -> None:
    circuit = replace(BANK, capacitor_start_v=40.0)
    plant = Plant(MODULE, circuit)
    expected = 40.0
    leak = {"bleed_open": 1 / 22e3, "bleed_shorted": 1 / 22e3 + 1 / (100 * SHORTED)}
    for number, (flag, siemens) in enumerate(leak.items()):
        plant.alter(circuit=replace(circuit, **{flag: True}))
        plant.advance_to(200 * (number + 1))
        expected *= math.exp(-200e-6 / ((1 / siemens + 0.02) * 2200e-6))
        assert plant.capacitor_v == pytest.approx(expected, rel=1e-9)


# -- a bare relay -----------------------------------------------------------------------------


@given(st.integers(0, 2**32 - 1), st.integers(1, 1000), st.integers(0, 20_000))
def test_bounces_come_in_pairs_within_their_time(seed: int, number: int, within: int) -> None:
    found = bounces_us(seed, number, within)
    assert found == sorted(set(found))
    assert len(found) % 2 == 0
    assert len(found) <= 2 * BOUNCES_AT_MOST
    assert all(1 <= us <= within for us in found)
    assert found == bounces_us(seed, number, within)


def test_the_wave_has_the_coil_and_the_relay_pin_has_nothing() -> None:
    made = relay_board(bounce_ms=0.0)
    made.relay(1)
    made.wait(20_000)
    assert moves(made, "relay_contact") == []
    made.pulse(12_000)
    made.wait(40_000)
    assert moves(made, "relay_contact") == [(40_000 + OPERATE_US, 1), (52_000 + RELEASE_US, 0)]
    assert moves(made, "switch_contact") == []
    assert moves(made, "pulse") == [(40_000, 1), (52_000, 0)]
    assert [us for us, _ in made.hot_openings] == [52_000 + RELEASE_US]
    assert Circuit(capacitance_f=1.0, bare_relay=True).line_ohm == pytest.approx(0.005)


@pytest.mark.parametrize("seed", range(8))
def test_a_relay_bounces_within_its_time_and_then_rests(seed: int) -> None:
    made = relay_board(seed)
    made.pulse(60_000)
    made.wait(60_000)
    touched_us = 20_000 + OPERATE_US
    found = moves(made, "relay_contact")
    assert found[0] == (touched_us, 1)
    assert found == moves(made, "conducting")
    assert found[-1][1] == 1
    assert touched_us < found[-1][0] <= touched_us + 3000
    assert len(found) >= 3
    assert len(made.hot_openings) == len(found) // 2
    again = relay_board(seed)
    again.pulse(60_000)
    for _ in range(60):
        again.wait(1000)
    assert list(again.record) == list(made.record)


def test_each_closing_bounces_in_its_own_way() -> None:
    found = set()
    for seed in range(4):
        made = relay_board(seed)
        for _ in range(3):
            began_us = made.virtual_us
            made.pulse(20_000)
            made.wait(40_000)
            moved = tuple(us - began_us for us, _ in moves(made, "relay_contact") if us > began_us)
            found.add(moved)
    assert len(found) == 12


def test_a_relay_let_go_in_mid_bounce_bounces_no_more() -> None:
    made = relay_board(bounce_ms=20.0)
    made.pulse(OPERATE_US + 1)
    made.wait(100_000)
    assert not made.contact_conducting
    found = moves(made, "relay_contact")
    assert len(found) >= 2
    assert found[-1][0] <= 20_001 + OPERATE_US + RELEASE_US


def test_the_same_seed_gives_the_same_codes_through_every_bounce() -> None:
    taken = []
    for seed, slice_us in ((1, 250), (1, 1000), (2, 1000)):
        made = relay_board(seed)
        made.capture_start()
        made.pulse(30_000)
        data = b""
        for _ in range(20_000 // slice_us):
            made.wait(slice_us)
            data += made.capture_take()
        taken.append(data)
    assert taken[0] == taken[1] != taken[2]


def test_a_stop_loop_is_only_sensed_in_a_relay_build() -> None:
    made = relay_board()
    made.pulse(60_000)
    made.wait(20_000)
    made.change("stop_loop")
    assert made.stop_loop_closed() == 0
    made.wait(30_000)
    assert made.contact_conducting
    assert not made.bleed_engaged
    switched = closed()
    switched.pulse(60_000)
    switched.wait(1000)
    switched.change("stop_loop")
    switched.wait(10_000)
    assert not switched.contact_conducting
    assert switched.bleed_engaged


def test_a_welded_relay_without_a_switch_never_opens() -> None:
    made = board(NOON.varied(board={**RELAY_BUILD, "relay_welded": True}))
    made.wait(100_000)
    assert made.contact_conducting
    assert made.hot_openings == []


@pytest.mark.parametrize(
    ("given", "contact", "bounce_ms"),
    [
        ({}, "relay+switch", 0),
        ({"contact": "relay"}, "relay", 1),
        ({"contact": "relay", "bounce_ms": 2.3}, "relay", 3),
        ({"contact": "relay", "bounce_ms": 20.0, "converter": "spi16"}, "relay", 20),
    ],
)
def test_the_profile_knows_contact_and_bounce(
    given: dict[str, object], contact: str, bounce_ms: int
) -> None:
    made = profile_for(NOON.varied(board=given))
    assert (made.contact, made.timing.bounce_ms) == (contact, bounce_ms)
    assert made.record()


# -- sensors ------------------------------------------------------------------------------------


def stuck(converter: str, **codes: int) -> Board:
    scenario: Scenario = NOON.varied(
        board={
            "converter": converter,
            **{f"{name}_stuck_code": code for name, code in codes.items()},
        }
    )
    return Board(scenario, scaling=scaling_of(profile_for(scenario)), clock=lambda: 0.0)


@pytest.mark.parametrize(("converter", "times"), [("internal", 1), ("spi16", 16)])
def test_a_stuck_channel_reads_its_code_whatever_it_sees(converter: str, times: int) -> None:
    made = stuck(converter, voltage=0, current=4095, capacitor=24)
    assert made.read(VOLTAGE, 64) == 0
    assert made.read(CURRENT, 64) == 64 * 4095 * times
    assert made.read(CAPACITOR, 64) == 64 * 24
    made.zero_input(1)
    assert made.read(VOLTAGE, 64) == 0
    made.capture_start()
    made.wait(1000)
    assert set(map(tuple, pairs(made.capture_take()).tolist())) == {(0, 4095 * times)}
    made.power(False)
    made.power(True)
    assert made.read(CURRENT, 1) == 4095 * times


def test_one_stuck_channel_leaves_the_noise_of_the_others_as_it_was() -> None:
    found = []
    for made in (stuck("internal"), stuck("internal", voltage=2000)):
        made.quiet(1)
        made.capture_start()
        made.wait(4000)
        found.append(pairs(made.capture_take()))
    assert np.array_equal(found[0][:, 1], found[1][:, 1])
    assert set(found[1][:, 0]) == {2000}
