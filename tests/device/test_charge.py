"""If these fail, a charge wears the contacts, burns the bleed, or goes on when it must end."""

from __future__ import annotations

from itertools import pairwise

import pytest
from charging import ABORT, BEAT, Rig, module
from fake_board import PAIR_US, REFERENCE, FakeBoard

END = {
    "complete": module.COMPLETE,
    "time limit": module.TIME_LIMIT,
    "aborted": module.ABORTED,
    "stop loop": module.STOP_LOOP,
    "over-voltage": module.OVER_VOLTAGE,
    "over-current": module.OVER_CURRENT,
    "host lost": module.HOST_LOST,
    "no current": module.NO_CURRENT,
    "ring overrun": module.RING_OVERRUN,
    "supervision lost": module.SUPERVISION_LOST,
}


def slow() -> FakeBoard:
    """A charge that takes half a minute."""
    board = FakeBoard(capacitance_f=1.0)
    board.source_a = 8.0
    return board


def opens_itself(board: FakeBoard) -> None:
    """A stall of the loop, longer than the wave runs."""
    board.pass_us(REFERENCE["pulse_us"] + 1000)


# name: (end, board, profile's changes, limit, what happens 3 ms after closing)
CASES = {
    "complete": ("complete", FakeBoard, {}, 1000, None),
    "the request's limit": ("time limit", slow, {}, 30, None),
    "the profile's limit": ("time limit", slow, {"closed_limit_ms": 20}, 1000, None),
    "abort": ("aborted", slow, {}, 1000, lambda b: b.incoming.extend(b"x\0" + ABORT)),
    "lid": ("stop loop", slow, {}, 1000, lambda b: setattr(b, "loop_closed", False)),
    "over-voltage": (
        "over-voltage",
        slow,
        {"rated_mv": 30000},
        1000,
        lambda b: setattr(b, "capacitor_v", 31.0),
    ),
    "over-current": ("over-current", slow, {"rated_ma": 7500}, 1000, None),
    "host gone": ("host lost", slow, {"heartbeat_lost_ms": 50}, 1000, None),
    "ring overtaken": ("ring overrun", slow, {}, 1000, lambda b: setattr(b, "overtaken", 4096)),
    "ring stands": (
        "supervision lost",
        slow,
        {},
        1000,
        lambda b: setattr(b, "pairs_stop_at", b.pairs),
    ),
    "supervision stands": (
        "supervision lost",
        slow,
        {},
        1000,
        lambda b: setattr(b, "supervision_stops_us", b.time_us),
    ),
    "loop stalls": ("supervision lost", slow, {}, 1000, opens_itself),
}


@pytest.mark.parametrize("case", CASES)
def test_every_reason_ends_the_charge_and_leaves_the_board_safe(case):
    end, make, changes, limit_ms, action = CASES[case]
    board = make()
    rig = Rig(board, **changes)
    if action is not None:
        board.after_closing(3000, lambda: action(board))
    result = rig.run(limit_ms)
    assert result.end_reason == END[end]
    assert not board.relay_closed
    assert board.bleed_engaged
    assert not board.conducting
    assert not board.quiet
    assert board.pairs is None
    assert board.supervised_us is None
    assert (rig.outputs.contact_closed, rig.outputs.bleed_engaged) == (False, True)
    assert board.closings == 1


def test_a_dark_source_is_given_up():
    board = FakeBoard()
    board.source_a = 0.0
    rig = Rig(board)
    assert rig.run().end_reason == module.NO_CURRENT
    closed_us = board.when("pulse 0")[0] - board.when("pulse 5000")[0]
    assert 100_000 <= closed_us <= 101_000
    assert rig.capture.pairs() == 0


def test_contact_and_bleed_take_turns_with_their_dead_times():
    board = FakeBoard()
    result = Rig(board).run()
    (released,), (engaged,) = board.when("bleed False"), board.when("bleed True")
    (closed,), (opened,) = board.when("relay True"), board.when("relay False")
    first, stopped = board.when("pulse 5000")[0], board.when("pulse 0")[0]
    assert released < closed < first < stopped < opened < engaged
    dead_us = 1000 * REFERENCE["dead_time_ms"]
    assert closed - released >= dead_us + 1000 * REFERENCE["bleed_operate_ms"]
    assert engaged - opened >= dead_us + 1000 * REFERENCE["relay_release_ms"]
    assert first - closed >= 1000 * REFERENCE["relay_operate_ms"]
    assert result.opened_us >= opened
    # The readings before closing are taken with everything still in the safe state.
    assert max(board.when("read 0") + board.when("read 1")) <= released


@pytest.mark.clause("W6")
def test_nothing_is_sent_and_no_channel_is_read_in_the_capture():
    board = FakeBoard()
    Rig(board).run()
    names = [name for name, _, _ in board.calls]
    inside = names[names.index("capture_start") : names.index("capture_stop")]
    assert "read" not in inside
    # A time since boot is an object of its own from 18 minutes on, and nothing collects here.
    assert "now_us" not in inside


def test_each_slice_renews_the_wave_and_feeds_the_watchdog():
    board = FakeBoard()
    rig = Rig(board)
    rig.run()
    pulses = rig.pulses()
    steps = {b - a for a, b in pairwise(pulses)}
    # No time passes on this board between two slices without a wait, as after a merge.
    assert steps <= {0, module.SLICE_US}
    assert len(pulses) >= 10
    assert len(board.when("watchdog 2000")) >= len(pulses) - 1
    assert board.closings == 1


