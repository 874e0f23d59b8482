"""Placing the knots: where the curve bends, there the points stand.

Comes in: the bins of a finished capture. Goes out: `cuts`, the first bin of each knot and the
end. Integers only, so that every rung gives the same knots.

The curve is looked at in the plane (V / V at the end, I / largest I). What counts is the
distance between the curve and the straight line from the middle of one knot to the middle of
the next: `errors` measures it as the largest distance of the four quarters that lie between, each
a mean of all its pairs, so that noise is averaged as far as the knots' own size allows.

1. Knots of equal length along the curve.
2. Respaced a few times, so that sqrt(error) is spread evenly: for a smooth curve the error of a
   straight line is (1/8) curvature x spacing^2, and the largest one is least when all are equal
   (equidistribution; de Boor, "Good approximation by splines with variable knots", 1973, from
   memory). Where noise makes the errors, the more of them the more evenly knots are spaced.
3. A corner, as bypass diodes make it, wants one small knot between large ones, which no even
   spreading gives. So knots that are hardly missed are taken away, and those beside the largest
   errors are cut in two; then each border moves where that makes the largest error beside it less.

Memory: the ring, which stands still by now.
"""

from micropython import const

from tracer import memory, spacing
from tracer.plane import (
    FIRST,
    K_BINS,
    K_COUNT,
    K_DOWN,
    K_FIRST,
    K_KNOTS,
    K_ONE,
    K_OUT,
    K_PHASE,
    K_RIGHT,
    K_SCALE_I,
    K_SCALE_V,
    K_SHIFT_I,
    K_SHIFT_V,
    K_TWO,
    K_UP,
    K_WIDE,
    K_WORDS,
    SECOND,
    SUMS_I,
    SUMS_V,
    THIRD,
    along,
    errors,
    largest,
    sum_up,
)

FEWEST_BINS = 32  # below, the bins are shared out evenly
RESPACINGS = 4
EXCHANGES = 3  # in a round
# Few knots may end in a place that no exchange leads out of, so several ways in are tried; and none
# can be spared to stand near the axis. With PROMPT_KNOTS, the default, the host is to get the knots
# within 60 ms after the charge, which leaves time for one round; fewer or more take longer.
FEW_KNOTS = 48
SOME_KNOTS = 64
PROMPT_KNOTS = 96
ROUNDS = 2
MOVES = 12  # in a round: each sixth moves a third of the cuts one way
PROMPT_MOVES = 6
NO_END = const(1 << 29)  # above every error

# What a step does next.
S_MEASURE = const(0)
S_ENTER = const(1)
S_RESPACE = const(2)
S_EXCHANGE = const(3)
S_MOVE = const(4)
S_PLACED = const(5)

if memory.PLACING_WORDS < K_WORDS:
    raise ValueError("plane.py and memory.py disagree")


def evenly(cuts, bins, knots):
    for number in range(knots + 1):
        cuts[number] = bins * number // knots


def set_scale(k, scale, shift, extent):
    """Scale and shift that bring `extent`, of 2**20, to 2**20; the scale below 2**12."""
    extent = max(extent, 8192) >> 2  # 32 12-bit codes; numbers stay below 2**30
    k[shift] = 11
    while (1 << (k[shift] + 18)) // extent > 4095:
        k[shift] -= 1
    k[scale] = (1 << (k[shift] + 18)) // extent


