"""Folding raw pairs into bins: the hot loop.

Comes in: the ring that DMA fills with pairs of codes, voltage in the low half of a word and
current in the high half. Goes out: bins of `bin_pairs` pairs each, holding sums and scatter.
When all bins are full, neighbours are merged and `bin_pairs` doubles, so a sweep of any length
fits the same memory and no pair is thrown away.

Pairs are folded in units of `bin_pairs`, 16 at most, by `fold_units`; on the RP2040 the same is
done by `fold_thumb.py`. Up to 16 a unit is a bin; beyond, units are added up in a bin. What is
less than a unit waits in the ring, and `finish` folds the rest.

Widths: a code is below 2**12, so a unit's sums are below 2**16 and its scatter, 16 squared
differences, below 2**28. A bin holds at most 2**16 pairs, so its sums stay below 2**28; its
scatter is kept as two words, the low one below 2**29. No intermediate reaches 2**30.

Time: a call of `drain` folds at most DRAIN_PAIRS or merges MERGE_BINS, so that the pulse is
renewed in between; the ring holds what arrives meanwhile.
"""

import micropython
from micropython import const

from tracer import memory

BINS = const(1024)
MAX_BIN_PAIRS = 65536
UNIT_PAIRS = const(16)
SCRATCH_UNITS = const(48)  # a call of `drain` in one piece
DRAIN_PAIRS = const(768)
LAP_MARGIN = const(64)  # pairs (256 us) that may arrive between the count and the first fold
MERGE_BINS = const(128)

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

# Words that `fold_units` is told and keeps; fold_thumb.py knows their places.
C_UNIT = const(0)  # pairs in a unit
C_LAST = const(1)  # the pair before
C_AT = const(2)  # place of the first pair in the ring, in words
C_PLACE = const(3)  # place of the first unit in the bins, in words
C_UNITS = const(4)
# Words that the other native functions are told and keep.
C_MASK = const(5)
C_THRESHOLD = const(6)
C_FOUND = const(7)
C_VOLTAGE = const(8)
C_CURRENT = const(9)
C_BIN = const(10)  # place of the bin being filled, in words
C_HELD = const(11)  # units that it holds already
C_BIN_UNITS = const(12)  # units in a bin
C_WORDS = const(13)

# Constants cannot be imported into the native code, so they are written again and compared.
if (BINS, WORDS, C_WORDS, UNIT_PAIRS, SCRATCH_UNITS) != (
    memory.BINS,
    memory.BIN_WORDS,
    memory.CONTROL_WORDS,
    memory.UNIT_PAIRS,
    memory.SCRATCH_UNITS,
):
    raise ValueError("capture.py and memory.py disagree")


@micropython.viper
def fold_units(ring: ptr32, bins: ptr32, control: ptr32):
    """Fold C_UNITS units, one after the other in the ring, into as many places of the bins."""
    at = control[C_AT]
    place = control[C_PLACE]
    last_v = control[C_LAST] & 0xFFFF
    last_i = control[C_LAST] >> 16
    units = control[C_UNITS]
    while units > 0:
        sum_v = 0
        sum_i = 0
        low_v = 0
        low_i = 0
        end = at + control[C_UNIT]
        while at < end:
            i = ring[at]
            v = i & 0xFFFF
            i = i >> 16
            at += 1
            sum_v += v
            sum_i += i
            last_v = v - last_v
            low_v += last_v * last_v
            last_v = v
            last_i = i - last_i
            low_i += last_i * last_i
            last_i = i
        bins[place] = sum_v
        bins[place + 1] = sum_i
        bins[place + 2] = low_v
        bins[place + 3] = 0
        bins[place + 4] = low_i
        bins[place + 5] = 0
        place += WORDS
        units -= 1
    control[C_LAST] = last_v | (last_i << 16)


@micropython.viper
def add_units(bins: ptr32, units: ptr32, control: ptr32):
    """Add C_UNITS units, from the first on, to bins of C_BIN_UNITS units, from C_BIN on."""
    place = control[C_BIN]
    held = control[C_HELD]
    source = 0
    end = control[C_UNITS] * WORDS
    while source < end:
        if held == 0:
            bins[place] = units[source]
            bins[place + 1] = units[source + 1]
            bins[place + 2] = units[source + 2]
            bins[place + 3] = 0
            bins[place + 4] = units[source + 4]
            bins[place + 5] = 0
        else:
            bins[place] = bins[place] + units[source]
            bins[place + 1] = bins[place + 1] + units[source + 1]
            low = bins[place + 2] + units[source + 2]
            bins[place + 2] = low & (SPLIT - 1)
            bins[place + 3] = bins[place + 3] + (low >> SPLIT_BITS)
            low = bins[place + 4] + units[source + 4]
            bins[place + 4] = low & (SPLIT - 1)
            bins[place + 5] = bins[place + 5] + (low >> SPLIT_BITS)
        source += WORDS
        held += 1
        if held == control[C_BIN_UNITS]:
            held = 0
            place += WORDS


