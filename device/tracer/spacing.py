"""Moving the cuts between knots: the native part of `knots.py`.

Comes in: errors or lengths, in the words of `work` as `plane.py` lays them out. Goes out: cuts.
"""

import micropython
from micropython import const

from tracer import plane

# Constants cannot be imported into the native code, so they are written again and compared.
FIRST = const(2046)
SECOND = const(2558)
THIRD = const(3070)
BEST = const(3582)
SUMS_V = const(0)
SUMS_I = const(1023)
K_BINS = const(0)
K_KNOTS = const(1)
K_SCALE_V = const(5)
K_SHIFT_V = const(6)
K_SCALE_I = const(7)
K_SHIFT_I = const(8)
K_NOISE = const(13)
K_PHASE = const(14)
K_RIGHT = const(15)
K_FIRST = const(27)

if (FIRST, SECOND, THIRD, BEST, SUMS_I) != (
    plane.FIRST,
    plane.SECOND,
    plane.THIRD,
    plane.BEST,
    plane.SUMS_I,
) or (K_SCALE_V, K_SHIFT_I, K_NOISE, K_RIGHT, K_FIRST) != (
    plane.K_SCALE_V,
    plane.K_SHIFT_I,
    plane.K_NOISE,
    plane.K_RIGHT,
    plane.K_FIRST,
):
    raise ValueError("spacing.py and plane.py disagree")


@micropython.viper
def cut(work: ptr32, cuts: ptr16, trial: ptr16, k: ptr32, cells: int):
    """Write K_KNOTS new cuts to `trial`, equal shares of the weights in FIRST.

    `cells`: 0 where the weights are those of the groups, else of so many cells of `cuts`.
    The first and the last knot get three tenths of a share, so that they stand near the ends.
    The sum of the weights stays below 2**17.6, so that 5120 of it stay below 2**30.
    """
    knots = k[K_KNOTS]
    bins = k[K_BINS]
    many = cells
    if cells == 0:
        many = bins >> 2
    total = 0
    cell = 0
    while cell < many:
        total += work[FIRST + cell]
        cell += 1
    trial[0] = 0
    trial[knots] = bins
    cell = 0
    passed = 0
    left = 0
    knot = 1
    while knot < knots:
        target = (10 * knot - 7) * total // (10 * knots - 14)
        while cell < many - 1 and passed + work[FIRST + cell] <= target:
            passed += work[FIRST + cell]
            cell += 1
        if cells == 0:
            first = cell << 2
            wide = 4
        else:
            first = cuts[cell]
            wide = cuts[cell + 1] - first
        weight = work[FIRST + cell]
        place = first + ((target - passed) * wide + (weight >> 1)) // weight
        if knot == 1 and place > k[K_FIRST]:
            place = k[K_FIRST]
        # Every knot keeps a bin, and leaves one for each knot still to come.
        if place <= left:
            place = left + 1
        if place > bins - knots + knot:
            place = bins - knots + knot
        trial[knot] = place
        left = place
        knot += 1


