"""Knot records, as on the wire, written from the bins when they are asked for.

A record holds the sums over all pairs of a knot. Its scatter is the sum of squared second
differences of successive bins, which a ramp does not add to; the knot's own bins are the last of
the three. The first two bins of a sweep, and a last one
that is not full, add nothing to it.

Widths: sums and squares are added up in two words, the low one of 24 bits; a bin is below 2**31
and a difference is taken as 16383 at most.
"""

import micropython
from micropython import const

from tracer import memory

RECORD_BYTES = const(40)

# Words that `write` is told.
R_FIRST = const(0)  # number of the first knot
R_COUNT = const(1)
R_OUT = const(2)  # place of the first byte
R_WIDE = const(3)
R_BIN_PAIRS = const(4)
R_REST = const(5)  # pairs in the bin after the full ones
R_KNOTS = const(6)
R_PAIR_US = const(7)
R_TIME = const(8)  # four parts of 16 bits: when conduction began, us since boot
R_V = const(12)  # low and high word of the four sums
R_WORDS = const(20)

if memory.PLACING_WORDS < R_WORDS:
    raise ValueError("records.py and memory.py disagree")


@micropython.viper
def add_currents(bins: ptr32, r: ptr32):
    """Sum of the current codes of the first R_COUNT bins, full or not, into R_V."""
    wide = r[R_WIDE]
    last = r[R_COUNT]
    low = 0
    high = 0
    number = 0
    while number < last:
        one = bins[number + number + 1] if wide else (bins[number] >> 16) & 0xFFFF
        low += one & 0xFFFFFF
        high += (one >> 24) + (low >> 24)
        low = low & 0xFFFFFF
        number += 1
    r[R_V] = low
    r[R_V + 1] = high


@micropython.viper
def write(bins: ptr32, cuts: ptr16, out: ptr8, r: ptr32):
    """Write R_COUNT records."""
    wide = r[R_WIDE]
    size = r[R_BIN_PAIRS]
    knot = r[R_FIRST]
    last = knot + r[R_COUNT]
    put = r[R_OUT]
    while knot < last:
        first = int(cuts[knot])
        full = int(cuts[knot + 1])
        pairs = (full - first) * size
        after = full
        if knot == r[R_KNOTS] - 1 and r[R_REST] > 0:
            pairs += r[R_REST]
            after += 1
        channel = 0
        while channel < 2:
            low = 0
            high = 0
            scatter_low = 0
            scatter_high = 0
            before = 0
            step = 0
            number = first - 2
            if number < 0:
                number = 0
            start = number
            while number < after:
                if wide:
                    one = bins[number + number + channel]
                elif channel:
                    one = (bins[number] >> 16) & 0xFFFF
                else:
                    one = bins[number] & 0xFFFF
                if number >= first:
                    low += one & 0xFFFFFF
                    high += (one >> 24) + (low >> 24)
                    low = low & 0xFFFFFF
                # Never beyond 2**29 on either side, so that two of them can be subtracted.
                change = one - before
                if change > 536870911:
                    change = 536870911
                if change < -536870911:
                    change = -536870911
                if number >= first and number < full and number > start + 1:
                    bend = change - step
                    if bend < 0:
                        bend = 0 - bend
                    if bend > 16383:
                        bend = 16383
                    scatter_low += bend * bend
                    scatter_high += scatter_low >> 24
                    scatter_low = scatter_low & 0xFFFFFF
                step = change
                before = one
                number += 1
            r[R_V + 2 * channel] = low
            r[R_V + 2 * channel + 1] = high
            r[R_V + 4 + 2 * channel] = scatter_low
            r[R_V + 5 + 2 * channel] = scatter_high
            channel += 1
        # time of the middle of the voltage conversions
        carry = (2 * first * size + pairs - 1) * r[R_PAIR_US] >> 1
        number = 0
        while number < 4:
            carry += r[R_TIME + number]
            out[put] = carry & 255
            out[put + 1] = (carry >> 8) & 255
            carry = carry >> 16
            put += 2
            number += 1
        number = 0
        while number < 8:
            if number == 4:
                # the count stands between the sums and the scatters
                channel = 0
                while channel < 4:
                    out[put] = pairs & 255
                    pairs = pairs >> 8
                    put += 1
                    channel += 1
            # three bytes of a low word; of a high word three in a sum, five in a scatter
            one = r[R_V + number]
            many = 3
            if number > 4 and number & 1:
                many = 5
            while many > 0:
                out[put] = one & 255
                one = one >> 8
                put += 1
                many -= 1
            number += 1
        knot += 1


def current_sum(r, bins, capture):
    """Sum of the current codes of all pairs; `describe` has been called."""
    r[R_COUNT] = capture.full_bins() + (1 if r[R_REST] else 0)
    add_currents(bins, r)
    return int(r[R_V + 1]) << 24 | int(r[R_V])


def describe(r, capture, knots, conducting_us, pair_us):
    """Tell `write` what the bins hold and when they began."""
    full = capture.full_bins()
    r[R_WIDE] = 1 if capture.wide else 0
    r[R_BIN_PAIRS] = capture.bin_pairs()
    r[R_REST] = capture.pairs() - full * capture.bin_pairs()
    r[R_KNOTS] = knots
    r[R_PAIR_US] = pair_us
    for number in range(4):
        r[R_TIME + number] = (conducting_us >> 16 * number) & 0xFFFF
