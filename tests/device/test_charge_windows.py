"""If these fail, a zero is measured at the source, a bouncing contact spoils a curve's beginning,
or a raw window holds other pairs than the ones asked for."""

from __future__ import annotations

from array import array
from itertools import pairwise
from typing import Any

import pytest
from charging import ABORT, FINE, Rig, module
from fake_board import A_ZERO, PAIR_US, REFERENCE, V_ZERO, FakeBoard

READ = module.READ_CONVERSIONS


class Logged(FakeBoard):
    """Keeps every pair, and opens the contact between the times of `open_us` after it closes."""

    def __init__(self, *open_us: tuple[int, int], **more: Any) -> None:
        super().__init__(**more)
        self.words = array("I")
        self.closed_us: int | None = None
        self._open_us = open_us

    @property
    def conducting(self) -> bool:
        if not super().conducting:
            return False
        if self.closed_us is None:
            self.closed_us = self.time_us
        since = self.time_us - self.closed_us
        return not any(start <= since < end for start, end in self._open_us)

    def pass_us(self, us: int) -> None:
        for _ in range(us // 100):
            super().pass_us(100)
        super().pass_us(us % 100)

    def _convert(self, us: int, *curve: float) -> None:
        before = self.pairs or 0
        super()._convert(us, *curve)
        for number in range(before, self.pairs or 0):
            self.words.append(self.ring[number % self.RING_PAIRS])


# -- the zero of the voltage channel -------------------------------------------------------


@pytest.mark.clause("K3")
def test_the_zero_is_read_at_the_zero_and_everything_else_at_the_source():
    board = FakeBoard()
    result = Rig(board).run()
    (on,), offs = board.when("zero_input True"), board.when("zero_input False")
    (released,) = board.when("bleed False")
    _, first, second = board.when("read 0")
    (current,) = board.when("read 1")
    assert on + module.ZERO_SETTLE_US <= first <= offs[0]
    assert offs[0] + module.ZERO_SETTLE_US <= second <= current <= released
    assert (result.voltage_zero_sum, result.zero_conversions) == (READ * V_ZERO, READ)
    assert result.voltage_sum == READ * (V_ZERO + round(40 / 0.0165))
    assert not board.voltage_at_zero


@pytest.mark.clause("K3")
def test_a_board_without_that_switch_reads_no_zero():
    board = FakeBoard()
    result = Rig(board, zero_switch=0).run()
    assert not board.when("zero_input True")
    assert (result.voltage_zero_sum, result.zero_conversions) == (0, 0)
    assert len(board.when("read 0")) == 2


def test_ctrl_c_at_the_zero_brings_the_channel_back_to_the_source():
    board = FakeBoard()
    rig = Rig(board)
    read = board.read

    def interrupted(channel: int, count: int) -> int:
        if board.voltage_at_zero:
            raise KeyboardInterrupt
        return read(channel, count)

    board.read = interrupted  # type: ignore[method-assign]
    assert rig.run().end_reason == module.INTERRUPTED
    assert not board.voltage_at_zero
    assert board.closings == 0
    assert board.bleed_engaged


# -- bounce --------------------------------------------------------------------------------


@pytest.mark.clause("K4")
def test_a_curve_begins_behind_the_last_closing():
    board = Logged((300, 500), (900, 1000))
    rig = Rig(board, bounce_ms=5)
    assert rig.run().end_reason == module.COMPLETE
    assert rig.capture.bounces == 2
    closed = 1000 // PAIR_US
    assert closed <= rig.capture.skipped <= closed + 4
    assert rig.capture.pairs() + rig.capture.skipped == pytest.approx(len(board.words), abs=2)


@pytest.mark.clause("K4")
def test_without_a_bounce_time_the_first_closing_counts():
    board = Logged((300, 500))
    rig = Rig(board)
    assert REFERENCE["bounce_ms"] == 0
    rig.run()
    assert rig.capture.bounces == 0
    assert rig.capture.skipped <= 2


def test_an_opening_after_the_bounce_time_is_part_of_the_curve():
    board = Logged((1500, 1700))
    rig = Rig(board, bounce_ms=1)
    rig.run()
    assert (rig.capture.bounces, rig.capture.skipped <= 2) == (0, True)


def test_a_contact_that_bounces_for_good_has_no_current():
    board = Logged((300, 10**9))
    rig = Rig(board, bounce_ms=5)
    assert rig.run().end_reason == module.NO_CURRENT
    assert (rig.capture.bounces, rig.capture.pairs()) == (1, 0)
    assert not board.relay_closed
    assert board.bleed_engaged


# -- raw pairs -----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("from_us", "room"), [(0, 400), (1000, 500), (3003, 700), (0, 9000), (60_000_000, 50)]
)
@pytest.mark.parametrize("bounces", [(), ((300, 500),)])
@pytest.mark.clause("K6")
def test_the_pairs_of_the_window_are_those_of_the_converters(from_us, room, bounces):
    board = Logged(*bounces, capacitance_f=400e-6)
    rig = Rig(board, bounce_ms=2)
    raw = bytearray(4 * room)
    rig.capture.finish(rig.run(raw=raw, raw_from_us=from_us).pairs_written)
    assert rig.capture.bounces == len(bounces)
    start = rig.capture.skipped + from_us // PAIR_US
    found = array("I", bytes(raw))[: rig.capture.raw_pairs()]
    assert found == board.words[start : start + room][: len(found)]
    assert len(found) == min(room, max(rig.capture.pairs() - from_us // PAIR_US, 0))


def test_a_window_of_one_charge_is_not_written_by_the_next():
    board = FakeBoard()
    rig = Rig(board)
    raw = bytearray(400)
    rig.run(raw=raw)
    kept = bytes(raw)
    board.pass_us(1_000_000)
    rig.ear.expect(ABORT)
    rig.run()
    assert (bytes(raw), rig.capture.raw_pairs()) == (kept, 0)


# -- converters of 16 bits -----------------------------------------------------------------


@pytest.mark.parametrize("pair_us", [2, 4, 10])
def test_a_charge_with_fine_codes_holds_its_whole_curve(pair_us):
    board = FakeBoard()
    rig = Rig(board, **FINE, pair_us=pair_us)
    result = rig.run()
    assert result.end_reason == module.COMPLETE
    assert result.current_sum == READ * 16 * A_ZERO
    assert result.voltage_zero_sum == READ * 16 * V_ZERO
    rig.capture.finish(result.pairs_written)
    closed_us = board.when("pulse 0")[0] - rig.pulses()[0]
    assert rig.capture.pairs() == pytest.approx(closed_us / pair_us, abs=2)
    assert board.capacitor_v > 0.994 * board.source_v
    steps = {b - a for a, b in pairwise(rig.pulses())}
    assert steps <= {0, module.SLICE_US}


@pytest.mark.parametrize(
    ("changes", "action", "end"),
    [
        ({"rated_ma": 7500}, None, module.OVER_CURRENT),
        ({"rated_mv": 30000}, 31.0, module.OVER_VOLTAGE),
    ],
)
def test_trips_of_fine_codes_end_the_charge(changes, action, end):
    board = FakeBoard(capacitance_f=1.0)
    board.source_a = 8.0
    rig = Rig(board, **FINE, **changes)
    if action is not None:
        board.after_closing(3000, lambda: setattr(board, "capacitor_v", action))
    assert rig.run().end_reason == end


@pytest.mark.parametrize("light_a", [0.35, 1.0, 9.0])
def test_conduction_is_found_alike_with_coarse_and_fine_codes(light_a):
    for fine in ({}, FINE):
        board = Logged((0, 2000))
        board.source_a = light_a
        rig = Rig(board, **fine)
        assert rig.run().end_reason == module.COMPLETE
        assert rig.capture.skipped == pytest.approx(2000 / PAIR_US, abs=4)


# -- what is done while the relay lets go --------------------------------------------------


class Meanwhile:
    """Work of so many steps, each taking its time."""

    def __init__(self, board: FakeBoard, steps: int, step_us: int) -> None:
        self.board, self.left, self.step_us = board, steps, step_us
        self.results: list[Any] = []
        self.times: list[int] = []

    def begin(self, result: Any) -> None:
        self.results.append(result)

    def step(self) -> bool:
        assert not self.board.relay_closed
        assert not self.board.bleed_engaged
        self.times.append(self.board.time_us)
        self.board.pass_us(self.step_us)
        self.left -= 1
        return self.left == 0


@pytest.mark.parametrize(
    ("steps", "step_us"), [(1, 0), (3, 1000), (10**9, 900), (10**9, 7000), (2, 90_000)]
)
def test_work_meanwhile_never_shortens_the_dead_time(steps, step_us):
    board = FakeBoard()
    rig = Rig(board)
    meanwhile = Meanwhile(board, steps, step_us)
    result = rig.run(meanwhile=meanwhile)
    assert meanwhile.results == [result]
    (opened,), (engaged,) = board.when("relay False"), board.when("bleed True")
    wait_us = 1000 * (REFERENCE["relay_release_ms"] + REFERENCE["dead_time_ms"])
    assert wait_us <= engaged - opened <= wait_us + max(step_us - module.STEP_US, 0)
    assert opened <= meanwhile.times[0]
    assert meanwhile.times[-1] < opened + wait_us


def test_without_work_the_dead_time_is_waited_out():
    board = FakeBoard()
    Rig(board).run()
    (opened,), (engaged,) = board.when("relay False"), board.when("bleed True")
    assert engaged - opened == 1000 * (REFERENCE["relay_release_ms"] + REFERENCE["dead_time_ms"])
