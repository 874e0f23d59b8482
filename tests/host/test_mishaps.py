"""If these fail, what a test lets go wrong in mid-charge happens at another time than it says, and
the latency of an interlock is measured from the wrong moment.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from test_board import NOISELESS, NOON, board, closed, pairs

from kneewise.emulator.board import Board, PowerLost
from kneewise.errors import ScenarioError

CLOSED_US = 20_000  # of virtual time, where `closed` is about to conduct


def at(made: Board, what: str) -> list[tuple[int, int | None]]:
    return [(us, level) for us, name, level in made.record if name == what]


def passing(made: Board, us: int, slice_us: int) -> None:
    for _ in range(us // slice_us):
        made.wait(slice_us)


CASES: dict[str, tuple[str, Any, Callable[[Board], bool]]] = {
    "lid": ("stop_loop", 1, lambda made: not made.contact_conducting and made.bleed_engaged),
    "weld": ("weld", 1, lambda made: made.contact_conducting),
    "switch": ("switch_short", 1, lambda made: made.contact_conducting),
    "bleed open": ("bleed_open", 1, lambda made: made._plant.circuit.bleed_open),
    "bleed short": ("bleed_short", 1, lambda made: made._plant.circuit.bleed_shorted),
    "sun": (
        "source",
        {"irradiance_w_m2": 1300},
        lambda made: made._plant.source.photocurrent_a > 9.2,
    ),
    "stuck": ("voltage_stuck", 7, lambda made: made._converters.stuck == [7, None, None]),
}


@pytest.mark.parametrize("slice_us", [1, 250, 20_000])
@pytest.mark.parametrize(("what", "value", "holds"), CASES.values(), ids=CASES)
def test_it_happens_once_at_its_own_moment_however_time_passes(
    what: str, value: Any, holds: Callable[[Board], bool], slice_us: int
) -> None:
    made = closed()
    made.after_closing(1234, what, value)
    assert not holds(made)
    passing(made, 20_000, 20_000)  # nothing closes, nothing happens
    made.pulse(5000)
    passing(made, 20_000, slice_us)
    assert at(made, f"event:{what}") == [(CLOSED_US + 20_000 + 1234, 1)]
    assert holds(made)
    made.change("stop_loop", 0)
    made.change("weld", 0)
    made.bleed_release(1)
    made.relay(1)
    made.pulse(20_000)
    passing(made, 20_000, 20_000)
    assert [level for _, level in at(made, f"event:{what}")].count(1) == 1


def test_what_happens_is_in_the_record_before_what_comes_of_it() -> None:
    """From here a test takes latencies: to the pin, and to the end of the current."""
    made = closed()
    made.after_closing(3000, "stop_loop")
    made.pulse(5000)
    made.wait(3500)
    made.pulse(0)
    made.wait(100)
    assert [entry for entry in made.record if entry[0] > CLOSED_US] == [
        (CLOSED_US + 3000, "event:stop_loop", 1),
        (CLOSED_US + 3050, "switch_contact", 0),
        (CLOSED_US + 3050, "conducting", 0),
        (CLOSED_US + 3500, "pulse", 0),
    ]
    ((us, broken_a),) = made.hot_openings
    assert us == CLOSED_US + 3050
    assert 8.0 < broken_a < 9.3
    assert made.loop_current_a == 0.0


def test_several_wait_for_the_same_closing_and_come_in_their_order() -> None:
    made = closed()
    made.after_closing(2000, "power_off")
    made.after_closing(1000, "current_stuck", 4095)
    made.after_closing(2000, "weld")
    made.pulse(5000)
    with pytest.raises(PowerLost, match="at 22000 us"):
        made.wait(5000)
    found = [entry[:2] for entry in made.record if entry[1].startswith("event:")]
    assert found == [
        (21_000, "event:current_stuck"),
        (22_000, "event:power_off"),
        (22_000, "event:weld"),
    ]
    made.settle(50_000)
    assert made.contact_conducting
    assert made.bleed_engaged


def test_a_stuck_sensor_spoils_the_pairs_from_its_moment_on() -> None:
    made = closed(NOISELESS)
    made.after_closing(1000, "current_stuck", 0)
    made.capture_start()
    made.pulse(5000)
    made.wait(2000)
    current = pairs(made.capture_take())[:, 1]
    assert np.all(current[:250] > 1500)
    assert np.all(current[250:] == 0)
    made.capture_stop()
    made.change("current_stuck", None)
    assert made.read(1, 1) > 0
    assert [level for _, level in at(made, "event:current_stuck")] == [1, 0]


def test_supervision_sees_another_source_at_its_next_look() -> None:
    made = closed(NOISELESS)
    made.after_closing(1500, "source", {"irradiance_w_m2": 1300})
    made.capture_start()
    made.supervise(4095, 40 + round(10.0 / 0.0052))
    made.pulse(5000)
    made.wait(1999)
    assert made.trips() == 0
    made.wait(1)
    assert made.trips() == 4


def test_what_has_changed_stays_changed_with_the_next() -> None:
    made = board()
    made.change("source", {"irradiance_w_m2": 500.0})
    made.change("source", {"n_ns_vt_v": 2.2})
    source = made._plant.source
    assert (source.photocurrent_a, source.n_ns_vt_v) == (4.6, 2.2)
    open_v = (made.read(0, 4096) / 4096 - 24) * 0.0165
    assert open_v == pytest.approx(float(source.voltage_at(0.0)), abs=0.05)


def test_a_change_is_undone_by_nought() -> None:
    made = closed()
    for what in ("weld", "switch_short", "bleed_open", "bleed_short", "stop_loop", "power_off"):
        made.change(what)
        made.change(what, 0)
    assert made._plant.circuit == NOON.build_circuit()
    assert made.stop_loop_closed() == 1
    made.relay(1)
    made.wait(20_000)
    made.relay(0)
    made.wait(20_000)
    assert at(made, "relay_contact")[-1][1] == 0


@pytest.mark.parametrize(
    ("delay_us", "what", "value", "message"),
    [
        (0, "wled", 1, "nothing is called 'wled'; there are weld, switch_short"),
        (-1, "weld", 1, "-1 us after a closing lies before it"),
        (0, "weld", 2, "weld was given 2; expected 0 or 1"),
        (0, "source", 1300, "source was given 1300; expected a dict of keys of"),
        (0, "voltage_stuck", 4096, "expected a code from 0 to 4095, or None"),
        (0, "link_cut", 1, "this board has no link to cut"),
    ],
)
def test_what_cannot_happen_is_refused_at_once(
    delay_us: int, what: str, value: Any, message: str
) -> None:
    made = board()
    with pytest.raises(ValueError, match=message):
        made.after_closing(delay_us, what, value)
    assert list(made.record) == []


def test_a_source_that_no_scenario_may_have_is_refused_at_once() -> None:
    with pytest.raises(ScenarioError, match=r"source\.irradiance_w_m2 = 3000"):
        board().after_closing(0, "source", {"irradiance_w_m2": 3000})


def test_swapped_leads_turn_the_source_and_leave_the_capacitor_as_it_is() -> None:
    made = board(NOISELESS.varied(load={"capacitor_start_v": 10.0}))
    made.bleed_release(1)
    made.wait(20_000)
    held_v = made.capacitor_v
    assert made.leads_reversed() == 0
    made.change("leads_swapped")
    assert made.leads_reversed() == 1
    assert made.capacitor_v == pytest.approx(held_v)
    assert made.read(0, 64) == 0  # below its zero the channel stands at its rail
    made.change("leads_swapped", 0)
    assert made.leads_reversed() == 0
    assert made.capacitor_v == pytest.approx(held_v, rel=1e-4)
    assert at(made, "event:leads_swapped") == [(20_000, 1), (20_128, 0)]
