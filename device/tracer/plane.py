"""The curve in the plane, as knots are placed by it: lengths, noise, and what a knot misses.

Comes in: the bins of a finished capture. Goes out, in the words of `work`: running sums of the
bins, and the errors of the straight lines between the middles of neighbouring cells. A cell is
the run of bins from one cut to the next; which cuts there are is decided in `knots.py`.

The plane is (V / V at the end, I / largest I). Lengths in it are in units of 2**-20, errors in
units of 2**-26, an error's lowest bit telling on which side of the border between its two cells it
lies. No intermediate reaches 2**31; each function says its own widths.
"""

import micropython
from micropython import const

# The ring's words while knots are placed.
SUMS_V = const(0)  # running sums of the bins' means, one for each group of bins
SUMS_I = const(1023)
FIRST = const(2046)  # three lists of as many words as there are knots
SECOND = const(2558)
THIRD = const(3070)
BEST = const(3582)  # the best cuts so far
WORK_WORDS = 4095

# Words that the native functions are told and keep.
K_BINS = const(0)
K_KNOTS = const(1)
K_WIDE = const(2)  # 1: a bin is two words
K_UP = const(3)  # shifts that make of a bin's sum its mean, the full scale being 2**18
K_DOWN = const(4)
K_SCALE_V = const(5)  # from means, the full scale being 2**20, to the plane: times this, shifted
K_SHIFT_V = const(6)
K_SCALE_I = const(7)
K_SHIFT_I = const(8)
K_ONE = const(9)  # cells from the first of a segment to its second, and to its end
K_TWO = const(10)
K_COUNT = const(11)
K_OUT = const(12)
K_NOISE = const(13)
K_PHASE = const(14)
K_RIGHT = const(15)  # 1: borders move to the right
# 16 to 26 are for plane_thumb.py.
K_FIRST = const(27)  # the first knot ends here at the latest
K_PLACES = const(28)  # nine places, and the running sums there
K_AT_V = const(37)
K_AT_I = const(46)
K_WORDS = const(55)


@micropython.viper
def sum_up(bins: ptr32, work: ptr32, k: ptr32):
    """Write the running sums of the bins' means, below 2**18 each, so below 2**30."""
    up = k[K_UP]
    down = k[K_DOWN]
    wide = k[K_WIDE]
    groups = k[K_BINS] >> 2
    v = 0
    i = 0
    place = 0
    group = 0
    while group < groups:
        work[SUMS_V + group] = v
        work[SUMS_I + group] = i
        group += 1
        end = place + (4 << wide)
        while place < end:
            one = bins[place]
            if wide:
                v += (one << up) >> down
                i += (bins[place + 1] << up) >> down
                place += 2
            else:
                v += (one & 0xFFFF) << up >> down
                i += ((one >> 16) & 0xFFFF) << up >> down
                place += 1
    work[SUMS_V + groups] = v
    work[SUMS_I + groups] = i


@micropython.viper
def largest(work: ptr32, base: int, groups: int) -> int:
    """The largest sum over one group."""
    most = 0
    group = 0
    while group < groups:
        one = work[base + group + 1] - work[base + group]
        if one > most:
            most = one
        group += 1
    return most


@micropython.viper
def along(work: ptr32, k: ptr32):
    """For each group its share of the curve's length; the noise of one bin; the first knot's end.

    The first knot ends where the voltage has risen by 1/32 of its range, so that the curve begins
    near the axis although it may be straight there for long.

    Length is V + (largest I - I), which noise does not add to, and a little for the time.
    Noise is from the mean third difference of V + I over groups: sqrt(20) of a group's deviation
    times sqrt(2 / pi); a bin's is twice a group's.
    """
    groups = k[K_BINS] >> 2
    down_v = k[K_SHIFT_V]
    down_i = k[K_SHIFT_I]
    first_v = work[SUMS_V + 1]
    first_i = work[SUMS_I + 1]
    reached = 0
    roughness = 0
    k[K_FIRST] = k[K_BINS]
    group = 0
    while group < groups:
        d = work[SUMS_V + group + 1] - work[SUMS_V + group] - first_v
        x = (d >> 3) * k[K_SCALE_V] >> down_v - 3
        if x > 32767 and group > 0 and k[K_FIRST] == k[K_BINS]:
            k[K_FIRST] = group << 2
        d = work[SUMS_I + group + 1] - work[SUMS_I + group] - first_i
        y = (d >> 3) * k[K_SCALE_I] >> down_i - 3
        share = 3
        x -= y
        if x > 4194303:  # four times the plane
            x = 4194303
        if x > reached:
            share += (x - reached) >> 5
            reached = x
        work[FIRST + group] = share
        if group > 2:
            at = SUMS_V + group
            x = work[at + 1] - work[at] - 3 * (work[at] - work[at - 1])
            x += 3 * (work[at - 1] - work[at - 2]) - (work[at - 2] - work[at - 3])
            at = SUMS_I + group
            y = work[at + 1] - work[at] - 3 * (work[at] - work[at - 1])
            y += 3 * (work[at - 1] - work[at - 2]) - (work[at - 2] - work[at - 3])
            if x > 131071:
                x = 131071
            if x < -131071:
                x = -131071
            if y > 131071:
                y = 131071
            if y < -131071:
                y = -131071
            x = (x * k[K_SCALE_V] >> down_v) + (y * k[K_SCALE_I] >> down_i)
            if x < 0:
                x = 0 - x
            if x > 1048575:
                x = 1048575
            roughness += x
        group += 1
    if groups > 3:
        roughness = roughness // (groups - 3)
    k[K_NOISE] = roughness * 9 >> 4


