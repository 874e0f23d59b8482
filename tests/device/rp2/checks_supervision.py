"""Checks of the 1 kHz visit: its count, what it trips on, what it leaves alone."""

from checks_converter import capture
from rp2040_model import REVERSED, STOP_LOOP

RAIL = 4095
TRIP_STOP_LOOP, TRIP_OVER_VOLTAGE, TRIP_OVER_CURRENT = 1, 2, 4


class Codes:
    """What the converter sees; to be changed while it runs."""

    def __init__(self, board):
        self.codes = [1000, 2000, 3000]
        board.chip.adc.source = lambda channel, ns, before: self.codes[channel]


def _closed(new):
    board = new()
    board.chip.pins.drive_from_outside(STOP_LOOP, 1)
    return board


def ticks_are_milliseconds(new):
    board = _closed(new)
    for _ in range(2):
        board.hal.supervise(RAIL, RAIL, False)
        assert board.hal.supervision_ticks() == 0
        board.pass_us(10_500)
        assert board.hal.supervision_ticks() == 10
        assert board.hal.trips() == 0
    assert board.module("ring_rp2").timer.hard is True, "a soft callback waits for the interpreter"
    board.hal.supervise_end()
    board.pass_us(5000)
    assert board.hal.supervision_ticks() == 10
    assert len(board.chip.clock.alarms) == 0


def open_stop_loop_trips(new):
    """A broken wire, which nothing drives, reads as open; what tripped stays told."""
    for level in (0, None):
        board = _closed(new)
        board.chip.pins.drive_from_outside(REVERSED, level)  # the pin beside it says nothing here
        board.hal.supervise(RAIL, RAIL, False)
        assert board.hal.stop_loop_closed()
        board.pass_us(3200)
        assert board.hal.trips() == 0
        board.chip.pins.drive_from_outside(STOP_LOOP, level)
        assert not board.hal.stop_loop_closed()
        board.pass_us(1000)
        assert board.hal.trips() == TRIP_STOP_LOOP
        board.chip.pins.drive_from_outside(STOP_LOOP, 1)
        board.pass_us(2000)
        assert board.hal.trips() == TRIP_STOP_LOOP
        board.hal.supervise(RAIL, RAIL, False)
        board.pass_us(2000)
        assert board.hal.trips() == 0


def broken_wire_reads_reversed(new):
    board = _closed(new)
    assert board.hal.leads_reversed(), "a broken wire hides reversed leads"
    board.chip.pins.drive_from_outside(REVERSED, 0)
    board.pass_us(1)
    assert not board.hal.leads_reversed()


def _trips_at(new, channel, bit, after_us):
    board = _closed(new)
    seen = Codes(board)
    limits = [RAIL, RAIL]
    limits[channel] = 3000
    board.hal.capture_start()
    board.hal.supervise(*limits, False)
    board.pass_us(after_us)
    seen.codes[channel] = 2999
    board.pass_us(2000)
    assert board.hal.trips() == 0, "a trip below the limit"
    seen.codes[channel] = 3000
    board.pass_us(1100)
    assert board.hal.trips() == bit, "no trip at the limit, or another"
    seen.codes[channel] = 0
    board.pass_us(2000)
    assert board.hal.trips() == bit, "a trip was forgotten"
    board.hal.capture_stop()
    board.hal.supervise_end()


def newest_pair_trips(new):
    """At the limit, in the ring's first round and in its second."""
    for channel, bit in ((0, TRIP_OVER_VOLTAGE), (1, TRIP_OVER_CURRENT)):
        for after_us in (1500, 15_300, 18_500, 25_000):
            _trips_at(new, channel, bit, after_us)


def pairs_of_before_do_not_trip(new):
    """Neither with no capture at all, nor after one."""
    board = _closed(new)
    seen = Codes(board)
    board.hal.supervise(500, 500, False)
    board.pass_us(3000)
    assert board.hal.trips() == 0
    seen.codes[0] = seen.codes[1] = 4000
    board.hal.supervise_end()
    capture(board, 1000)
    board.hal.supervise(500, 500, False)
    board.pass_us(3000)
    assert board.hal.trips() == 0