@micropython.viper
def respace(work: ptr32, cuts: ptr16, k: ptr32):
    """From the errors in FIRST, weights of the knots in FIRST, for `cut`.

    A weight is sqrt(error), at least three tenths of its neighbours' per length, so that sizes
    change step by step; on top comes a share by length, 3 % where noise has no part in the
    errors. Roots stay below 2**15, their sum below 2**24, the sum of the weights below 2**17.6.
    """
    knots = k[K_KNOTS]
    bins = k[K_BINS]
    groups = bins >> 2
    noise = k[K_NOISE]
    if noise > 32767:
        noise = 32767
    roots = 0
    noises = 0
    lengths = 0
    before = 0
    here = 0
    root = 1
    u = 0
    knot = 0
    while knot < knots:
        # sqrt of this segment's error, and of what noise would make of it
        many = cuts[knot + 1] - cuts[knot]
        turn = 0
        while turn < 3:
            if turn == 0:
                rest = 0
                if knot < knots - 1:
                    rest = work[FIRST + knot]
                    if rest > 16777215:
                        rest = 16777215
                rest = rest << 6
            elif turn == 1:
                rest = many << 8
            else:
                rest = (noise << 11) // root
                if rest > 16777215:
                    rest = 16777215
                rest = rest << 6
            root = 0
            bit = 1 << 28
            while bit > rest:
                bit = bit >> 2
            while bit > 0:
                if rest >= root + bit:
                    rest -= root + bit
                    root = (root >> 1) + bit
                else:
                    root = root >> 1
                bit = bit >> 2
            if turn == 0:
                here = root
            if root == 0:
                root = 1
            turn += 1
        noises += root
        if knot == 0:
            before = here
        if knot == knots - 1:
            here = before
        work[SECOND + knot] = (before + here) >> 1
        roots += (before + here) >> 1
        before = here
        # length along the curve, up to the group of the next cut
        at = cuts[knot + 1] >> 2
        if at >= groups:
            at = groups - 1
        x = (work[SUMS_V + at + 1] - work[SUMS_V + at]) >> 3
        y = (work[SUMS_I + at + 1] - work[SUMS_I + at]) >> 3
        x = x * k[K_SCALE_V] >> k[K_SHIFT_V] - 3
        y = y * k[K_SCALE_I] >> k[K_SHIFT_I] - 3
        here = x - y
        if here > 4194303:
            here = 4194303
        if knot == 0:
            x = work[SUMS_V + 1] >> 3
            y = work[SUMS_I + 1] >> 3
            u = (x * k[K_SCALE_V] >> k[K_SHIFT_V] - 3) - (y * k[K_SCALE_I] >> k[K_SHIFT_I] - 3)
            if u < -4194303:  # four times the plane, as in `along`
                u = -4194303
        long = 1 + 1638 * many // bins
        if here > u:
            long += (here - u) >> 6
            u = here
        work[THIRD + knot] = long
        lengths += long
        knot += 1
    total = 0
    knot = 0
    while knot < knots:
        weight = work[SECOND + knot]
        side = -1
        while side < 2:
            other = knot + side
            if other >= 0 and other < knots:
                ratio = (work[THIRD + knot] << 8) // work[THIRD + other]
                if ratio > 4095:
                    ratio = 4095
                ratio = (work[SECOND + other] * ratio >> 8) * 77 >> 8
                if ratio > weight:
                    weight = ratio
            side += 2
        work[FIRST + knot] = weight
        total += weight
        knot += 1
    shift = 0
    while total >> shift >= 65536:
        shift += 1
    share = roots >> 2
    if share == 0:
        share = 1
    share = (noises << 6) // share
    if share > 256:
        share = 256
    share = share * share >> 8
    share = 8 + (share * share >> 8)
    share = ((total >> shift) + 64) * share >> 8
    knot = 0
    while knot < knots:
        long = (share * (work[THIRD + knot] >> 3)) // (lengths >> 3)
        work[FIRST + knot] = (work[FIRST + knot] >> shift) + long + 1
        knot += 1


