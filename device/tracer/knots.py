"""Placing the knots: where the curve bends, there the points stand.

Comes in: the bins of a finished capture. Goes out: knot records, each the sums over a run of
whole bins, so that every pair is in exactly one knot. Integers only, so that every rung gives
the same knots.

Method: straight-line interpolation between points errs by (1/8) curvature x spacing^2, so for
a given number of points the largest error is least when sqrt(curvature) integrated along the
curve is the same between all neighbours (equidistribution; de Boor, "Good approximation by
splines with variable knots", 1973, from memory). The curve is looked at in the plane
(V / V at the end, I / largest I), on about a hundred stretches of equal length, so that noise
of single bins does not pass for curvature.
"""

import micropython
from micropython import const

from kneewire.messages import KNOT_BYTES
from tracer.capture import (
    B_CURRENT,
    B_CURRENT_HIGH,
    B_CURRENT_LOW,
    B_VOLTAGE,
    B_VOLTAGE_HIGH,
    B_VOLTAGE_LOW,
    SPLIT_BITS,
    WORDS,
)
from tracer.memory import MAX_STRETCHES

SIDE = const(4096)  # the plane's unit: V at the end, or the largest I
STRETCH = const(72)  # length of a stretch, so about 2 * 4096 / 72 of them
FLOOR_PERCENT = const(20)  # share of the knots placed by length alone, for straight parts


