"""If these fail, the tracer takes a way between its states that nobody has thought through."""

from __future__ import annotations

from collections.abc import Callable

import pytest
from fake_board import FakeBoard, profile

from kneewise.emulator.firmware import firmware_module

module = firmware_module("tracer.sequencer")
Logbook = firmware_module("tracer.logbook").Logbook
STATES = (module.SAFE, module.ARMED, module.CHARGING, module.BLEEDING, module.FAULT)
NAMES = ("safe", "armed", "charging", "bleeding", "fault")
EVENTS = ("ARM", "DISARM", "FIRE", "OPENED", "CHARGED", "BLED", "FAULT", "CLEAR")
# From: what may happen there, and where it leads. All else is refused.
WAYS = {
    "safe": {"ARM": "armed", "CHARGED": "bleeding", "FAULT": "fault"},
    "armed": {"DISARM": "safe", "FIRE": "charging", "FAULT": "fault"},
    "charging": {"OPENED": "bleeding", "FAULT": "fault"},
    "bleeding": {"BLED": "safe", "FAULT": "fault"},
    "fault": {"FAULT": "fault", "CLEAR": "bleeding"},
}
LID = (12, 0, 0, 0)


def made(board: FakeBoard, state: str = "safe"):
    sequencer = module.Sequencer(board, profile(), Logbook(None))
    sequencer.state = STATES[NAMES.index(state)]
    board.pass_us(4_000_000)  # its bleed resistor is cool, as far as anyone can know
    sequencer.readings()
    return sequencer


def name(sequencer) -> str:
    return NAMES[STATES.index(sequencer.state)]


def run(sequencer, board: FakeBoard, ms: int, until: Callable[[], bool] = lambda: False) -> int:
    """Turns of the loop for so long; the time taken in ms."""
    start = board.time_us
    while board.time_us - start < 1000 * ms and not until():
        sequencer.tick()
        sequencer.pause()
    return (board.time_us - start) // 1000


@pytest.mark.parametrize("event", EVENTS)
@pytest.mark.parametrize("state", NAMES)
def test_only_the_ways_of_the_table_are_taken(board, state, event):
    sequencer = made(board, state)
    sequencer.token = 99
    number = getattr(module, "EV_" + event)
    if event not in WAYS[state]:
        with pytest.raises(ValueError, match="no transition"):
            sequencer.event(number)
        assert name(sequencer) == state
        return
    sequencer.event(number)
    assert name(sequencer) == WAYS[state][event]
    assert sequencer.token == (99 if WAYS[state][event] == "armed" else 0)
    assert board.watchdog_ms == (0 if WAYS[state][event] == "safe" else module.WATCHDOG_MS)


def test_the_watchdog_is_fed_in_every_state_but_safe(board):
    for state in NAMES:
        sequencer = made(board, state)
        sequencer.armed_until_us = board.time_us + 10**6
        board.capacitor_v = 30.0 if state == "bleeding" else 0.0
        board.watchdog_ms = 0
        sequencer.tick()
        assert board.watchdog_ms == (0 if state == "safe" else module.WATCHDOG_MS), state


def test_a_tracer_that_starts_with_a_charged_capacitor_bleeds_first(board):
    board.capacitor_v = 39.0
    sequencer = module.Sequencer(board, profile(), Logbook(None))
    assert name(sequencer) == "bleeding"
    assert (board.relay_closed, board.bleed_engaged) == (False, True)
    took_ms = run(sequencer, board, 1000, lambda: name(sequencer) == "safe")
    assert board.capacitor_v <= 0.21
    assert 100 <= took_ms <= 140
    assert sequencer.residual[0] / sequencer.residual[1] <= 24 + 13


def test_without_a_profile_nothing_can_be_armed(board):
    sequencer = module.Sequencer(board, None, Logbook(None))
    assert name(sequencer) == "safe"
    sequencer.tick()
    assert sequencer.arm(5, sequencer.readings(True)) == (14, 0, 0, 0)
    assert name(sequencer) == "safe"
    assert board.names()[0] == "safe"


def test_arming_keeps_the_token_for_its_life(board):
    sequencer = made(board)
    assert sequencer.arm(77, sequencer.readings(True)) is None
    assert (name(sequencer), sequencer.token) == ("armed", 77)
    run(sequencer, board, 1990)
    assert (name(sequencer), sequencer.token) == ("armed", 77)
    run(sequencer, board, 20)
    assert (name(sequencer), sequencer.token) == ("safe", 0)
    assert board.watchdog_ms == 0


def test_a_guard_that_objects_leaves_no_token(board):
    sequencer = made(board)
    board.loop_closed = False
    assert sequencer.arm(77, sequencer.readings(True)) == LID
    assert (name(sequencer), sequencer.token) == ("safe", 0)


def test_readings_are_of_this_moment(board):
    sequencer = made(board)
    board.source_v, board.capacitor_v, board.reversed = 33.0, 0.165, True
    found = sequencer.readings()
    assert (found.source_mv, found.capacitor_mv) == (33000, 165)
    assert found.leads_reversed
    assert not found.confirmed


