"""Checks of `pulse` and the visit, in whatever order the call and the interrupt come: after a trip
no call brings the wave back, unless a trip is not to end it.
"""

from checks_pulse import FUNCTION_PIO0, FUNCTION_SIO, is_low
from checks_supervision import (
    RAIL,
    TRIP_OVER_CURRENT,
    TRIP_OVER_VOLTAGE,
    TRIP_STOP_LOOP,
    Codes,
)
from checks_trips import closed, rises
from fake_machine import INTERRUPT_NS
from rp2040_model import PULSE, STOP_LOOP


class Visits:
    """Interrupts that fall due as the accesses of these numbers are about to be made, or after all
    of them; they wait while interrupts are off. The loop is open from the first one on.
    """

    def __init__(self, board, places):
        self.board = board
        self.clock = board.chip.clock
        self.places = list(places)
        self.number = 0
        self.due_ns = 0
        self.ended_ns = None  # the first

    def during(self, call):
        self.board.chip.bus.watcher = self.access
        call()
        self.board.chip.bus.watcher = None
        while self.places:
            self._come()

    def access(self):
        if self.clock.in_interrupt:
            return
        while self.number in self.places:
            self._come()
        self.number += 1

    def _come(self):
        self.places.pop(0)
        self.due_ns = self.clock.now_ns
        self.clock.alarms.append(self)
        self.clock.spend(0)

    def interrupt(self):
        self.clock.alarms.remove(self)
        self.board.chip.pins.drive_from_outside(STOP_LOOP, 0)
        self.clock.spend(INTERRUPT_NS)
        ring = self.board.module("ring_rp2")
        ring.visit(ring.timer)
        if self.ended_ns is None:
            self.ended_ns = self.clock.now_ns


def _again(board, breaks, running, phase_us=0):
    """The loop is closed, the supervision has just begun, the wave runs or does not."""
    hal = board.hal
    hal.supervise_end()
    board.chip.pins.drive_from_outside(STOP_LOOP, 1)
    hal.pulse(0)
    board.pass_us(1)
    hal.supervise(RAIL, RAIL, breaks)
    if running:
        hal.pulse(15_000)
    board.pass_us(50 + phase_us)
    board.chip.pins.edges = []
    board.chip.pins.chosen = []


def _accesses(board, running):
    """Of `pulse`, with no interrupt: how many."""
    _again(board, True, running)
    counted = Visits(board, ())
    counted.during(lambda: board.hal.pulse(5000))
    return counted.number


MORE = 8  # accesses, where the pulse is stopped again


def _orders(count, twice):
    for first in range(count + MORE):
        yield (first,)
        if twice:
            for second in range(first, count + MORE):
                yield (first, second)


def _stays_at_rest(board, since_ns):
    """No rise, and the pin is not given to PIO, whatever is called from now on."""
    assert is_low(board)
    for us in (None, 1000, 0, 19_000):
        if us is not None:
            board.hal.pulse(us)
        board.pass_us(300)
        assert rises(board, since_ns) == [], "the wave came back"
        assert board.chip.pins.function[PULSE] == FUNCTION_SIO
        assert not board.chip.pios[0].machines[0].enabled
        chosen = [f for ns, pin, f in board.chip.pins.chosen if pin == PULSE and ns > since_ns]
        assert FUNCTION_PIO0 not in chosen, "PIO was given the pin again"


def no_pulse_after_a_trip(new):
    """One visit or two, before, between any two accesses of, and after the call: once the first
    visit has ended the wave, it does not rise again, not for a moment.
    """
    board = closed(new())
    for running in (False, True):
        count = _accesses(board, running)
        assert count >= 5
        for us in (5000, 0):
            for places in _orders(count, us > 0):
                _again(board, True, running, places[0] * 3)
                visits = Visits(board, places)
                visits.during(lambda us=us: board.hal.pulse(us))
                assert board.chip.clock.interrupts_on
                assert board.hal.trips() == TRIP_STOP_LOOP, places
                _stays_at_rest(board, visits.ended_ns)


def no_pulse_after_any_trip(new):
    """Of the stop loop, of the voltage, of the current."""
    for trip in (TRIP_STOP_LOOP, TRIP_OVER_VOLTAGE, TRIP_OVER_CURRENT):
        board = closed(new())
        seen = Codes(board)
        board.hal.capture_start()
        board.hal.supervise(3000, 3000, True)
        seen.codes = [0, 0, 0]
        board.hal.pulse(15_000)
        board.pass_us(1500)
        assert board.hal.trips() == 0
        assert not is_low(board) or rises(board, board.chip.clock.now_ns - 50_000)
        if trip == TRIP_STOP_LOOP:
            board.chip.pins.drive_from_outside(STOP_LOOP, 0)
        seen.codes = [3000 * (trip == TRIP_OVER_VOLTAGE), 3000 * (trip == TRIP_OVER_CURRENT), 0]
        board.pass_us(1000)
        assert board.hal.trips() == trip
        _stays_at_rest(board, board.chip.clock.now_ns)
        seen.codes = [0, 0, 0]
        board.chip.pins.drive_from_outside(STOP_LOOP, 1)
        board.pass_us(2000)
        _stays_at_rest(board, board.chip.clock.now_ns)


def trip_without_breaks_lets_the_wave_go_on(new):
    """A bare relay's contact: the trip is told, and the pulse runs out as if there were none."""
    board = closed(new())
    board.hal.use_contact(True)
    for running in (False, True):
        for places in _orders(_accesses(board, running), False):
            _again(board, False, running)
            visits = Visits(board, places)
            visits.during(lambda: board.hal.pulse(2000))
            assert board.hal.trips() == TRIP_STOP_LOOP
            board.pass_us(900)
            board.hal.pulse(1000)
            last = board.chip.clock.now_ns
            board.pass_us(1500)
            assert rises(board, last)[-1] > last + 900_000, "the trip has ended the wave"
            assert 22 < len(rises(board, visits.ended_ns)) <= 51


def supervise_end_gives_the_pulse_back(new):
    """And so does the next supervision, and a new object."""
    board = closed(new())

    def another():
        board.hal = board.module("hal_rp2").Hal()

    for give, kept in (
        (board.hal.supervise_end, TRIP_STOP_LOOP),
        (lambda: board.hal.supervise(RAIL, RAIL, True), 0),
        (lambda: board.hal.supervise(RAIL, RAIL, False), 0),
        (another, TRIP_STOP_LOOP),
    ):
        _again(board, True, True)
        Visits(board, (0,)).during(lambda: board.hal.pulse(5000))
        at = board.chip.clock.now_ns
        board.hal.pulse(5000)
        board.pass_us(300)
        assert rises(board, at) == []
        board.chip.pins.drive_from_outside(STOP_LOOP, 1)
        board.pass_us(1)
        give()
        at = board.chip.clock.now_ns
        board.hal.pulse(5000)
        board.pass_us(6000)
        assert len(rises(board, at)) == 5000 // 39 - 1
        assert board.hal.trips() == kept
