"""If these fail, a tracer with a dead guard is called proven, or a sound one is not; or a test that
is broken off leaves a capacitor charged.
"""

from __future__ import annotations

from types import SimpleNamespace

import pytest
from proving import Bench, by_result, guards_by
from rig import needs_micropython

from kneewise.emulator.hands import bench_supply
from kneewise.errors import ArchiveError, DeviceFaultError, RefusedError
from kneewise.instrument.hands import Reading, Task
from kneewise.instrument.sweeping import Sweeping
from kneewise.instrument.tracer import Tracer
from kneewise.workshop import steps_supply
from kneewise.workshop.operator import EmulatedOperator
from kneewise.workshop.prooftest import STEPS, UNEXERCISED

IDS = [step.id for step in STEPS]


@pytest.fixture
def bench():
    made = []

    def make(*given, **more):
        made.append(Bench(*given, **more))
        return made[-1]

    yield make
    for one in made:
        one.close()


def passed(test):
    assert by_result(test, "failed") == [], [found.reason for found in test.steps]
    assert test.verdict == "passed"
    assert test.stopped == ""
    assert guards_by(test, "passed") == [n for n in range(1, 22) if n not in UNEXERCISED]
    assert guards_by(test, "not exercised here") == list(UNEXERCISED)
    assert test.left.startswith("safe, contact open, bleed engaged")


@pytest.mark.parametrize(
    "rung", ["in-process", pytest.param("micropython", marks=needs_micropython)]
)
def test_a_sound_tracer_passes(rung, bench):
    one = bench(rung=rung)
    test = one.prove()
    passed(test)
    assert by_result(test, "passed") == IDS
    assert one.hands.done[-1] == Task.DISCONNECT
    assert not one.emulated.board.contact_conducting
    assert abs(one.emulated.board.capacitor_v) < 0.5
    # A6 and A7 on nothing, the sweep, the trip, and the charge in which the power went.
    assert one.closings() == 5


@pytest.mark.parametrize(
    ("changes", "reads"),
    [
        ({"board": {"converter": "spi16"}}, {}),
        ({}, {Reading.SUPPLY_V: 30.0, Reading.SUPPLY_A: 0.3}),
        ({"seed": 5}, {Reading.SUPPLY_V: 10.0, Reading.SUPPLY_A: 2.0}),
        (
            {"load": {"capacitance_of_nominal": 0.8, "bleed_of_nominal": 1.1}},
            {Reading.SUPPLY_V: 30.0},
        ),
        ({"load": {"capacitance_f": 470e-6, "bleed_ohm": 220.0}}, {Reading.SUPPLY_A: 0.3}),
        ({"board": {"adc_noise_codes": 2.0, "voltage_gain_error": 0.01}}, {}),
    ],
    ids=[
        "spi16",
        "slow charge",
        "10 V 2 A",
        "30 V, parts within tolerance",
        "small capacitor",
        "noisy",
    ],
)
def test_other_sound_builds_and_supplies_pass(changes, reads, bench):
    passed(bench(changes, reads=reads).prove())


def test_a_bare_relay_passes_without_the_step_that_it_does_not_have(bench):
    test = bench({"board": {"contact": "relay", "bounce_ms": 3.0}}).prove()
    passed(test)
    assert by_result(test, "not applicable") == ["B5"]


# -- each fault fails exactly the step that proves its guard ------------------------------------


def no_watchdog(emulated):
    emulated.board.watchdog = lambda ms: None


def no_trip(emulated):
    supervise = emulated.board.supervise
    emulated.board.supervise = lambda voltage, current: supervise(4095, 4095)


def twice_the_current(emulated, values):
    emulated.change("source", bench_supply(values["voltage_v"], 2 * values["current_a"]))


def welding(emulated, values):
    emulated.change("source", bench_supply(values["voltage_v"], values["current_a"]))
    emulated.change("weld")


