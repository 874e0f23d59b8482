"""Checks of a trip: which pairs make one, which code is told, and that it ends the wave in time."""

from checks_pulse import FUNCTION_SIO, is_low
from checks_supervision import RAIL, TRIP_OVER_CURRENT, TRIP_OVER_VOLTAGE, TRIP_STOP_LOOP
from rp2040_model import PULSE, STOP_LOOP

MS_NS = 1_000_000
VISIT_NS = 20_000  # what a visit may take on the chip, from when it is due
PAIR_NS, CONVERSION_NS = 4000, 2000
LIMIT = 3000
W_TRIPS, W_TRIP_CODE = 1, 19  # places among the words shared with the interrupt
RING_PAIRS = 4096


def closed(board):
    """Its stop loop is."""
    board.chip.pins.drive_from_outside(STOP_LOOP, 1)
    return board


def rises(board, since_ns):
    return [
        ns for ns, pin, level in board.chip.pins.edges if pin == PULSE and level and ns > since_ns
    ]


def visit(board):
    """One, in interrupt context, now."""
    ring = board.module("ring_rp2")
    board.chip.clock.in_interrupt = True
    ring.visit(ring.timer)
    board.chip.clock.in_interrupt = False


# -- which pairs trip ----------------------------------------------------------------------


class Seen:
    """A capture whose pair `number` is `codes(number)`, (V, I)."""

    def __init__(self, board, codes):
        self.board = board
        adc = board.chip.adc
        adc.starts = []
        adc.source = lambda channel, ns, before: codes(self.number(ns))[channel]
        board.hal.capture_start()
        self.first_ns = adc.starts[0][0]

    def number(self, ns):
        return (ns - self.board.chip.adc.starts[0][0]) // PAIR_NS

    def visit_after(self, pairs):
        """Trips that a visit finds when so many pairs are in the ring and no more."""
        board = self.board
        board.chip.clock.advance(self.first_ns + PAIR_NS * pairs + 200)
        words = board.module("ring_rp2").words
        words[W_TRIPS] = words[W_TRIP_CODE] = 0
        visit(board)
        return words[W_TRIPS]


def _supervised(new, breaks):
    """Its own timer does not visit."""
    board = closed(new())
    board.hal.supervise(LIMIT, LIMIT + 100, breaks)
    board.module("ring_rp2").timer.deinit()
    return board


# Of a pair in 23, and of one in 19: whether its code is at the limit. Single ones, two, more.
VOLTAGES = "01001100111010010111000"
CURRENTS = "0010110111100100110"


def two_pairs_in_a_row_trip(new):
    """Those, and no others, at the limit or far above it, at the ring's start, in its midst, and
    with one pair in its last place and the next one in its first. Where both channels are at
    their limits, the voltage trips.
    """

    def codes(number):
        above = 0 if number % 2 else 500
        v, i = VOLTAGES[number % 23] == "1", CURRENTS[number % 19] == "1"
        return (LIMIT + above if v else LIMIT - 1), (LIMIT + 100 + above if i else LIMIT + 99)

    board = _supervised(new, False)
    for place in range(4 * (RING_PAIRS - 1), 4 * RING_PAIRS):  # of before
        board.hal.ring[place] = 0x0F
    seen = Seen(board, codes)
    told = set()  # what was at its limit, in any of them
    for begin, end in ((0, 60), (RING_PAIRS - 30, RING_PAIRS + 30), (2 * RING_PAIRS - 9, 8210)):
        for pairs in range(begin, end):
            newest, before = codes(pairs - 1), codes(pairs - 2)
            high = 0
            if pairs > 1:
                high |= TRIP_OVER_VOLTAGE if min(newest[0], before[0]) >= LIMIT else 0
                high |= TRIP_OVER_CURRENT if min(newest[1], before[1]) >= LIMIT + 100 else 0
            due = high & TRIP_OVER_VOLTAGE or high
            assert seen.visit_after(pairs) == due, (pairs, before, newest)
            assert board.hal.trip_code() == {0: 0, 2: newest[0], 4: newest[1]}[due]
            told.add(high)
    assert told == {0, 2, 4, 6}


def pairs_beside_the_rings_end_trip(new):
    """The two pairs at the limit are in the ring's last place and in its first; nothing else is."""
    for channel, trip in ((0, TRIP_OVER_VOLTAGE), (1, TRIP_OVER_CURRENT)):
        for high in ((4095, 4096), (4095,), (4096,), (4094, 4096), (4095, 4097)):
            board = _supervised(new, True)

            def codes(number, high=high, channel=channel):
                code = LIMIT + 100 if number in high else 0
                return (code, 0) if channel == 0 else (0, code)

            seen = Seen(board, codes)
            board.hal.pulse(19_000)
            assert seen.visit_after(RING_PAIRS) == 0
            found = seen.visit_after(RING_PAIRS + 1)
            assert found == (trip if high == (4095, 4096) else 0), high
            assert is_low(board) or not found
            assert seen.visit_after(RING_PAIRS + 2) == 0


def first_pair_waits_for_another(new):
    """With one pair in the ring, its last place, which would be the one before, is of long ago."""
    for high in (1, 2):
        board = _supervised(new, True)
        for place in range(len(board.hal.ring)):
            board.hal.ring[place] = 0x0F
        seen = Seen(board, lambda number, high=high: (RAIL, RAIL) if number < high else (0, 0))
        assert seen.visit_after(0) == 0
        assert seen.visit_after(1) == 0, "one pair alone"
        assert seen.visit_after(2) == (TRIP_OVER_VOLTAGE if high == 2 else 0)


