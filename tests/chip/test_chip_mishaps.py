"""If these fail, a fault in mid-charge comes to the emulated chip at another time than is written
down, and the latency of an interlock on it is measured from the wrong moment.
"""

import contextlib
from typing import Any

import pytest
from chip import missing
from on_chip import capacitor, chip_for, tracer_on
from test_chip_faults import fire

from kneewise.emulator.chip import ChipTracer
from kneewise.errors import KneewiseError

pytestmark = pytest.mark.skipif(missing() is not None, reason=str(missing()))

AFTER_US = 20_000
SLOW = capacitor(22e-3)  # 150 ms, most of it near Isc
OPENING_US = 50


def at(made: ChipTracer, what: str) -> list[tuple[int, int | None]]:
    return [(us, level) for us, name, level in made.record() if name == what]


def struck(made: ChipTracer, what: str, value: Any = 1, *, whole: bool = True) -> int:
    """Sweep through it, or without waiting for what comes of it; when it came (us)."""
    made.after_closing(AFTER_US, what, value)
    with tracer_on(made) as tracer, contextlib.suppress(KneewiseError):
        if whole:
            tracer.sweep()
        else:
            fire(tracer)
            made.chip.let_pass(300)
    ((us, level),) = at(made, f"event:{what}")
    closed_us = next(us for us, level in at(made, "conducting") if level == 1)
    assert us - closed_us == pytest.approx(AFTER_US, abs=1)
    assert level == 1
    return us


def after(made: ChipTracer, us: int, what: str, level: int | None) -> int:
    """How long after `us` this came first (us)."""
    return next(when for when, found in at(made, what) if when >= us and found == level) - us


def test_an_opened_lid_takes_the_drive_and_is_seen_by_the_firmware() -> None:
    with chip_for(SLOW) as made:
        us = struck(made, "stop_loop")
        assert after(made, us, "conducting", 0) <= OPENING_US
        assert after(made, us, "pulse", 0) < 5000
        (hot,) = made.chip.order("plant")["hot_openings"]
        assert hot[1] == pytest.approx(9.1, abs=0.2)
        made.change("stop_loop", 0)
        with tracer_on(made) as tracer:
            tracer.clear_fault()
            assert tracer.sweep().sound


def test_a_dead_board_lets_go_of_every_pin_and_lives_again() -> None:
    with chip_for(SLOW) as made:
        us = struck(made, "power_off", whole=False)
        nothing = [(what, level) for when, what, level in made.record() if when == us][1:]
        assert nothing == [
            ("relay", None),
            ("bleed_release", None),
            ("zero_input", None),
            ("pulse", None),
        ]
        made.chip.let_pass(1500)
        assert after(made, us, "conducting", 0) <= OPENING_US
        assert after(made, us, "bleed_contact", 1) == pytest.approx(5000, abs=1)
        assert made.record()[-1][0] <= us + 5001
        before_v = made.chip.order("plant")["v_capacitor"]
        made.chip.let_pass(200)
        assert 0.0 < made.chip.order("plant")["v_capacitor"] < before_v
        made.change("power_off", 0)
        with tracer_on(made) as tracer:
            tracer.rest()
            assert tracer.sweep().sound


def test_brighter_light_is_seen_and_ends_the_charge() -> None:
    """23 A, past the board's 20 A."""
    with chip_for(SLOW) as made:
        us = struck(made, "source", {"photocurrent_a": 23.0})
        assert after(made, us, "conducting", 0) < 2000 + OPENING_US
        assert made.chip.order("plant")["hot_openings"][0][1] > 20.0


def test_a_stuck_sensor_is_what_the_firmware_reads() -> None:
    with chip_for(SLOW) as made:
        us = struck(made, "current_stuck", 4095)
        assert after(made, us, "pulse", 0) < 2000
        made.change("current_stuck", None)
        assert at(made, "event:current_stuck")[-1][1] == 0


def test_a_welded_contact_conducts_beyond_every_command() -> None:
    with chip_for(capacitor(2.2e-3)) as made:
        us = struck(made, "weld")
        assert [entry for entry in at(made, "conducting") if entry[0] > us] == []
        assert made.chip.order("plant")["closed"]
        made.change("weld", 0)
        made.chip.let_pass(100)
        assert not made.chip.order("plant")["closed"]


def test_a_cut_link_costs_nothing_but_its_own_time() -> None:
    with chip_for(SLOW) as made:
        made.after_closing(AFTER_US, "link_cut")
        with tracer_on(made) as tracer:
            trace = tracer.sweep()
        assert trace.end_reason == "complete"
        assert len(at(made, "event:link_cut")) == 1