class Placer:
    """Places the knots of one capture, a step at a time; `place` takes all steps at once.

    A step allocates nothing, so that it may be taken in the quiet.
    """

    def __init__(self, work, buffers, measure=None):
        """`work`: at least WORK_WORDS words that nobody else needs meanwhile. `measure`: a faster
        stand-in for `errors` where bins are one word.
        """
        self.work = work
        self.cuts = buffers.cuts
        self.trial = buffers.trial
        self.k = buffers.placing
        self.faster = measure or errors
        # All of them here: in the quiet no attribute can be added.
        self.measure = self.faster
        self.capture = None
        self.zero_voltage_x16 = 0
        self.zero_current_x16 = 0
        self.respacings = 0
        self.rounds = 0
        self.left = 0  # of what the state does
        self.least = NO_END
        self.state = S_PLACED
        self.count = 0

    def place(self, capture, knots, zero_voltage_x16, zero_current_x16):
        """Write the cuts; returns how many knots there are."""
        self.begin(capture, knots, zero_voltage_x16, zero_current_x16)
        while not self.step():
            pass
        return self.count

    def begin(self, capture, knots, zero_voltage_x16, zero_current_x16):
        """Be ready for the first step; `count` is how many knots there will be."""
        bins = capture.full_bins()
        rest = capture.pairs() - bins * capture.bin_pairs()
        knots = min(knots, bins)
        self.count = knots
        self.state = S_PLACED
        if not knots:
            # Less than one bin: what there is is one knot.
            self.cuts[0] = 0
            self.cuts[1] = 0
            self.count = 1 if rest else 0
            return
        if bins < FEWEST_BINS or bins <= knots:
            evenly(self.cuts, bins, knots)
            return
        self.capture = capture
        self.zero_voltage_x16 = zero_voltage_x16
        self.zero_current_x16 = zero_current_x16
        self.measure = errors if capture.wide else self.faster
        self.respacings = RESPACINGS if knots > FEW_KNOTS else 0
        self.least = NO_END
        self.state = S_MEASURE

    def step(self):
        """Do a piece of the work, ten passes over the knots at most; True once all is done."""
        if self.state == S_MEASURE:
            self._measures()
            self.state = S_ENTER
        elif self.state == S_ENTER:
            self._enter()
        elif self.state == S_RESPACE:
            if self.left and self._respace():
                self.left -= 1
            else:
                self.rounds = 1 if self._prompt() else ROUNDS
                self._begin_round()
        elif self.state == S_EXCHANGE:
            self.left -= 1
            if not self._exchange() or not self.left:
                self.state = S_MOVE
                self.left = PROMPT_MOVES if self._prompt() else MOVES
        elif self.state == S_MOVE:
            self.left -= 1
            self._move(5 - self.left % 6)
            if not self.left:
                self.rounds -= 1
                if self.rounds:
                    self._begin_round()
                else:
                    self._end_way()
        return self.state == S_PLACED

    def _prompt(self):
        return SOME_KNOTS < self.count <= PROMPT_KNOTS

    def _begin_round(self):
        self.state = S_EXCHANGE
        self.left = EXCHANGES

    def _end_way(self):
        """The end of one way in: the last one, or the next is tried."""
        if self.count > FEW_KNOTS:
            self.state = S_PLACED
            return
        most = spacing.worst(self.work, FIRST, self.count - 1)
        if most < self.least:
            self.least = most
            spacing.remember(self.work, self.cuts, self.count + 1)
        self.respacings += 1
        if self.respacings < RESPACINGS:
            self.state = S_ENTER
        else:
            spacing.recall(self.work, self.cuts, self.count + 1)
            self.state = S_PLACED

    def _measures(self):
        capture = self.capture
        bins = capture.full_bins()
        k = self.k
        k[K_BINS] = bins
        k[K_KNOTS] = self.count
        k[K_WIDE] = 1 if capture.wide else 0
        size = 0
        while 1 << size < capture.bin_pairs():
            size += 1
        up = 18 - capture.code_bits - size
        k[K_UP] = max(up, 0)
        k[K_DOWN] = max(-up, 0)
        work = self.work
        sum_up(capture.bins, work, k)
        groups = bins // 4
        bits = capture.code_bits - 10
        end = largest(work, SUMS_V + groups - 1, 1)
        set_scale(k, K_SCALE_V, K_SHIFT_V, end - ((self.zero_voltage_x16 << 6) >> bits))
        most = largest(work, SUMS_I, groups)
        set_scale(k, K_SCALE_I, K_SHIFT_I, most - ((self.zero_current_x16 << 6) >> bits))

    def _errors(self, cuts, out, one=1, two=2):
        k = self.k
        k[K_ONE] = one
        k[K_TWO] = two
        k[K_OUT] = out
        k[K_COUNT] = self.count + 1 - two
        self.measure(self.capture.bins, self.work, cuts, k)

    def _enter(self):
        """Knots of equal length."""
        along(self.work, self.k)
        if self.count <= FEW_KNOTS:
            self.k[K_FIRST] = self.k[K_BINS]
        spacing.cut(self.work, self.cuts, self.trial, self.k, 0)
        spacing.take_over(self.cuts, self.trial, self.count + 1)
        self._errors(self.cuts, FIRST)
        self.state = S_RESPACE
        self.left = self.respacings

    def _respace(self):
        """Spread the errors evenly; False where that gained nothing."""
        was = spacing.worst(self.work, FIRST, self.count - 1)
        spacing.respace(self.work, self.cuts, self.k)
        spacing.cut(self.work, self.cuts, self.trial, self.k, self.count)
        return self._try(was)

    def _exchange(self):
        """Move knots from where they are hardly missed; False where that gained nothing.

        Eight at once; where that fails one, from the side of the error or else from the other.
        """
        if self.count < 12:
            return False
        was = spacing.worst(self.work, FIRST, self.count - 1)
        for way in range(1 if self._prompt() else 3):
            self._errors(self.cuts, SECOND, 1, 3)
            self._errors(self.cuts, THIRD, 2, 3)
            most = 1 if way else 8
            if not spacing.exchange(
                self.work, self.cuts, self.trial, self.k, most, 1 if way == 2 else 0
            ):
                self._errors(self.cuts, FIRST)
                return False
            if self._try(was):
                return True
        return False

    def _try(self, was):
        """Take the trial over where its largest error is below `was`; write the errors."""
        self._errors(self.trial, FIRST)
        if spacing.worst(self.work, FIRST, self.count - 1) < was:
            spacing.take_over(self.cuts, self.trial, self.count + 1)
            return True
        self._errors(self.cuts, FIRST)
        return False

    def _move(self, sixth):
        """Move every third border left or right where its surroundings gain by it."""
        k = self.k
        k[K_PHASE] = sixth // 2
        k[K_RIGHT] = sixth % 2
        spacing.nudge(self.cuts, self.trial, k)
        self._errors(self.trial, SECOND)
        spacing.settle(self.work, self.cuts, self.trial, k)