FIRST_CODES = (
    (((LIMIT, 0), (3050, 0), (3600, 3900), (3700, 3900)), TRIP_OVER_VOLTAGE, 3050),
    (((0, 3100), (0, 3333), (3500, 3444), (3555, 3444)), TRIP_OVER_CURRENT, 3333),
    (((3222, 3999), (3111, 3888), (3999, 3999), (3999, 3999)), TRIP_OVER_VOLTAGE, 3111),
)


def first_code_that_trips_is_told(new):
    """The newer one of its two pairs, and its channel, whatever comes afterwards; also where the
    stop loop has opened before, in the same visit, or later.
    """
    for table, trip, first in FIRST_CODES:
        for opens in (None, 1, 2, 3):
            board = _supervised(new, True)
            seen = Seen(board, lambda number, table=table: table[min(number, 3)])
            for pairs in (1, 2, 3, 4, 5):
                if pairs == opens:
                    board.chip.pins.drive_from_outside(STOP_LOOP, 0)
                board.chip.clock.advance(seen.first_ns + pairs * PAIR_NS + 200)
                visit(board)
                is_open = opens is not None and pairs >= opens
                due = (TRIP_STOP_LOOP if is_open else 0) | (trip if pairs > 1 else 0)
                assert board.hal.trips() == due, (table, opens, pairs)
                assert board.hal.trip_code() == (first if pairs > 1 else 0), (table, opens, pairs)


def code_of_before_is_forgotten(new):
    """By the next supervision, and not by the end of its own."""
    board = _supervised(new, True)
    seen = Seen(board, lambda number: (3050, 0))
    board.chip.clock.advance(seen.first_ns + 2 * PAIR_NS + 200)
    visit(board)
    board.hal.supervise_end()
    assert (board.hal.trips(), board.hal.trip_code()) == (TRIP_OVER_VOLTAGE, 3050)
    board.hal.supervise(RAIL, RAIL, True)
    assert (board.hal.trips(), board.hal.trip_code()) == (0, 0)
    board.chip.pins.drive_from_outside(STOP_LOOP, 0)
    board.pass_us(1100)
    assert (board.hal.trips(), board.hal.trip_code()) == (TRIP_STOP_LOOP, 0)


# -- in time -------------------------------------------------------------------------------


def _latency(new, trip, phase_ns):
    """(ns from what trips to the pin low for good, ns from when the visit was due to that)."""
    board = closed(new())
    clock = board.chip.clock
    board.hal.capture_start()
    clock.sleep(phase_ns * 3 % PAIR_NS)  # a visit comes at any moment of a pair
    board.hal.supervise(LIMIT, LIMIT, True)
    (alarm,) = clock.alarms
    board.hal.pulse(15_000)
    at = clock.now_ns + 200_000 + phase_ns
    channel = {TRIP_OVER_VOLTAGE: 0, TRIP_OVER_CURRENT: 1, TRIP_STOP_LOOP: None}[trip]
    board.chip.adc.starts = []
    board.chip.adc.source = lambda asked, ns, before: LIMIT if asked == channel and ns >= at else 9
    board.chip.pins.chosen = []
    clock.sleep(at - clock.now_ns)
    if channel is None:
        board.chip.pins.drive_from_outside(STOP_LOOP, 0)
        tripped_ns = clock.now_ns
    board.pass_us(1200)
    assert board.hal.trips() == trip
    assert board.chip.pins.chosen, "the visit has left the pin to the wave"
    low_ns = board.chip.pins.chosen[0][0]
    if channel is not None:
        begun = [ns for ns, asked in board.chip.adc.starts if asked == channel and ns >= at]
        tripped_ns = begun[1] + CONVERSION_NS
    falls = [ns for ns, pin, level in board.chip.pins.edges if pin == PULSE and not level]
    low_ns = max(low_ns, falls[-1])
    due_ns = alarm.due_ns - MS_NS
    while due_ns > low_ns:
        due_ns -= MS_NS
    assert board.chip.pins.function[PULSE] == FUNCTION_SIO
    assert is_low(board)
    assert not rises(board, low_ns), "the wave came back"
    return low_ns - tripped_ns, low_ns - due_ns


def trip_ends_the_wave_in_a_visit(new):
    """From the end of the conversion that trips, or the loop's opening, to the pin low for good."""
    # All of a visit's time, and finer where the visit looks just before what trips is there.
    phases = list(range(0, MS_NS, 90_000)) + list(range(797_000, 812_000, 700))
    figures = {}
    for trip, name in ((1, "stop loop"), (2, "over-voltage"), (4, "over-current")):
        found = [_latency(new, trip, phase) for phase in phases]
        latest = max(latency for latency, _ in found)
        longest = max(visit_ns for _, visit_ns in found)
        assert longest <= VISIT_NS, f"a visit of {longest} ns"
        assert latest <= MS_NS + longest, f"low {latest} ns after what tripped"
        assert latest > MS_NS - VISIT_NS, "these phases do not show the worst"
        figures[name] = f"{latest / 1000} us, of these {longest / 1000} us of the visit"
    return figures


def wave_that_stands_beside_a_trip_is_ended(new):
    """Whatever has started it: each visit ends it."""
    board = closed(new())
    board.hal.supervise(RAIL, RAIL, True)
    board.hal.pulse(5000)
    board.chip.pins.drive_from_outside(STOP_LOOP, 0)
    board.pass_us(1100)
    for _ in range(3):
        assert is_low(board)
        board.module("pulse_pio").run(300, board.hal._pulse.origin)
        began = board.chip.clock.now_ns
        board.pass_us(1100)
        assert is_low(board)
        assert rises(board, began)[-1] - began < MS_NS + VISIT_NS