@micropython.viper
def merge(bins: ptr32, first: int, count: int):
    """Merge bins 2j and 2j + 1 into bin j, for `count` bins j from `first` on."""
    target = first * WORDS
    source = target + target
    end = target + count * WORDS
    while target < end:
        bins[target] = bins[source] + bins[source + 6]
        bins[target + 1] = bins[source + 1] + bins[source + 7]
        low = bins[source + 2] + bins[source + 8]
        bins[target + 2] = low & (SPLIT - 1)
        bins[target + 3] = bins[source + 3] + bins[source + 9] + (low >> SPLIT_BITS)
        low = bins[source + 4] + bins[source + 10]
        bins[target + 4] = low & (SPLIT - 1)
        bins[target + 5] = bins[source + 5] + bins[source + 11] + (low >> SPLIT_BITS)
        source += WORDS + WORDS
        target += WORDS


@micropython.viper
def add_up(units: ptr32, control: ptr32):
    """Add the sums of V and I of the units just folded to the control words."""
    v = control[C_VOLTAGE]
    i = control[C_CURRENT]
    place = control[C_PLACE]
    end = place + control[C_UNITS] * WORDS
    while place < end:
        v += units[place]
        i += units[place + 1]
        place += WORDS
    control[C_VOLTAGE] = v
    control[C_CURRENT] = i


@micropython.viper
def unwrap(ring: ptr32, out: ptr32, control: ptr32):
    """Copy one unit that goes over the end of the ring."""
    at = control[C_AT]
    number = 0
    while number < control[C_UNIT]:
        out[number] = ring[(at + number) & control[C_MASK]]
        number += 1


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
        first = ring[at] >> 16
        at = (at + 1) & control[C_MASK]
        done += 1
        if first > threshold and (ring[at] >> 16) > threshold:
            control[C_LAST] = ring[at]
            control[C_FOUND] = 1
            break
    control[C_AT] = at
    return done