FAULTS = {
    "relay welded": ("B5", [2], "H2", {"changes": {"board": {"relay_welded": True}}}),
    "switch shorted": (
        "B6",
        [2],
        "switch shorted",
        {"changes": {"board": {"switch_shorted": True}}},
    ),
    "contact welded": ("B1", [2], "state: fault", {"instead": {Task.CONNECT_SUPPLY: welding}}),
    "bleed open": ("B6", [1], "H1", {"changes": {"board": {"bleed_open": True}}}),
    "bleed twice": ("B6", [1], "H1", {"changes": {"load": {"bleed_of_nominal": 2.0}}}),
    "bleed half": ("B6", [10], "H10", {"changes": {"load": {"bleed_of_nominal": 0.5}}}),
    "capacitor aged": ("B6", [15], "H15", {"changes": {"load": {"capacitance_of_nominal": 0.6}}}),
    "capacitor too large": (
        "B6",
        [15],
        "H15",
        {"changes": {"load": {"capacitance_of_nominal": 1.4}}},
    ),
    "current stuck": (
        "A2",
        [11],
        "current: noise: 0",
        {"changes": {"board": {"current_stuck_code": 40}}},
    ),
    "voltage stuck": (
        "A2",
        [11],
        "voltage: noise: 0",
        {"changes": {"board": {"voltage_stuck_code": 0}}},
    ),
    "capacitor channel stuck": (
        "A2",
        [11],
        "capacitor: noise: 0",
        {"changes": {"board": {"capacitor_stuck_code": 24}}},
    ),
    "zero off": (
        "A2",
        [11],
        "off its zero",
        {"changes": {"board": {"voltage_offset_codes": 30.0}}},
    ),
    "voltage gain": (
        "B2",
        [4],
        "as the tracer sees it",
        {"changes": {"board": {"voltage_gain_error": 0.06}}},
    ),
    "stop loop stuck closed": ("A3", [12], "once opened: closed", {"undone": (Task.OPEN_LOOP,)}),
    "stop loop stuck open": (
        "A3",
        [12],
        "before: open",
        {"changes": {"board": {"stop_loop_open": True}}},
    ),
    "comparator dead": ("B4", [5], "once swapped: right", {"undone": (Task.SWAP_LEADS,)}),
    "watchdog dead": ("A7", [7, 13], "no answer", {"broken": no_watchdog}),
    "no trip": ("B7", [6], "complete, expected over-current", {"broken": no_trip}),
    "current as not said": (
        "B6",
        [6],
        "current at its beginning",
        {"instead": {Task.CONNECT_SUPPLY: twice_the_current}},
    ),
    "capacitor kept its charge": (
        "B8",
        [21],
        "operator's meter: 15 V",
        {"reads": {Reading.CAPACITOR_V: 15.0}},
    ),
}


@pytest.mark.parametrize(("step", "hazards", "said", "wrong"), FAULTS.values(), ids=FAULTS)
def test_a_fault_fails_the_step_that_proves_its_guard_and_no_other(
    step, hazards, said, wrong, bench
):
    one = bench(**wrong)
    test = one.prove()
    assert by_result(test, "failed") == [step]
    assert guards_by(test, "failed") == hazards
    assert test.verdict == "failed"
    (found,) = [found for found in test.steps if found.result == "failed"]
    assert said in found.reason
    # It stops there, and says of every later step why it was not done.
    assert by_result(test, "not done") == IDS[IDS.index(step) + 1 :]
    assert step in test.stopped
    assert all(found.reason for found in test.steps if found.result != "passed")
    if step.startswith("B"):
        assert one.hands.done[-1] == Task.DISCONNECT


def test_it_is_left_safe_and_a_fault_stays_to_be_seen(bench):
    one = bench({"board": {"switch_shorted": True}})
    test = one.prove()
    assert test.left.startswith("fault, contact open, bleed engaged")
    assert "LIVE: isolate at the disconnector" in test.left
    assert not one.emulated.board.contact_conducting


def test_a_tracer_that_hangs_is_said_to_need_its_power_pulled(bench):
    test = bench(broken=no_watchdog).prove()
    assert "does not answer: pull its power" in test.left


