"""Folding raw pairs into bins: the hot loop.

Comes in: the ring that DMA fills with pairs of codes, voltage first. Goes out: bins of
`bin_pairs` pairs each, holding sums and scatter. When all bins are full, neighbours are
merged and `bin_pairs` doubles, so a sweep of any length fits the same memory and no pair is
thrown away.

Widths: a code is below 2**12. A bin holds at most 2**16 pairs, so its sums stay below 2**28.
A squared difference is below 2**24; scatter is kept as two words, the low one below 2**29
between pairs, so no intermediate reaches 2**30.
"""

import micropython
from micropython import const

from tracer import memory

BINS = const(1024)
MAX_BIN_PAIRS = 65536

# Words of one bin.
WORDS = const(6)
B_VOLTAGE = const(0)
B_CURRENT = const(1)
B_VOLTAGE_LOW = const(2)
B_VOLTAGE_HIGH = const(3)
B_CURRENT_LOW = const(4)
B_CURRENT_HIGH = const(5)
SPLIT_BITS = const(29)
SPLIT = const(1 << 29)

# Words of the state that `fold` carries from call to call.
S_AT = const(0)  # next pair in the ring
S_MASK = const(1)
S_BIN = const(2)  # bin being filled
S_LEFT = const(3)  # pairs still wanted in it
S_BIN_PAIRS = const(4)
S_LAST_VOLTAGE = const(5)
S_LAST_CURRENT = const(6)
S_SLICE_VOLTAGE = const(7)  # sums over the pairs folded since the caller cleared them
S_SLICE_CURRENT = const(8)
S_SLICE_PAIRS = const(9)
S_THRESHOLD = const(10)  # current code above which the source conducts
S_FOUND = const(11)  # 1 once the source conducts
S_WORDS = const(12)

# Constants cannot be imported into the native code, so they are written again and compared.
if (BINS, WORDS, S_WORDS) != (memory.BINS, memory.BIN_WORDS, memory.STATE_WORDS):
    raise ValueError("capture.py and memory.py disagree")


@micropython.viper
def fold(ring: ptr16, bins: ptr32, state: ptr32, count: int) -> int:
    """Fold up to `count` pairs; stops early when the last bin is full. Returns pairs folded."""
    at = state[S_AT]
    mask = state[S_MASK]
    left = state[S_LEFT]
    number = state[S_BIN]
    base = number * WORDS
    last_v = state[S_LAST_VOLTAGE]
    last_i = state[S_LAST_CURRENT]
    slice_v = state[S_SLICE_VOLTAGE]
    slice_i = state[S_SLICE_CURRENT]
    done = 0
    while done < count and number < BINS:
        sum_v = bins[base]
        sum_i = bins[base + 1]
        low_v = bins[base + 2]
        low_i = bins[base + 4]
        start_v = sum_v
        start_i = sum_i
        run = count - done
        if run > left:
            run = left
        done += run
        left -= run
        while run > 0:
            v = ring[at + at]
            i = ring[at + at + 1]
            at = (at + 1) & mask
            sum_v += v
            sum_i += i
            last_v = v - last_v
            low_v += last_v * last_v
            last_v = v
            last_i = i - last_i
            low_i += last_i * last_i
            last_i = i
            if low_v >= SPLIT:
                low_v -= SPLIT
                bins[base + 3] += 1
            if low_i >= SPLIT:
                low_i -= SPLIT
                bins[base + 5] += 1
            run -= 1
        bins[base] = sum_v
        bins[base + 1] = sum_i
        bins[base + 2] = low_v
        bins[base + 4] = low_i
        slice_v += sum_v - start_v
        slice_i += sum_i - start_i
        if left == 0:
            number += 1
            base += WORDS
            left = state[S_BIN_PAIRS]
    state[S_AT] = at
    state[S_LEFT] = left
    state[S_BIN] = number
    state[S_LAST_VOLTAGE] = last_v
    state[S_LAST_CURRENT] = last_i
    state[S_SLICE_VOLTAGE] = slice_v
    state[S_SLICE_CURRENT] = slice_i
    state[S_SLICE_PAIRS] += done
    return done