@micropython.viper
def errors(bins: ptr32, work: ptr32, cuts: ptr16, k: ptr32):
    """Write, for K_COUNT segments, how far the curve lies from the straight line.

    Segment j goes from the middle of the cell from cut j to cut j + K_ONE, to the middle of the
    cell that follows, up to cut j + K_TWO. The middle is the mean over half a cell.

    Means are below 2**22; a difference times its scale, below 2**12, is taken with
    four bits less where it reaches 2**18. Vectors are shifted below 2**15, one of the two
    factors below 2**14, so products stay below 2**29 and their difference below 2**30.
    """
    up = k[K_UP]
    down = k[K_DOWN]
    wide = k[K_WIDE]
    segment = 0
    while segment < k[K_COUNT]:
        a = cuts[segment]
        b = cuts[segment + k[K_ONE]]
        c = cuts[segment + k[K_TWO]]
        inset = (b - a) >> 2
        k[K_PLACES] = a + inset
        k[K_PLACES + 1] = b - inset
        inset = (c - b) >> 2
        k[K_PLACES + 2] = b + inset
        k[K_PLACES + 3] = c - inset
        # Four pieces from middle to middle, parted at b; the longer side gets more of them.
        a = (a + b) >> 1
        c = (b + c + 1) >> 1
        k[K_PLACES + 4] = a
        k[K_PLACES + 8] = c
        if 3 * (b - a) < c - b:
            k[K_PLACES + 5] = b
            k[K_PLACES + 6] = b + ((c - b) >> 2)
            k[K_PLACES + 7] = b + ((c - b) >> 1)
        elif 3 * (c - b) < b - a:
            k[K_PLACES + 5] = a + ((b - a) >> 2)
            k[K_PLACES + 6] = a + ((b - a) >> 1)
            k[K_PLACES + 7] = b
        else:
            k[K_PLACES + 5] = (a + b) >> 1
            k[K_PLACES + 6] = b
            k[K_PLACES + 7] = (b + c + 1) >> 1
        number = 0
        while number < 9:
            end = k[K_PLACES + number]
            at = end >> 2
            v = work[SUMS_V + at]
            i = work[SUMS_I + at]
            at = at << 2
            if wide:
                while at < end:
                    v += (bins[at + at] << up) >> down
                    i += (bins[at + at + 1] << up) >> down
                    at += 1
            else:
                while at < end:
                    one = bins[at]
                    v += (one & 0xFFFF) << up >> down
                    i += ((one >> 16) & 0xFFFF) << up >> down
                    at += 1
            k[K_AT_V + number] = v
            k[K_AT_I + number] = i
            number += 1
        x0 = 0
        y0 = 0
        dx = 0
        dy = 0
        long = 1
        most = 0
        side = 0
        shift = 0
        number = 0
        while number < 8:
            many = k[K_PLACES + number + 1] - k[K_PLACES + number]
            if many > 0:
                x = k[K_AT_V + number + 1] - k[K_AT_V + number]
                y = k[K_AT_I + number + 1] - k[K_AT_I + number]
                if many <= 256:
                    x = (x << 4) // many
                    y = (y << 4) // many
                elif many <= 1024:
                    x = (x << 2) // many << 2
                    y = (y << 2) // many << 2
                else:
                    x = x // many << 4
                    y = y // many << 4
                if number == 0:
                    x0 = x
                    y0 = y
                else:
                    x -= x0
                    y -= y0
                    if x < 262144 and x > -262144:
                        x = x * k[K_SCALE_V] >> k[K_SHIFT_V]
                    else:
                        x = (x >> 4) * k[K_SCALE_V] >> k[K_SHIFT_V] - 4
                    if y < 262144 and y > -262144:
                        y = y * k[K_SCALE_I] >> k[K_SHIFT_I]
                    else:
                        y = (y >> 4) * k[K_SCALE_I] >> k[K_SHIFT_I] - 4
                    if number == 2:
                        long = x
                        if x < 0:
                            long = 0 - x
                        at = y
                        if y < 0:
                            at = 0 - y
                        if at > long:
                            long = at
                            at = x
                            if x < 0:
                                at = 0 - x
                        while long >= 16384:
                            long = long >> 1
                            at = at >> 1
                            shift += 1
                        # Its length, 7 % too long at most.
                        long += (at * 3 >> 3) + 1
                        dx = x >> shift
                        dy = y >> shift
                    else:
                        x = x >> shift
                        y = y >> shift
                        if x > 32767:
                            x = 32767
                        if x < -32767:
                            x = -32767
                        if y > 32767:
                            y = 32767
                        if y < -32767:
                            y = -32767
                        x = x * dy - y * dx
                        if x < 0:
                            x = 0 - x
                        if x > most:
                            most = x
                            side = 0
                            if k[K_PLACES + number] >= b:
                                side = 1
            if number < 4:
                number += 2
            else:
                number += 1
        if most < 134217728:  # shifted first where that fits, for the digits
            most = (most << 3) // long
        else:
            most = most // long
            most = most << 3
        # Errors end below 2**29, above which other files mark what is no error.
        far = 268435455 >> shift
        if most > far:
            most = far
        work[k[K_OUT] + segment] = (most << shift) << 1 | side
        segment += 1