def test_disarming_what_is_not_armed_does_nothing(board):
    for state in NAMES:
        sequencer = made(board, state)
        sequencer.disarm()
        assert name(sequencer) == ("safe" if state == "armed" else state)


def test_charge_that_creeps_back_is_bled_again(board):
    sequencer = made(board)
    board.capacitor_v = 0.35
    run(sequencer, board, 150)
    assert name(sequencer) == "safe"
    board.capacitor_v = 0.5
    board.bleed_broken = True
    run(sequencer, board, 110)
    assert name(sequencer) == "bleeding"
    board.bleed_broken = False
    run(sequencer, board, 300, lambda: name(sequencer) == "safe")
    assert name(sequencer) == "safe"


# -- what can go wrong with the bleed ------------------------------------------------------


def charged(board: FakeBoard, sequencer) -> None:
    """As a charge leaves it: capacitor full, contact open."""
    sequencer.state = module.CHARGING
    board.capacitor_v = board.source_v


def test_a_welded_contact_is_found_and_the_bleed_taken_off(board):
    sequencer = made(board)
    charged(board, sequencer)
    board.welded = True
    sequencer.event(module.EV_OPENED)
    took_ms = run(sequencer, board, 5000, lambda: name(sequencer) == "fault")
    assert sequencer.finding[0] == 2
    assert not board.relay_closed
    assert took_ms <= 60
    # 16 W into a resistor that stands 10 W for ever, and 40 J at once.
    assert board.bleed_engaged
    took_ms += run(sequencer, board, 5000, lambda: not board.bleed_engaged)
    assert 2300 <= took_ms <= 2500 + 110
    assert not sequencer.bleed_engaged
    run(sequencer, board, 5000)
    assert not board.bleed_engaged


def test_a_bleed_that_is_too_slow_is_told_and_goes_on(board):
    sequencer = made(board)
    charged(board, sequencer)
    board.bleed_ohm = 4000.0
    sequencer.event(module.EV_OPENED)
    run(sequencer, board, 5000, lambda: name(sequencer) == "fault")
    assert sequencer.finding[0] == 1
    assert sequencer.finding[1] > 1000
    assert sequencer.finding[2] in (199, 200)
    assert board.bleed_engaged
    assert sequencer.bleed_engaged


@pytest.mark.parametrize("finding", [LID, (4, 60000, 60000, 1), (6, 20000, 20000, 2), (7, 0, 0, 3)])
def test_a_contact_that_welds_in_the_charge_that_ended_in_a_fault_is_found(board, finding):
    sequencer = made(board)
    charged(board, sequencer)
    board.welded = True
    sequencer.fault(finding)
    assert sequencer.finding == finding
    assert board.bleed_engaged
    run(sequencer, board, 5000, lambda: sequencer.finding[0] == 2)
    assert sequencer.finding[0] == 2
    run(sequencer, board, 5000)
    assert not board.bleed_engaged


def test_after_a_fault_the_capacitor_is_bled_watched_and_told(board):
    sequencer = made(board)
    charged(board, sequencer)
    sequencer.fault(LID)
    assert sequencer.residual[0] / sequencer.residual[1] > 2000
    run(sequencer, board, 5000)
    assert (name(sequencer), sequencer.finding) == ("fault", LID)
    assert sequencer.residual[0] / sequencer.residual[1] < 30
    sequencer.clear()
    assert sequencer.finding == module.NO_FINDING
    run(sequencer, board, 500)
    assert name(sequencer) == "safe"


def test_a_bleed_lost_after_another_fault_is_told(board):
    sequencer = made(board)
    charged(board, sequencer)
    board.bleed_ohm = 4000.0
    sequencer.fault(LID)
    run(sequencer, board, 5000)
    assert sequencer.finding[0] == 1
    assert board.bleed_engaged


def test_clearing_looks_anew_and_latches_what_is_still_wrong(board):
    sequencer = made(board)
    charged(board, sequencer)
    board.welded = True
    sequencer.event(module.EV_OPENED)
    run(sequencer, board, 5000, lambda: name(sequencer) == "fault")
    assert sequencer.clear() is None
    assert name(sequencer) == "bleeding"
    run(sequencer, board, 5000, lambda: name(sequencer) == "fault")
    assert (name(sequencer), sequencer.finding[0]) == ("fault", 2)
    board.welded = False
    sequencer.clear()
    run(sequencer, board, 5000, lambda: name(sequencer) == "safe")
    assert name(sequencer) == "safe"


def test_a_fault_is_not_overwritten_by_time(board):
    sequencer = made(board)
    sequencer.fault((4, 61000, 60000, 1))
    run(sequencer, board, 3000)
    assert (name(sequencer), sequencer.finding) == ("fault", (4, 61000, 60000, 1))


def test_only_bleeding_may_jump_over_time(board):
    for state in NAMES:
        sequencer = made(board, state)
        waits = []
        board.bleed_wait = lambda ms, waits=waits: waits.append(("bleed", ms))
        board.link_wait = lambda ms, waits=waits: waits.append(("link", ms))
        sequencer.pause()
        assert waits == [("bleed" if state == "bleeding" else "link", 10)]