def root(number):
    """Integer square root, rounded down."""
    if number < 2:
        return number
    guess = 1 << ((bit_length(number) + 1) // 2)
    while True:
        better = (guess + number // guess) // 2
        if better >= guess:
            return guess
        guess = better


def bit_length(number):
    bits = 0
    while number:
        number >>= 1
        bits += 1
    return bits


def plane(bins, used, bin_pairs, last_pairs, zero_voltage_x16, zero_current_x16, xs, ys):
    """Write the `used` bins into `xs` and `ys` as points of the plane, 0 to SIDE."""
    widest = 16
    highest = 16
    for number in range(used):
        pairs = 16 * (last_pairs if number == used - 1 else bin_pairs)
        place = number * WORDS
        x = 256 * bins[place + B_VOLTAGE] // pairs - zero_voltage_x16
        y = 256 * bins[place + B_CURRENT] // pairs - zero_current_x16
        xs[number] = x
        ys[number] = y
        if x > widest:
            widest = x
        if y > highest:
            highest = y
    for number in range(used):
        xs[number] = xs[number] * SIDE // widest
        ys[number] = ys[number] * SIDE // highest


def stretches(xs, ys, used, starts):
    """Write the first bins of stretches about STRETCH long, then `used`; returns how many.

    Where noise would make more of them than there is room for, the rest is one stretch.
    """
    count = 0
    starts[0] = 0
    x = xs[0]
    y = ys[0]
    for number in range(1, used):
        dx = xs[number] - x
        dy = ys[number] - y
        if dx * dx + dy * dy >= STRETCH * STRETCH:
            count += 1
            starts[count] = number
            x = xs[number]
            y = ys[number]
            if count == MAX_STRETCHES - 1:
                break
    if count and used - starts[count] < 2:
        count -= 1
    starts[count + 1] = used
    return count + 1


def centres(xs, starts, count, out):
    """Write the mean of each stretch."""
    for number in range(count):
        first = starts[number]
        after = starts[number + 1]
        total = 0
        for place in range(first, after):
            total += xs[place]
        out[number] = total // (after - first)


def weights(buffers, count):
    """Write, for each of `count` stretches, its share of the knots (any unit)."""
    px = buffers.px
    py = buffers.py
    lengths = buffers.lengths
    turns = buffers.turns
    shares = buffers.shares
    centres(buffers.xs, buffers.starts, count, px)
    centres(buffers.ys, buffers.starts, count, py)
    length_total = 0
    for number in range(count):
        before = max(number - 1, 0)
        after = min(number + 1, count - 1)
        dx = px[after] - px[before]
        dy = py[after] - py[before]
        lengths[number] = max(root(dx * dx + dy * dy) // 2, 1)
        length_total += lengths[number]
        turns[number] = 0
    for number in range(1, count - 1):
        ax = px[number] - px[number - 1]
        ay = py[number] - py[number - 1]
        bx = px[number + 1] - px[number]
        by = py[number + 1] - py[number]
        size = max(root(ax * ax + ay * ay) * root(bx * bx + by * by), 1)
        # The sine of the turn, in units of 2**-14; convex and concave bends count alike.
        turns[number] = abs(ax * by - ay * bx) * 16384 // size
    bend_total = 1
    for number in range(count):
        before = turns[max(number - 1, 0)]
        after = turns[min(number + 1, count - 1)]
        smooth = (before + 2 * turns[number] + after) // 4
        # sqrt(turn / length) * length
        shares[number] = root(smooth * lengths[number] * 256)
        bend_total += shares[number]
    floor = FLOOR_PERCENT * 1024
    for number in range(count):
        shares[number] = (
            (102400 - floor) * shares[number] // bend_total
            + floor * lengths[number] // length_total
            + 1
        )


def cuts(starts, shares, count, knots, firsts):
    """Write the first bins of the knots, rising, each with a bin of its own at least, and the
    end; returns how many knots there are: `knots`, or as many as there are bins."""
    used = starts[count]
    knots = min(knots, used)
    total = 0
    for number in range(count):
        total += shares[number]
    firsts[0] = 0
    stretch = 0
    passed = 0  # shares of the stretches before `stretch`
    for knot in range(1, knots):
        target = total * knot // knots
        while passed + shares[stretch] <= target:
            passed += shares[stretch]
            stretch += 1
        first = starts[stretch]
        many = starts[stretch + 1] - first
        cut = first + (target - passed) * many // shares[stretch]
        # Every knot keeps a bin, and leaves one for each knot still to come.
        firsts[knot] = min(max(cut, firsts[knot - 1] + 1), used - (knots - knot))
    firsts[knots] = used
    return knots


def pack(out, number, time_us, sums):
    """Write one knot record at its place in `out`; layout as in the catalogue's KNOT."""
    place = number * KNOT_BYTES
    out[place : place + 8] = time_us.to_bytes(8, "little")
    out[place + 8 : place + 14] = sums[0].to_bytes(6, "little")
    out[place + 14 : place + 20] = sums[1].to_bytes(6, "little")
    out[place + 20 : place + 24] = sums[2].to_bytes(4, "little")
    out[place + 24 : place + 32] = sums[3].to_bytes(8, "little")
    out[place + 32 : place + 40] = sums[4].to_bytes(8, "little")


@micropython.native
def sum_bins(bins, first, after):
    """Sums of V, I and their scatter over bins `first` to before `after`."""
    v = i = vs = cs = 0
    for number in range(first, after):
        place = number * WORDS
        v += bins[place + B_VOLTAGE]
        i += bins[place + B_CURRENT]
        vs += bins[place + B_VOLTAGE_LOW] + (bins[place + B_VOLTAGE_HIGH] << SPLIT_BITS)
        cs += bins[place + B_CURRENT_LOW] + (bins[place + B_CURRENT_HIGH] << SPLIT_BITS)
    return v, i, vs, cs


def place(capture, knots, zero_voltage_x16, zero_current_x16, conducting_us, pair_us, buffers):
    """Write the knots of a capture into the buffer for records; returns how many."""
    used = capture.used_bins()
    if used == 0:
        return 0
    bin_pairs = capture.bin_pairs()
    last_pairs = capture.pairs() - (used - 1) * bin_pairs
    xs = buffers.xs
    ys = buffers.ys
    plane(capture.bins, used, bin_pairs, last_pairs, zero_voltage_x16, zero_current_x16, xs, ys)
    count = stretches(xs, ys, used, buffers.starts)
    weights(buffers, count)
    firsts = buffers.firsts
    knots = cuts(buffers.starts, buffers.shares, count, knots, firsts)
    for number in range(knots):
        first = firsts[number]
        after = firsts[number + 1]
        v, i, vs, cs = sum_bins(capture.bins, first, after)
        pairs = (after - first) * bin_pairs
        if after == used:
            pairs -= bin_pairs - last_pairs
        time_us = conducting_us + pair_us * first * bin_pairs + pair_us * (pairs - 1) // 2
        pack(buffers.records, number, time_us, (v, i, pairs, vs, cs))
    return knots
