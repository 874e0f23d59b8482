"""Folding raw pairs into bins: the hot loop.

Comes in: the ring that DMA fills with pairs of codes, voltage in the low half of a word and
current in the high half. Goes out: bins of `bin_pairs` pairs each, holding the two sums. When
all bins are full, neighbours are merged and `bin_pairs` doubles, so a sweep of any length fits
the same memory and no pair is thrown away.

A bin is one word as long as both its sums fit half a word: up to 16 pairs of 12-bit codes, one
pair of 16-bit codes. Adding such words adds both sums at once. Beyond, a bin takes two words;
on the way there four bins become one.

Widths: a packed sum stays below 2**16 in each half. A bin of two words holds at most 2**15
pairs of codes below 2**16, so each sum stays below 2**31.

Time: a call of `drain` folds at most DRAIN_PAIRS or merges once, so that the pulse is renewed in
between; the ring holds what arrives meanwhile.
"""

import micropython
from micropython import const

from tracer import memory

MAX_BIN_PAIRS = 32768
DRAIN_PAIRS = const(2048)
LAP_MARGIN = const(64)  # pairs (256 us) that may arrive between the count and the first fold
MEAN_PAIRS = 48  # of the newest, for `recent_means`: enough for a quarter of a code, and quick

# Words that the native functions are told and keep.
C_AT = const(0)  # place of the first pair in the ring
C_COUNT = const(1)  # pairs to take, none of them beyond the ring's end
C_BIN = const(2)  # number of the bin being filled
C_LEFT = const(3)  # pairs that it still takes
C_BIN_PAIRS = const(4)
C_MASK = const(5)
C_THRESHOLD = const(6)
C_FOUND = const(7)
C_LOW = const(8)  # 1: the pair before did not conduct
C_VOLTAGE = const(9)
C_CURRENT = const(10)
C_WORDS = const(11)

# Constants cannot be imported into the native code, so they are written again and compared.
if C_WORDS != memory.CONTROL_WORDS:
    raise ValueError("capture.py and memory.py disagree")


@micropython.viper
def fold(ring: ptr32, bins: ptr32, control: ptr32):
    """Add C_COUNT pairs to bins of one word."""
    at = control[C_AT]
    end = at + control[C_COUNT]
    place = control[C_BIN]
    size = control[C_BIN_PAIRS]
    if size == 1:
        while at < end:
            bins[place] = ring[at]
            place += 1
            at += 1
    else:
        left = control[C_LEFT]
        total = 0
        if left < size:
            total = bins[place]
        if size < 8:
            while at < end:
                total += ring[at]
                at += 1
                left -= 1
                if left == 0:
                    bins[place] = total
                    place += 1
                    left = size
                    total = 0
        else:
            while at < end:
                stop = at + left
                if stop > end:
                    stop = end
                left -= stop - at
                while at < stop:
                    total += ring[at]
                    at += 1
                if left == 0:
                    bins[place] = total
                    place += 1
                    left = size
                    total = 0
        if left < size:
            bins[place] = total
        control[C_LEFT] = left
    control[C_BIN] = place


@micropython.viper
def fold_wide(ring: ptr32, bins: ptr32, control: ptr32):
    """Add C_COUNT pairs to bins of two words."""
    at = control[C_AT]
    end = at + control[C_COUNT]
    place = 2 * control[C_BIN]
    size = control[C_BIN_PAIRS]
    left = control[C_LEFT]
    v = 0
    i = 0
    if left < size:
        v = bins[place]
        i = bins[place + 1]
    while at < end:
        stop = at + left
        if stop > end:
            stop = end
        left -= stop - at
        while at < stop:
            pair = ring[at]
            v += pair & 0xFFFF
            i += (pair >> 16) & 0xFFFF
            at += 1
        bins[place] = v
        bins[place + 1] = i
        if left == 0:
            place += 2
            left = size
            v = 0
            i = 0
    control[C_LEFT] = left
    control[C_BIN] = place >> 1


@micropython.viper
def double(bins: ptr32, words: int):
    """Merge one-word bins 2j and 2j + 1 into bin j."""
    target = 0
    source = 0
    while source < words:
        bins[target] = bins[source] + bins[source + 1]
        target += 1
        source += 2


@micropython.viper
def widen(bins: ptr32, words: int):
    """Merge one-word bins 4j to 4j + 3 into bin j of two words."""
    target = 0
    source = 0
    while source < words:
        v = 0
        i = 0
        end = source + 4
        while source < end:
            both = bins[source]
            v += both & 0xFFFF
            i += (both >> 16) & 0xFFFF
            source += 1
        bins[target] = v
        bins[target + 1] = i
        target += 2