def test_a_ring_that_stands_earns_no_further_pulse():
    board = slow()
    rig = Rig(board)
    board.after_closing(3000, lambda: setattr(board, "pairs_stop_at", board.pairs))
    rig.run()
    stopped_us = rig.pulses()[0] + 3000
    assert rig.pulses()[-1] <= stopped_us + module.SLICE_US


def test_a_supervision_that_stands_earns_pulses_for_two_milliseconds_more_at_most():
    board = slow()
    rig = Rig(board)
    board.after_closing(7000, lambda: setattr(board, "supervision_stops_us", board.time_us))
    rig.run()
    stopped_us = rig.pulses()[0] + 7000
    assert rig.pulses()[-1] <= stopped_us + 1000 * module.FIRST_MS
    assert board.when("pulse 0")[0] <= stopped_us + 1000 * module.FIRST_MS + module.SLICE_US


def test_a_supervision_that_never_starts_ends_the_charge():
    board = slow()
    board.supervision_stops_us = 0
    rig = Rig(board)
    assert rig.run().end_reason == module.SUPERVISION_LOST
    assert rig.pulses()[-1] - rig.pulses()[0] <= 1000 * module.FIRST_MS


@pytest.mark.parametrize("stall_us", [4901, 5000, 6000, 14_000])
def test_a_contact_that_opened_by_itself_is_not_closed_again(stall_us):
    board = slow()
    rig = Rig(board)
    board.after_closing(3000, lambda: board.pass_us(stall_us))
    assert rig.run().end_reason == module.SUPERVISION_LOST
    assert board.closings == 1


@pytest.mark.parametrize("stall_us", [500, 2000, 3900])
def test_a_stall_shorter_than_the_pulse_does_no_harm(stall_us):
    board = FakeBoard()
    rig = Rig(board)
    board.after_closing(3000, lambda: board.pass_us(stall_us))
    assert rig.run().end_reason == module.COMPLETE
    assert board.closings == 1


@pytest.mark.parametrize("after_us", range(0, 2000, 130))
@pytest.mark.clause("W6", "A1")
def test_an_abort_opens_the_contact_within_two_slices(after_us):
    board = slow()
    rig = Rig(board)
    board.after_closing(after_us, lambda: board.incoming.extend(b"\0" + ABORT))
    assert rig.run().end_reason == module.ABORTED
    assert board.when("pulse 0")[0] - rig.pulses()[0] <= after_us + 2 * module.SLICE_US


@pytest.mark.parametrize("before", ["right behind the fire", "while the relay closes"])
def test_an_abort_before_the_closing_keeps_the_contact_open(before):
    board = FakeBoard()
    rig = Rig(board)
    if before == "right behind the fire":
        rig.ear.expect(ABORT, ABORT)
    else:
        board.at(30_000, lambda: board.incoming.extend(ABORT))
    assert rig.run().end_reason == module.ABORTED
    assert rig.pulses() == []
    assert board.closings == 0
    assert board.bleed_engaged


@pytest.mark.clause("W7")
def test_a_host_that_beats_may_watch_a_long_charge():
    board = slow()
    rig = Rig(board, heartbeat_lost_ms=50)
    for beat in range(20):
        board.at(40_000 * beat, lambda: board.incoming.extend(BEAT))
    assert rig.run().end_reason == module.HOST_LOST
    lost_us = board.when("pulse 0")[0] - (1_000_000 + 40_000 * 19)
    assert 50_000 <= lost_us <= 51_000


def test_a_complete_charge_holds_its_whole_curve():
    board = FakeBoard()
    rig = Rig(board)
    result = rig.run()
    assert result.end_reason == module.COMPLETE
    assert board.capacitor_v > 0.994 * board.source_v
    closed_us = board.when("pulse 0")[0] - rig.pulses()[0]
    assert rig.capture.pairs() == pytest.approx(closed_us / PAIR_US, abs=2)
    assert result.voltage_sum == 2048 * (24 + round(40 / 0.0165))
    assert result.current_sum == 2048 * 40
    assert result.conversions == 2048
    assert result.capture_us == board.when("capture_start")[0]
    assert not result.conversions_lost


def test_a_dropped_conversion_is_told():
    board = FakeBoard()
    board.conversions_lost = True
    assert Rig(board).run().conversions_lost


def test_supervision_is_given_the_ratings_as_codes():
    board = FakeBoard()
    Rig(board, rated_mv=50000, rated_ma=15000).run()
    (values,) = [values for name, values, _ in board.calls if name == "supervise"]
    assert values == (24 + 50000 * 10**6 // 16500000, 40 + 15000 * 10**6 // 5200000)


def test_a_charge_can_follow_a_charge():
    board = FakeBoard()
    rig = Rig(board)
    pairs = []
    for _ in range(2):
        rig.ear.expect(ABORT)
        assert rig.run().end_reason == module.COMPLETE
        pairs.append(rig.capture.pairs())
        board.pass_us(1_000_000)
    assert pairs[0] == pytest.approx(pairs[1], abs=130)
