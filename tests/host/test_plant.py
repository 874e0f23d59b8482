"""If these fail, contacts move at the wrong time or the emulated charge goes astray."""

from __future__ import annotations

import math
import time

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from kneewise.emulator.circuit import Circuit
from kneewise.emulator.plant import Plant
from kneewise.emulator.source import Source

MODULE = Source(
    photocurrent_a=9.2,
    saturation_current_a=2e-10,
    n_ns_vt_v=1.62,
    series_resistance_ohm=0.35,
    shunt_resistance_ohm=350.0,
)
BANK = Circuit(
    capacitance_f=2200e-6,
    capacitor_esr_ohm=0.02,
    bleed_ohm=100.0,
    permanent_bleeder_ohm=22e3,
    lead_resistance_ohm=0.05,
)
LOOP_OHM = 0.05 + 0.02 + 0.005 + 0.02


class Watched:
    """A plant with the list of its notices."""

    def __init__(self, circuit: Circuit = BANK) -> None:
        self.notices: list[tuple[int, str, int]] = []
        self.plant = Plant(MODULE, circuit, lambda *notice: self.notices.append(notice))

    def close(self, pulse_us: int = 10**9) -> Plant:
        """Bleed released, relay closed dry, the wave started: conducting from now on."""
        self.plant.bleed_release(True)
        self.plant.relay(True)
        self.plant.advance_to(self.plant.now_us + 20_000)
        self.plant.pulse(pulse_us)
        return self.plant


def test_contacts_follow_their_coils_after_their_own_times() -> None:
    watched = Watched()
    plant = watched.plant
    plant.advance_to(1000)
    plant.bleed_release(True)
    plant.relay(True)
    plant.advance_to(20_000)
    plant.pulse(3000)
    plant.advance_to(30_000)
    plant.relay(False)
    plant.bleed_release(False)
    plant.advance_to(50_000)
    assert watched.notices == [
        (6000, "bleed_contact", 0),
        (9000, "relay_contact", 1),
        (20_000, "switch_contact", 1),
        (20_000, "conducting", 1),
        (23_000, "pulse", 0),
        (23_050, "switch_contact", 0),
        (23_050, "conducting", 0),
        (35_000, "relay_contact", 0),
        (35_000, "bleed_contact", 1),
    ]


def test_a_pulse_replaces_what_was_left_and_never_adds_up() -> None:
    watched = Watched()
    plant = watched.close(5000)
    begin = plant.now_us
    plant.advance_to(begin + 4000)
    plant.pulse(2000)
    assert plant.next_event_us == begin + 6000
    plant.pulse(500)
    plant.advance_to(begin + 4510)
    assert watched.notices[-1] == (begin + 4500, "pulse", 0)
    plant.pulse(1000)  # within the switch's own opening time: it never opened
    plant.pulse(0)
    plant.pulse(0)  # a second stop must not keep the switch closed any longer
    plant.advance_to(begin + 10_000)
    assert watched.notices[-1] == (begin + 4560, "conducting", 0)


def test_a_coil_let_go_before_its_contact_moved_moves_nothing() -> None:
    watched = Watched()
    watched.plant.relay(True)
    watched.plant.advance_to(7000)
    watched.plant.relay(False)
    watched.plant.advance_to(50_000)
    assert watched.notices == []


def test_an_open_stop_loop_takes_the_drive_from_everything() -> None:
    watched = Watched()
    plant = watched.close()
    begin = plant.now_us
    plant.advance_to(begin + 1000)
    plant.stop_loop(False)
    plant.advance_to(begin + 10_000)
    assert [n for n in watched.notices if n[0] > begin] == [
        (begin + 1050, "switch_contact", 0),
        (begin + 1050, "conducting", 0),
        (begin + 6000, "relay_contact", 0),
        (begin + 6000, "bleed_contact", 1),
    ]


def test_before_closing_the_sense_pair_sees_open_circuit_with_the_divider_and_no_current() -> None:
    v, i, bank = Plant(MODULE, BANK).sample(np.array([10.0]))
    assert i[0] == 0.0
    assert bank[0] == 0.0
    # The divider draws 40 uA at the slope of the curve's end, about 0.5 ohm.
    assert v[0] == pytest.approx(float(MODULE.voltage_at(v[0] / 1e6)), rel=1e-12)


def test_the_first_points_stand_at_the_drop_of_the_loop() -> None:
    plant = Watched().close()
    v, i, _ = plant.sample(np.array([float(plant.now_us)]))
    assert v[0] == pytest.approx(i[0] * LOOP_OHM, rel=1e-6)
    assert i[0] == pytest.approx(float(MODULE.current_at(v[0])) - v[0] / 1e6, rel=1e-12)


def test_every_point_of_a_charge_lies_on_the_static_curve() -> None:
    plant = Watched().close()
    v, i = plant.sample_pairs(plant.now_us, 4000, skew_us=0.0)
    np.testing.assert_allclose(i, MODULE.current_at(v) - v / 1e6, rtol=0, atol=1e-11)


def test_charge_balance() -> None:
    """C (dv) = integral of (i - leak) dt: no charge appears or is lost on the way."""
    plant = Watched().close()
    begin = plant.now_us
    times = np.arange(0.0, 14_001.0, 1.0)
    before = plant.capacitor_v
    _, i, bank = plant.sample(begin + times)
    into = i - bank / 22e3
    charge = float(np.sum(0.5 * (into[1:] + into[:-1]))) * 1e-6
    assert BANK.capacitance_f * (plant.capacitor_v - before) == pytest.approx(charge, rel=1e-7)