@micropython.viper
def exchange(work: ptr32, cuts: ptr16, trial: ptr16, k: ptr32, most: int, other: int) -> int:
    """Write to `trial` the cuts with up to `most` knots moved; returns how many.

    FIRST: the errors. SECOND, THIRD: what the errors left and right would be were a cell one with
    the next. A cell beside each of the largest errors is cut in two, on the side where the error
    lies (`other`: 0) or on the other (1), paid for by a cell hardly missed.
    """
    knots = k[K_KNOTS]
    fixed = 0  # 1 where the first knot has been made small, which it stays
    if k[K_FIRST] < k[K_BINS]:
        fixed = 1
    cell = knots - 2
    while cell >= 0:
        cost = 0
        if cell > 0:
            cost = work[SECOND + cell - 1]
        if cell < knots - 2 and work[THIRD + cell] > cost:
            cost = work[THIRD + cell]
        work[SECOND + cell] = cost
        cell -= 1
    cell = 0
    while cell < knots:
        work[THIRD + cell] = 0  # from here on: 1, cut in two; 2, one with the cell before
        cell += 1
    done = 0
    tries = 0
    while tries < most:
        tries += 1
        worst = 0
        at = 0
        cell = 0
        while cell < knots - 1:
            if work[FIRST + cell] > worst:
                worst = work[FIRST + cell]
                at = cell
            cell += 1
        least = 1 << 29
        spare = 0
        cell = fixed
        while cell < knots - 1:
            if work[SECOND + cell] < least and (cell < at - 3 or cell > at + 3):
                least = work[SECOND + cell]
                spare = cell
            cell += 1
        # None is left where both are 0: the places beside an exchange are marked so.
        if worst == 0 or least > worst - (worst >> 3):
            break
        split = at + ((worst ^ other) & 1)
        if cuts[split + 1] - cuts[split] < 2:
            split = at + 1 - ((worst ^ other) & 1)
        if cuts[split + 1] - cuts[split] < 2:
            work[FIRST + at] = 0
            continue
        work[THIRD + split] = 1
        work[THIRD + spare + 1] = 2
        # Neither place is looked at again: what is known of it no longer holds.
        cell = 0
        while cell < knots - 1:
            near = cell > at - 4 and cell < at + 4
            if near or (cell > spare - 4 and cell < spare + 4):
                work[FIRST + cell] = 0
                work[SECOND + cell] = 1 << 29
            cell += 1
        done += 1
    put = 0
    cell = 0
    while cell < knots:
        if work[THIRD + cell] != 2:
            trial[put] = cuts[cell]
            put += 1
        if work[THIRD + cell] == 1:
            trial[put] = (cuts[cell] + cuts[cell + 1]) >> 1
            put += 1
        cell += 1
    trial[knots] = cuts[knots]
    return done


@micropython.viper
def nudge(cuts: ptr16, trial: ptr16, k: ptr32):
    """Write the cuts to `trial`, every third one moved by a quarter of a cell."""
    knots = k[K_KNOTS]
    fixed = 0
    if k[K_FIRST] < k[K_BINS]:
        fixed = 1
    number = 0
    while number <= knots:
        place = int(cuts[number])
        if number > fixed and number < knots and number % 3 == k[K_PHASE]:
            if k[K_RIGHT]:
                room = int(cuts[number + 1]) - place
                step = room >> 2
                if step == 0 and room > 1:
                    step = 1
                place += step
            else:
                room = place - int(cuts[number - 1])
                step = room >> 2
                if step == 0 and room > 1:
                    step = 1
                place -= step
        trial[number] = place
        number += 1


@micropython.viper
def settle(work: ptr32, cuts: ptr16, trial: ptr16, k: ptr32):
    """Keep each moved cut that makes the largest of its three errors smaller.

    FIRST: errors of the cuts, SECOND: of the trial.
    """
    knots = k[K_KNOTS]
    number = 1
    while number < knots:
        if number % 3 == k[K_PHASE]:
            was = 0
            now = 0
            segment = number - 2
            while segment <= number:
                if segment >= 0 and segment < knots - 1:
                    if work[FIRST + segment] > was:
                        was = work[FIRST + segment]
                    if work[SECOND + segment] > now:
                        now = work[SECOND + segment]
                segment += 1
            if now < was - (was >> 6):
                cuts[number] = trial[number]
                segment = number - 2
                while segment <= number:
                    if segment >= 0 and segment < knots - 1:
                        work[FIRST + segment] = work[SECOND + segment]
                    segment += 1
        number += 1


@micropython.viper
def worst(work: ptr32, base: int, count: int) -> int:
    most = 0
    number = base
    while number < base + count:
        if work[number] > most:
            most = work[number]
        number += 1
    return most


@micropython.viper
def take_over(cuts: ptr16, trial: ptr16, count: int):
    number = 0
    while number < count:
        cuts[number] = trial[number]
        number += 1


@micropython.viper
def remember(work: ptr32, cuts: ptr16, count: int):
    number = 0
    while number < count:
        work[BEST + number] = cuts[number]
        number += 1


@micropython.viper
def recall(work: ptr32, cuts: ptr16, count: int):
    number = 0
    while number < count:
        cuts[number] = work[BEST + number]
        number += 1
