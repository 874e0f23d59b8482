"""Checks of the wave's program in cycles of its state machine: what a word lets it do, whenever it
comes, and that nothing but a word does more.

Cycle 0 is that of an `out`, which has put the periods left into X; a write in slot n comes between
the cycles n - 1 and n. A period: 0 out, 1 jmp, 2 to 7 high, 8 to 11 low and looked for a newer
word at 8, 12 jmp. With none left: 0 out, 1 jmp, 2 rest, looked for a word in each cycle.
"""

from bus import Fault
from pio_machine import FINE
from rp2040_model import PIO0, PULSE

CYCLE_NS = 3000
PERIOD, FALL = 13, 8
TXF0, SHIFTCTRL_XOR, FJOIN_RX = PIO0 + 0x10, PIO0 + 0x10D0, 1 << 31
MOST = {False: 511, True: 131071}
SLOTS = range(1, PERIOD + 1)
ALL_BUT_X = ("pc", "y", "isr", "osr", "osr_count", "forced", "waits", "enabled")
LONGEST_WALK = 7 * 520  # steps


def expected(left, words):
    """(the cycle of the last fall, how often the pin is high) for `words` of (slot, periods), each
    of which takes the place of the one before. None where the pin stays low.
    """
    at, fall, highs, taken = 0, None, 0, 0
    while True:
        if taken == len(words):
            return (at + PERIOD * (left - 1) + FALL if left else fall), highs + left
        if left:
            fall, highs = at + FALL, highs + 1
            look, following = at + FALL, at + PERIOD
        else:
            look = max(at + 2, words[taken][0])
            following = look + 1
        landed = [number for number, (slot, _) in enumerate(words) if slot <= look]
        if landed and landed[-1] >= taken:
            taken = landed[-1] + 1
            left = words[landed[-1]][1]
        elif left:
            left -= 1
        at = following