@micropython.viper
def double_wide(bins: ptr32, words: int):
    """Merge two-word bins 2j and 2j + 1 into bin j."""
    target = 0
    source = 0
    while source < words:
        bins[target] = bins[source] + bins[source + 2]
        bins[target + 1] = bins[source + 1] + bins[source + 3]
        target += 2
        source += 4


@micropython.viper
def conducting(ring: ptr32, control: ptr32, count: int) -> int:
    """Skip pairs before conduction; returns how many of `count` were skipped.

    Conduction is two pairs in a row above the threshold. The first of them may straddle the
    closing (its voltage taken before, its current after), so it is skipped as well.
    """
    at = control[C_AT]
    threshold = control[C_THRESHOLD]
    done = 0
    while done < count - 1:
        first = (ring[at] >> 16) & 0xFFFF
        at = (at + 1) & control[C_MASK]
        done += 1
        if first > threshold and ((ring[at] >> 16) & 0xFFFF) > threshold:
            control[C_FOUND] = 1
            control[C_LOW] = 0
            break
    control[C_AT] = at
    return done


@micropython.viper
def opened(ring: ptr32, control: ptr32) -> int:
    """Pairs, of the next C_COUNT, up to where two in a row do not conduct; 0 where none do."""
    at = control[C_AT]
    end = at + control[C_COUNT]
    low = control[C_LOW]
    threshold = control[C_THRESHOLD]
    while at < end:
        if ((ring[at] >> 16) & 0xFFFF) > threshold:
            low = 0
        elif low:
            return at + 1 - control[C_AT]
        else:
            low = 1
        at += 1
    control[C_LOW] = low
    return 0


@micropython.viper
def add_up(ring: ptr32, control: ptr32, count: int):
    """Sums of V and I over the `count` pairs before C_AT, none of them before the ring's start."""
    end = control[C_AT]
    at = end - count
    v = 0
    i = 0
    while at < end:
        pair = ring[at]
        v += pair & 0xFFFF
        i += (pair >> 16) & 0xFFFF
        at += 1
    control[C_VOLTAGE] = v
    control[C_CURRENT] = i


@micropython.viper
def copy(ring: ptr32, raw: ptr32, at: int, place: int, count: int):
    end = at + count
    while at < end:
        raw[place] = ring[at]
        place += 1
        at += 1