def test_sampling_across_a_closing_and_an_opening_needs_no_help() -> None:
    watched = Watched()
    plant = watched.plant
    plant.bleed_release(True)
    plant.relay(True)
    plant.pulse(12_001)  # runs before the relay closes at 8000 us, and ends at 12001
    v, i = plant.sample_pairs(7000, 2000)
    starts = 7000 + 4 * np.arange(2000)
    open_v = v[0]
    before, after = starts < 8000, starts >= 12_051
    assert np.all(v[before] == open_v)
    assert np.all(i[starts + 2 < 8000] == 0.0)
    assert v[starts == 8000][0] < 1.0  # the instant of the closing is after it
    assert np.all(v[after] == open_v)
    assert np.all(i[after] == 0.0)
    assert np.all(np.diff(v[~before & ~after]) > 0.0)


def test_results_do_not_depend_on_how_often_somebody_asks() -> None:
    whole = Watched().close()
    begin = whole.now_us
    expected = whole.sample_pairs(begin, 3000)
    parts = Watched().close()
    found = [parts.sample_pairs(begin + 4 * p, 100) for p in range(0, 3000, 100)]
    np.testing.assert_array_equal(np.concatenate([v for v, _ in found]), expected[0])
    np.testing.assert_array_equal(np.concatenate([i for _, i in found]), expected[1])
    parts.advance_to(begin + 20_000)
    whole.advance_to(begin + 20_000)
    assert parts.capacitor_v == whole.capacitor_v


@given(st.lists(st.integers(1, 6000), min_size=1, max_size=12))
@settings(max_examples=25, deadline=None)
def test_the_capacitor_voltage_is_continuous_across_every_event(gaps: list[int]) -> None:
    plant = Watched().close(gaps[0])
    for gap in gaps:
        before = plant.capacitor_v
        plant.pulse(gap)
        assert plant.capacitor_v == pytest.approx(before, abs=1e-9)
        plant.advance_to(plant.now_us + gap + 50)
        assert not plant.conducting
        just_before = plant.capacitor_v
        plant.advance_to(plant.now_us + 100)
        assert plant.capacitor_v <= just_before


def test_a_closed_minute_ends_at_equilibrium_and_takes_no_time() -> None:
    plant = Watched().close()
    began = time.process_time()
    plant.advance_to(plant.now_us + 60_000_000)
    v, i, bank = plant.sample(np.array([float(plant.now_us)]))
    spent_s = time.process_time() - began
    # At rest all that flows is what the bleeder takes.
    assert i[0] == pytest.approx(bank[0] / 22e3, rel=1e-6)
    assert v[0] == pytest.approx(float(MODULE.voltage_at(i[0] + v[0] / 1e6)), rel=1e-12)
    assert spent_s < 1.0


def test_an_hour_of_bleeding_is_one_exponential() -> None:
    plant = Plant(MODULE, Circuit(capacitance_f=1.0, bleed_ohm=1000.0, capacitor_start_v=50.0))
    plant.advance_to(3_600_000_000)
    assert plant.capacitor_v == pytest.approx(50.0 * math.exp(-3.6), rel=1e-12)


def test_a_welded_contact_feeds_the_bleed_from_the_source() -> None:
    """H2: the capacitor does not fall, and the bleed resistor carries what the source gives."""
    circuit = Circuit(capacitance_f=2200e-6, capacitor_esr_ohm=0.02, contact_welded=True)
    plant = Plant(MODULE, circuit)
    plant.advance_to(1_000_000)
    v, i, bank = plant.sample(np.array([1e6]))
    assert plant.conducting
    assert plant.bleed_engaged
    assert i[0] == pytest.approx(bank[0] / 100.0, rel=1e-9)
    assert bank[0] == pytest.approx(v[0] - i[0] * circuit.line_ohm, rel=1e-9)
    assert bank[0] > 38.0


def test_an_open_bleed_leaves_the_permanent_bleeder() -> None:
    circuit = Circuit(
        capacitance_f=2200e-6, permanent_bleeder_ohm=22e3, capacitor_start_v=40.0, bleed_open=True
    )
    plant = Plant(MODULE, circuit)
    plant.advance_to(1_000_000)
    assert plant.bleed_engaged
    assert plant.capacitor_v == pytest.approx(40.0 * math.exp(-1.0 / 48.4), rel=1e-12)


def test_reversed_leads_turn_every_sign() -> None:
    usual = Watched().close()
    turned = Watched(
        Circuit(
            capacitance_f=2200e-6,
            capacitor_esr_ohm=0.02,
            permanent_bleeder_ohm=22e3,
            lead_resistance_ohm=0.05,
            leads_reversed=True,
        )
    ).close()
    for plain, mirrored in zip(
        usual.sample_pairs(usual.now_us, 500), turned.sample_pairs(turned.now_us, 500), strict=True
    ):
        np.testing.assert_array_equal(plain, -mirrored)
    assert turned.capacitor_v == -usual.capacitor_v < 0.0


def test_the_past_is_not_made_up() -> None:
    plant = Watched().close()
    plant.advance_to(plant.now_us + 5000)
    with pytest.raises(ValueError, match="is past; virtual time is 25000 us"):
        plant.sample_pairs(21_000, 3)
    with plant.holding():
        plant.advance_to(30_000)
        assert len(plant.sample_pairs(25_000, 3)[0]) == 3
    with pytest.raises(ValueError, match="does not fit into a pair"):
        plant.sample_pairs(30_000, 3, skew_us=5.0)
    assert len(plant.sample(np.empty(0))[0]) == 0