class Capture:
    """The bins of one sweep; `begin` makes them ready for the next."""

    def __init__(self, ring, ring_pairs, buffers, fold=None):
        self.ring = ring
        self.ring_pairs = ring_pairs
        self.bins = buffers.bins
        self.control = buffers.control
        self.scratch = buffers.scratch
        self.wrapped = buffers.wrapped
        self.fold = fold or fold_units
        self.begin(0)

    def begin(self, threshold):
        """Forget the last sweep. `threshold`: current code above which the source conducts."""
        control = self.control
        control[C_UNIT] = 1
        control[C_AT] = 0
        control[C_MASK] = self.ring_pairs - 1
        control[C_THRESHOLD] = threshold
        control[C_FOUND] = 0
        self.read = 0
        self.written = 0
        self.skipped = 0
        self.overruns = 0
        self.full = False
        self.voltage_x16 = 0
        self.current_x16 = 0
        self._bin_pairs = 1
        self._bin = 0  # being filled
        self._held = 0  # pairs that it holds already; always 0 while a unit is a bin
        self._merged = -1  # bins merged so far, -1 while not merging
        self._recent = 0  # pairs that the last call of `drain` folded

    def drain(self, written):
        """Take in pairs up to `written`, the ring's count since the start (mod 2**30).

        Bounded in time: what it leaves, the next call takes; see `behind`.
        """
        self._recent = 0
        behind = (written - self.read) & 0x3FFFFFFF
        if self._lapped(written):
            self.overruns += 1
            return
        self.written = written
        self.control[C_VOLTAGE] = 0
        self.control[C_CURRENT] = 0
        if self._merged >= 0:
            self._merge_some()
            return
        if not self.control[C_FOUND]:
            passed = conducting(self.ring, self.control, behind)
            self.skipped += passed
            self._passed(passed)
            behind -= passed
            if not self.control[C_FOUND]:
                # The last pair stays unread: the next call looks at it with its successor.
                return
        room = DRAIN_PAIRS
        unit = self.control[C_UNIT]
        while unit <= min(behind, room) and self._merged < 0 and not self.full:
            folded = self._fold(min(behind, room) // unit)
            behind -= folded
            room -= folded

    def behind(self):
        """Pairs that have arrived, as far as `drain` was told, and are not folded yet."""
        return (self.written - self.read) & 0x3FFFFFFF

    def finish(self, written):
        """Fold all that `drain` was told of; `written` is what the ring has by now.

        Called once the ring stands still.
        """
        while self._merged >= 0:  # half merged, the bins mean nothing
            self._merge_some()
        if self._lapped(written):
            self.overruns += 1
            return
        while self._merged >= 0 or (
            self.control[C_FOUND] and not self.full and self.behind() >= self.control[C_UNIT]
        ):
            self.drain(self.written)
        rest = self.behind()
        if rest and self.control[C_FOUND] and not self.full:
            unit = self.control[C_UNIT]
            self.control[C_UNIT] = rest
            self._fold(1)
            self.control[C_UNIT] = unit

    def _lapped(self, written):
        """True where the oldest unread pair is overwritten, or may be before it is read."""
        return (written - self.read) & 0x3FFFFFFF > self.ring_pairs - LAP_MARGIN

    def _fold(self, units):
        """Fold up to so many whole units, as they lie in the ring; the pairs folded."""
        control = self.control
        unit = control[C_UNIT]
        at = control[C_AT]
        ring = self.ring
        straight = (self.ring_pairs - at) // unit
        if straight == 0:
            # This unit goes over the end of the ring.
            unwrap(ring, self.wrapped, control)
            ring = self.wrapped
            control[C_AT] = 0
            units = 1
        else:
            units = min(units, straight)
        if self._bin_pairs <= UNIT_PAIRS:
            units = min(units, BINS - self._bin)
            control[C_PLACE] = WORDS * self._bin
            target = self.bins
        else:
            room = (BINS - self._bin) * self._bin_pairs - self._held
            # At the end of a sweep a unit may be of any size, and there is room for it.
            units = min(units, SCRATCH_UNITS, room // unit or 1)
            control[C_PLACE] = 0
            target = self.scratch
        control[C_UNITS] = units
        self.fold(ring, target, control)
        add_up(target, control)
        self._recent += units * unit
        self._passed(units * unit)
        self._placed(units * unit)
        return units * unit

    def _placed(self, pairs):
        """Count what was folded into bins, and see whether they are full."""
        if self._bin_pairs > UNIT_PAIRS:
            control = self.control
            control[C_BIN] = WORDS * self._bin
            control[C_HELD] = self._held // UNIT_PAIRS
            control[C_BIN_UNITS] = self._bin_pairs // UNIT_PAIRS
            add_units(self.bins, self.scratch, control)
        pairs += self._held
        self._bin += pairs // self._bin_pairs
        self._held = pairs % self._bin_pairs
        if self._bin == BINS:
            if self._bin_pairs == MAX_BIN_PAIRS:
                self.full = True
            else:
                self._merged = 0

    def _merge_some(self):
        merge(self.bins, self._merged, MERGE_BINS)
        self._merged += MERGE_BINS
        if self._merged == BINS // 2:
            self._merged = -1
            self._bin = BINS // 2
            self._bin_pairs *= 2
            self.control[C_UNIT] = min(self._bin_pairs, UNIT_PAIRS)

    def _passed(self, pairs):
        self.read = (self.read + pairs) & 0x3FFFFFFF
        self.control[C_AT] = self.read & (self.ring_pairs - 1)

    def recent_means(self):
        """Write the means over what the last `drain` folded, in sixteenths of a code, into
        `voltage_x16` and `current_x16`; False where that was nothing.
        """
        if not self._recent:
            return False
        self.voltage_x16 = 16 * self.control[C_VOLTAGE] // self._recent
        self.current_x16 = 16 * self.control[C_CURRENT] // self._recent
        return True

    def bin_pairs(self):
        return self._bin_pairs

    def conducts(self):
        """True once the source was seen to conduct."""
        return self.control[C_FOUND] == 1

    def pairs(self):
        """Pairs folded so far."""
        return self._bin * self._bin_pairs + self._held

    def used_bins(self):
        """Bins that hold at least one pair."""
        return self._bin + (1 if self._held else 0)