class Wave:
    """The program of the firmware on the modelled machine, held at its cycles."""

    def __init__(self, board, bare):
        board.hal.use_contact(bare)
        self.board = board
        self.most = MOST[bare]
        self.chip = board.chip
        self.machine = board.chip.pios[0].machines[0]
        self.origin = board.hal._pulse.origin
        self.zero_ns = 0
        assert self.machine.period() == CYCLE_NS * FINE, "a cycle is not 3 us exactly"

    def run(self, periods):
        self.board.module("pulse_pio").run(periods, self.origin)

    def step(self):
        """The next step, and where it stood."""
        at = self.machine.pc - self.origin
        self.chip.clock.advance(self.machine.due // FINE)
        return at

    def to_out(self, left):
        """Go on to the `out` that puts `left` into X: cycle 0."""
        for _ in range(LONGEST_WALK):
            if self.machine.due is None:
                break
            if self.step() == 1 and self.machine.x == left:
                self.zero_ns = self.chip.clock.now_ns
                self.chip.pins.edges = []
                return
        raise Fault(f"no period begins with {left} left")

    def begin(self, left):
        """At cycle 0, nothing in the FIFO."""
        self.board.hal.pulse(0)
        self.run(left + 1)
        self.to_out(left)

    def to_slot(self, slot):
        self.chip.clock.advance(self.zero_ns + slot * CYCLE_NS - CYCLE_NS // 2)

    def cycle(self, ns):
        assert (ns - self.zero_ns) % CYCLE_NS == 0, "an edge between two cycles"
        return (ns - self.zero_ns) // CYCLE_NS

    def ended(self):
        """(the last fall's cycle, highs) once it rests; the pin is low."""
        for _ in range(LONGEST_WALK):
            if self.machine.waits:
                break
            self.step()
        else:
            raise Fault("the wave does not end")
        edges = [(ns, level) for ns, pin, level in self.chip.pins.edges if pin == PULSE]
        assert self.chip.pins.driven(PULSE) == 0
        highs = sum(level for _, level in edges)
        return (self.cycle(edges[-1][0]) if edges else None), highs

    def skip(self, periods):
        """In mid-wave, as after so many periods: see `periods_are_alike`. Gives their cycles."""
        assert self.machine.x > periods
        self.machine.x -= periods
        return PERIOD * periods


def within_the_bound(came, slot, periods):
    """Of the last word: its periods, and less than one for what was under way."""
    fall, _ = came
    assert fall is None or fall - (slot - 1) <= PERIOD * (periods + 1), (
        f"low {fall - slot + 1} cycles after a word of {periods} periods"
    )


def periods_are_alike(new):
    """One period leaves all as it was but for X, which is one less: so the n-th does, for any n."""
    for bare in (False, True):
        wave = Wave(new(), bare)
        machine = wave.machine
        some = {wave.most, wave.most - 1} | {(1 << bit) - 1 for bit in range(1, 17)}
        some |= {1 << bit for bit in range(17)} | {(1 << bit) + 1 for bit in range(17)}
        some = range(1, 512) if not bare else sorted(left for left in some if left <= wave.most)
        for left in some:
            wave.board.hal.pulse(0)
            wave.run(left)
            wave.to_out(left)
            states, counts = [], []
            for _ in range(2 if left > 1 else 1):
                wave.chip.pins.edges = []
                began = wave.chip.clock.now_ns
                wave.step()
                while wave.step() != 1:
                    pass
                assert wave.chip.clock.now_ns - began == PERIOD * CYCLE_NS
                edges = [(ns - began) // CYCLE_NS for ns, _, _ in wave.chip.pins.edges]
                levels = [level for _, _, level in wave.chip.pins.edges]
                assert (edges, levels) == ([2, FALL], [1, 0]), left
                counts.append(machine.x)
                states.append([getattr(machine, name) for name in ALL_BUT_X])
            assert counts == [left - 1, left - 2][: len(counts)], left
            assert machine.tx == []
            assert states[0] == states[-1]


def renewed_at_any_cycle(new):
    """A longer word, the same, a shorter one and none, in each slot; and one that comes at rest."""
    for bare in (False, True):
        wave = Wave(new(), bare)
        for left in (0, 1, 2, 7):
            for periods in {0, max(left - 1, 0), left, left + 1, left + 12}:
                for slot in SLOTS if left else range(1, 3 * PERIOD):
                    wave.begin(left)
                    wave.to_slot(slot)
                    wave.run(periods)
                    came = wave.ended()
                    assert came == expected(left, [(slot, periods)]), (left, periods, slot)
                    within_the_bound(came, slot, periods)


def renewed_twice_at_any_cycles(new):
    """The second word, or the first where that had been looked for already; never both."""
    for bare in (False, True):
        wave = Wave(new(), bare)
        for left, first, second in ((3, 9, 2), (3, 2, 9), (1, 8, 1), (2, 6, 0), (0, 5, 3)):
            for slot in SLOTS:
                for later in range(slot, slot + PERIOD + 1):
                    wave.begin(left)
                    wave.to_slot(slot)
                    wave.run(first)
                    if later > slot:
                        wave.to_slot(later)
                    wave.run(second)
                    came = wave.ended()
                    where = (left, first, second, slot, later)
                    assert came == expected(left, [(slot, first), (later, second)]), where
                    within_the_bound(came, later, second)


def flushed_at_any_cycle(new):
    """A renewal that interrupts cut in three, for as long as they like: a word that waits is gone
    with the first half of the flush, and the new one counts from when it is there.
    """
    left, waiting, periods = 4, 30, 2
    for bare in (False, True):
        wave = Wave(new(), bare)
        for first in SLOTS:
            for third in range(first, first + PERIOD + 1):
                for second in {first, (first + third) // 2, third}:
                    wave.begin(left)
                    wave.to_slot(1)
                    store = wave.chip.bus.store
                    store(TXF0, waiting)
                    for slot, address, word in (
                        (first, SHIFTCTRL_XOR, FJOIN_RX),
                        (second, SHIFTCTRL_XOR, FJOIN_RX),
                        (third, TXF0, periods),
                    ):
                        wave.to_slot(slot)
                        store(address, word)
                    words = [(third, periods)]
                    if first > FALL:  # the wave has looked already
                        words = [(1, waiting), (third, periods)]
                    came = wave.ended()
                    assert came == expected(left, words), (first, second, third)
                    within_the_bound(came, third, periods)


def started_at_any_moment(new):
    """From a machine that stands still: the first period begins within two cycles."""
    for bare in (False, True):
        wave = Wave(new(), bare)
        for early_ns in range(0, 2 * CYCLE_NS, 136):
            for periods in (1, 2, 9):
                wave.board.hal.pulse(0)
                wave.chip.clock.advance(wave.chip.clock.now_ns + early_ns)
                wave.run(periods)
                now = wave.chip.clock.now_ns
                wave.to_out(periods)
                assert CYCLE_NS < wave.zero_ns - now <= 2 * CYCLE_NS
                assert wave.ended() == (PERIOD * (periods - 1) + FALL, periods)


def garbled_words_are_bounded(new):
    """511 periods, and 131071 for a bare relay, however many bits are set above. The long wave is
    shortened by `skip`, which the short one shows to be right.
    """
    figures = {}
    for bare in (False, True):
        wave = Wave(new(), bare)
        most = 0
        for word in (0xFFFFFFFF, wave.most, wave.most + 1, 0x80000000, 0xFFFC0000 | wave.most):
            periods = word & wave.most
            for slot in SLOTS:
                for skipped in (True,) if bare or word != wave.most else (False, True):
                    wave.begin(2)
                    wave.to_slot(slot)
                    wave.chip.bus.store(TXF0, word)
                    cycles = highs = 0
                    if skipped and periods > 3:
                        edges = wave.chip.pins.edges
                        zero = wave.zero_ns
                        wave.to_out(periods)
                        wave.chip.pins.edges = edges + wave.chip.pins.edges
                        wave.zero_ns = zero
                        highs = periods - 3
                        cycles = wave.skip(highs)
                    fall, more = wave.ended()
                    came = fall + cycles, more + highs
                    assert came == expected(2, [(slot, periods)]), (word, slot)
                    within_the_bound(came, slot, periods)
                    most = max(most, came[0] - (slot - 1))
        assert most == PERIOD * (wave.most + 1), "the bound is not reached in any slot"
        figures["bare relay" if bare else "switch"] = f"{most} cycles, {3 * most / 1000} ms"
    return figures


def stuck_processor_drops_the_pin(new):
    """5 ms are asked for, and nothing comes after it; the same for all that a bare relay may be
    given.
    """
    worst = 0
    for bare, us in ((False, 5000), (True, 5000), (True, 5_000_000), (True, 6_000_000)):
        wave = Wave(new(), bare)
        periods = min(us // 39 - 1, wave.most)
        for left in (0, 1, 2, 40):
            for slot in SLOTS:
                wave.begin(left)
                wave.to_slot(slot)
                asked_ns = wave.chip.clock.now_ns
                wave.board.hal.pulse(us)
                cycles = 0
                if periods > 500:
                    zero = wave.zero_ns
                    wave.to_out(periods)
                    wave.zero_ns = zero
                    cycles = wave.skip(periods - 5)
                fall = wave.ended()[0] + cycles
                assert fall == expected(left, [(slot, periods)])[0]
                late_us = (wave.zero_ns + fall * CYCLE_NS - asked_ns) / 1000
                assert late_us <= us, f"low after {late_us} us of {us}"
                if us == 5000:
                    worst = max(worst, late_us)
    return {"a word of 5 ms": f"{worst} us"}