class Capture:
    """The bins of one sweep; `begin` makes them ready for the next.

    `code_bits`: of the converters, 12 or 16.
    """

    def __init__(self, ring, ring_pairs, buffers, code_bits=12):
        self.ring = ring
        self.ring_pairs = ring_pairs
        self.code_bits = code_bits
        self.bins = buffers.bins
        self.control = buffers.control
        self.begin(0)

    def begin(self, threshold, bounce_pairs=0, raw=None, raw_first=0):
        """Forget the last sweep.

        `threshold`: current code above which the source conducts. Where the contact opens again
        within `bounce_pairs` of its first conducting, the sweep begins anew. `raw`: buffer for
        pairs to be kept one by one from pair `raw_first` on, 4 bytes each, or None.
        """
        control = self.control
        control[C_AT] = 0
        control[C_MASK] = self.ring_pairs - 1
        control[C_THRESHOLD] = threshold
        control[C_FOUND] = 0
        self.read = 0
        self.written = 0
        self.skipped = 0
        self.overruns = 0
        self.bounces = 0
        self.full = False
        self.voltage_x16 = 0
        self.current_x16 = 0
        self.raw = raw
        self.raw_first = raw_first
        self.raw_room = 0 if raw is None else len(raw) // 4
        self._bounce_pairs = bounce_pairs
        self._recent = 0  # pairs that the last call of `drain` folded
        self._begin_bins()

    def _begin_bins(self):
        self.wide = False
        self._pairs = 0
        self._bins = memory.BIN_WORDS  # that there is room for
        self.control[C_BIN] = 0
        self._resize(1)

    def _resize(self, bin_pairs):
        self.control[C_BIN_PAIRS] = bin_pairs
        self.control[C_LEFT] = bin_pairs

    def drain(self, written):
        """Take in pairs up to `written`, the ring's count since the start (mod 2**30).

        Bounded in time: what it leaves, the next call takes; see `behind`.
        """
        self._recent = 0
        if self._lapped(written):
            self.overruns += 1
            return
        self.written = written
        behind = self.behind()
        if not self.control[C_FOUND]:
            passed = conducting(self.ring, self.control, behind)
            self.skipped += passed
            self._passed(passed)
            if not self.control[C_FOUND]:
                # The last pair stays unread: the next call looks at it with its successor.
                return
            behind -= passed
        room = min(behind, DRAIN_PAIRS)
        while room and not self.full and self.control[C_FOUND]:
            taken = self._take(room)
            if not taken:
                return  # merged instead
            room -= taken

    def behind(self):
        """Pairs that have arrived, as far as `drain` was told, and are not folded yet."""
        return (self.written - self.read) & 0x3FFFFFFF

    def finish(self, written):
        """Fold all that `drain` was told of; `written` is what the ring has by now.

        Called once the ring stands still.
        """
        if self._lapped(written):
            self.overruns += 1
            return
        # Before conduction the last pair cannot be told, for want of a successor.
        while not self.full and self.behind() > 1 - self.control[C_FOUND]:
            self.drain(self.written)

    def _lapped(self, written):
        """True where the oldest unread pair is overwritten, or may be before it is read."""
        return (written - self.read) & 0x3FFFFFFF > self.ring_pairs - LAP_MARGIN

    def _take(self, most):
        """Fold up to `most` pairs, as they lie in the ring; how many. 0: the bins were merged."""
        control = self.control
        if control[C_BIN] == self._bins:
            self._merge()
            return 0
        at = control[C_AT]
        space = (self._bins - control[C_BIN] - 1) * control[C_BIN_PAIRS] + control[C_LEFT]
        count = min(most, self.ring_pairs - at, space)
        if self._bounce_pairs:
            count = min(count, self._bounce_pairs)
        control[C_COUNT] = count
        if self._bounce_pairs:
            gone = opened(self.ring, control)
            if gone:
                self._begin_anew(gone)
                return gone
            self._bounce_pairs -= count
        if self.wide:
            fold_wide(self.ring, self.bins, control)
        else:
            fold(self.ring, self.bins, control)
        if self.raw_room:
            self._keep(at, count)
        self._pairs += count
        self._recent += count
        self._passed(count)
        return count

    def _begin_anew(self, gone):
        """The contact has bounced: what came before it closed again is no part of the curve."""
        self.bounces += 1
        self.skipped += self._pairs + gone
        # What the bounces have taken of their time is not given back.
        self._bounce_pairs = max(self._bounce_pairs - gone, 1)
        self._recent = 0
        self._passed(gone)
        self._begin_bins()
        self.control[C_FOUND] = 0

    def _keep(self, at, count):
        """Copy those pairs, of the `count` at `at`, that are wanted one by one."""
        first = max(self.raw_first, self._pairs)
        after = min(self.raw_first + self.raw_room, self._pairs + count)
        if first < after:
            copy(
                self.ring, self.raw, at + first - self._pairs, first - self.raw_first, after - first
            )

    def raw_pairs(self):
        """Pairs kept one by one."""
        return min(max(self._pairs - self.raw_first, 0), self.raw_room)

    def _merge(self):
        size = self.control[C_BIN_PAIRS]
        if not self.wide:
            if 2 * size <= 1 << (16 - self.code_bits):
                double(self.bins, memory.BIN_WORDS)
                self._resize(2 * size)
                self.control[C_BIN] = memory.BIN_WORDS // 2
            else:
                widen(self.bins, memory.BIN_WORDS)
                self._resize(4 * size)
                self.control[C_BIN] = memory.BIN_WORDS // 4
                self._bins = memory.BIN_WORDS // 2
                self.wide = True
        elif size == MAX_BIN_PAIRS:
            self.full = True
        else:
            double_wide(self.bins, memory.BIN_WORDS)
            self._resize(2 * size)
            self.control[C_BIN] = memory.BIN_WORDS // 4

    def _passed(self, pairs):
        self.read = (self.read + pairs) & 0x3FFFFFFF
        self.control[C_AT] = self.read & (self.ring_pairs - 1)

    def recent_means(self):
        """Write the means over the newest pairs of the last `drain`, in sixteenths of a code, into
        `voltage_x16` and `current_x16`; False where it folded none.
        """
        # Where the newest lie on both sides of the ring's end, those behind it do.
        count = min(self._recent, MEAN_PAIRS, self.control[C_AT] or MEAN_PAIRS)
        if not count:
            return False
        if not self.control[C_AT]:
            self.control[C_AT] = self.ring_pairs
        add_up(self.ring, self.control, count)
        self.control[C_AT] &= self.ring_pairs - 1
        self.voltage_x16 = 16 * self.control[C_VOLTAGE] // count
        self.current_x16 = 16 * self.control[C_CURRENT] // count
        return True

    def bin_pairs(self):
        return self.control[C_BIN_PAIRS]

    def conducts(self):
        """True once the source was seen to conduct."""
        return self.control[C_FOUND] == 1

    def pairs(self):
        """Pairs folded so far."""
        return self._pairs

    def full_bins(self):
        """Bins that hold `bin_pairs` pairs; one more may hold what is left."""
        return self.control[C_BIN]