@micropython.viper
def merge(bins: ptr32, count: int):
    """Merge bins 2j and 2j + 1 into bin j, and clear the upper half."""
    target = 0
    end = count * WORDS
    source = 0
    while source < end:
        word = 0
        while word < WORDS:
            bins[target + word] = bins[source + word] + bins[source + WORDS + word]
            word += 1
        if bins[target + 2] >= SPLIT:
            bins[target + 2] -= SPLIT
            bins[target + 3] += 1
        if bins[target + 4] >= SPLIT:
            bins[target + 4] -= SPLIT
            bins[target + 5] += 1
        target += WORDS
        source += WORDS + WORDS
    while target < end:
        bins[target] = 0
        target += 1


@micropython.viper
def clear(words: ptr32, count: int):
    place = 0
    while place < count:
        words[place] = 0
        place += 1


@micropython.viper
def conducting(ring: ptr16, state: ptr32, count: int) -> int:
    """Skip pairs before conduction; returns how many of `count` were skipped.

    Conduction is two pairs in a row above the threshold. The first of them may straddle the
    closing (its voltage taken before, its current after), so it is skipped as well.
    """
    at = state[S_AT]
    mask = state[S_MASK]
    threshold = state[S_THRESHOLD]
    done = 0
    while done < count - 1:
        after = (at + 1) & mask
        first = ring[at + at + 1]
        second = ring[after + after + 1]
        at = after
        done += 1
        if first > threshold and second > threshold:
            state[S_LAST_VOLTAGE] = ring[at + at]
            state[S_LAST_CURRENT] = second
            state[S_FOUND] = 1
            break
    state[S_AT] = at
    return done


class Capture:
    """The bins of one sweep; `begin` makes them ready for the next."""

    def __init__(self, ring, ring_pairs, buffers):
        self.ring = ring
        self.ring_pairs = ring_pairs
        self.bins = buffers.bins
        self.state = buffers.state
        self.begin(0)

    def begin(self, threshold):
        """Forget the last sweep. `threshold`: current code above which the source conducts."""
        state = self.state
        clear(self.bins, WORDS * BINS)
        clear(state, S_WORDS)
        state[S_MASK] = self.ring_pairs - 1
        state[S_LEFT] = 1
        state[S_BIN_PAIRS] = 1
        state[S_THRESHOLD] = threshold
        self.read = 0
        self.skipped = 0
        self.overruns = 0
        self.full = False
        self.voltage_x16 = 0
        self.current_x16 = 0

    def drain(self, written):
        """Take in all pairs up to `written`, the ring's count since the start (mod 2**30)."""
        behind = (written - self.read) & 0x3FFFFFFF
        if behind >= self.ring_pairs:
            self.overruns += 1
            return
        self.read = written
        if not self.state[S_FOUND]:
            passed = conducting(self.ring, self.state, behind)
            self.skipped += passed
            behind -= passed
            if not self.state[S_FOUND]:
                # The last pair stays unread: the next call looks at it with its successor.
                self.read = (written - behind) & 0x3FFFFFFF
                return
        while behind:
            behind -= fold(self.ring, self.bins, self.state, behind)
            if self.state[S_BIN] == BINS:
                if self.state[S_BIN_PAIRS] == MAX_BIN_PAIRS:
                    self.full = True
                    return
                merge(self.bins, BINS)
                self.state[S_BIN] = BINS // 2
                self.state[S_BIN_PAIRS] *= 2
                self.state[S_LEFT] = self.state[S_BIN_PAIRS]

    def slice_means(self):
        """Write the means over what was folded since the last call, in sixteenths of a code,
        into `voltage_x16` and `current_x16`; False where nothing was.
        """
        state = self.state
        pairs = state[S_SLICE_PAIRS]
        if not pairs:
            return False
        self.voltage_x16 = 16 * state[S_SLICE_VOLTAGE] // pairs
        self.current_x16 = 16 * state[S_SLICE_CURRENT] // pairs
        state[S_SLICE_VOLTAGE] = 0
        state[S_SLICE_CURRENT] = 0
        state[S_SLICE_PAIRS] = 0
        return True

    def bin_pairs(self):
        return self.state[S_BIN_PAIRS]

    def conducts(self):
        """True once the source was seen to conduct."""
        return self.state[S_FOUND] == 1

    def pairs(self):
        """Pairs folded so far."""
        state = self.state
        if not state[S_FOUND]:
            return 0
        return (state[S_BIN] + 1) * state[S_BIN_PAIRS] - state[S_LEFT]

    def used_bins(self):
        """Bins that hold at least one pair."""
        return self.state[S_BIN] + (1 if self.state[S_LEFT] != self.state[S_BIN_PAIRS] else 0)