# -- what stops it ------------------------------------------------------------------------------


def interrupting(one, where):
    """An operator who presses Ctrl-C when asked for `where`."""
    operator = EmulatedOperator(one.hands, one.told.append)

    def do(task, **values):
        if task == where:
            raise KeyboardInterrupt
        EmulatedOperator.do(operator, task, **values)

    operator.do = do
    return operator


@pytest.mark.parametrize(("task", "step"), [(Task.OPEN_LOOP, "A3"), (Task.SWAP_LEADS, "B4")])
def test_ctrl_c_stops_at_a_safe_state(task, step, bench):
    one = bench()
    test = one.prove(interrupting(one, task))
    assert test.verdict == "stopped"
    assert test.stopped.startswith(f"in {step},")
    assert test.stopped.endswith("by Ctrl-C")
    assert test.left.startswith("safe, contact open, bleed engaged")
    assert by_result(test, "not done") == IDS[IDS.index(step) :]
    assert one.hands.done[-1] == Task.DISCONNECT


def test_ctrl_c_in_mid_charge_opens_the_contact(bench, monkeypatch):
    one = bench()
    fire = Sweeping.fire

    def interrupted(sweeping, *given):
        if one.emulated.board.capacitor_v or one.tracer.status().source_v > 1:
            one.tracer.connection.session.wait_quiet = interrupt
        fire(sweeping, *given)

    def interrupt(*given):
        raise KeyboardInterrupt

    monkeypatch.setattr(Sweeping, "fire", interrupted)
    test = one.prove()
    assert test.verdict == "stopped"
    assert "by Ctrl-C" in test.stopped
    assert not one.emulated.board.contact_conducting
    assert abs(one.emulated.board.capacitor_v) < 0.5
    assert test.left.startswith("safe")


def test_an_operator_who_does_not_confirm_stops_it_before_anything_is_armed(bench):
    one = bench()
    operator = EmulatedOperator(one.hands, one.told.append)
    operator.confirm = lambda statement: False
    test = one.prove(operator)
    assert test.verdict == "stopped"
    assert "did not confirm" in test.stopped
    assert not one.armed()


def test_power_that_is_never_pulled_stops_it(bench, monkeypatch):
    monkeypatch.setattr(steps_supply, "PULL_S", 3.0)
    test = bench(undone=(Task.PULL_POWER,)).prove()
    assert test.verdict == "stopped"
    assert "was not pulled within 3 s" in test.stopped
    assert guards_by(test, "not done") == [13, 21]


def test_a_source_that_is_still_there_is_refused(bench):
    one = bench(undone=(Task.DISCONNECT,))
    with pytest.raises(RefusedError, match="disconnect the source"):
        one.prove()
    assert one.hands.done == [Task.DISCONNECT] * 3
    assert any("still sees 39" in text for text in one.told)
    assert not one.armed()
    assert one.closings() == 0


def test_a_latched_fault_is_to_be_cleared_first(bench):
    one = bench()
    one.emulated.after_closing(2000, "stop_loop")
    one.tracer.sweep()
    with pytest.raises(DeviceFaultError, match="H12"):
        one.prove()


def test_a_held_sweep_is_to_be_fetched_first(bench):
    one = bench()

    def full(trace):
        raise ArchiveError("storing", found="a full disk", expected="room", next_step="make room")

    with pytest.raises(ArchiveError):
        one.tracer.sweep(keep=full)
    with pytest.raises(RefusedError, match="kneewise sweep"):
        one.prove()


def test_a_recording_cannot_be_proven(bench, tmp_path):
    with Tracer.open("emulator:in-process", record=tmp_path / "session.jsonl") as tracer:
        tracer.rest()
    with (
        Tracer.open(f"replay:{tmp_path / 'session.jsonl'}") as tracer,
        pytest.raises(RefusedError, match="found a recording"),
    ):
        Bench.prove(SimpleNamespace(tracer=tracer, hands=None, told=[]))
