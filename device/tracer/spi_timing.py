"""How the cycles of one pair from two SPI converters are spent: plain numbers, no hardware.

Comes in: the system clock and the profile's numbers. Goes out: `plan`, the numbers of the PIO
program in `spi_pair.py`, whose pair takes, in cycles of the state machine:

    select high    RISE_AND_SORT + hold_wait: the conversion; the pair before is sorted meanwhile
    select low     low, then 16 clocks of high + low
    quiet          quiet_wait, on top of the last clock's low

A wait of n cycles is made of one instruction and a loop, whose numbers `loop` gives.
"""

RISE_AND_SORT = 102  # cycles from select's rise until the pair before is handed on
LONGEST_WAIT = 528
SHORTEST_WAIT = 2
SHORTEST_BIT = 4  # cycles; leaves a converter two cycles of them
LONGEST_BIT = 32
DIVIDERS = 64


def plan(mhz, pair_us, clock_khz, convert_ns):
    """(divider, high, low, hold_wait, quiet_wait) for a pair of exactly `pair_us`.

    The bit clock is `clock_khz` or the nearest below that the cycles allow; select is high for
    `convert_ns` or longer. ValueError where that cannot be kept.
    """
    if clock_khz <= 0:
        raise ValueError("SPI clock is 0")
    for divider in range(1, DIVIDERS + 1):
        cycles = mhz * pair_us // divider
        bit = max(-(-1000 * mhz // (divider * clock_khz)), SHORTEST_BIT)
        if cycles * divider != mhz * pair_us or bit > LONGEST_BIT:
            continue
        low = bit - bit // 2
        hold = -(-convert_ns * mhz // (1000 * divider))
        hold_wait = max(hold - RISE_AND_SORT, SHORTEST_WAIT)
        quiet_wait = cycles - RISE_AND_SORT - hold_wait - low - 16 * bit
        if quiet_wait < SHORTEST_WAIT:
            raise ValueError("pair_us is too short for conversion and 16 bits")
        hold_wait += max(quiet_wait - LONGEST_WAIT, 0)  # select stays high for what is left over
        quiet_wait = min(quiet_wait, LONGEST_WAIT)
        if hold_wait <= LONGEST_WAIT:
            return divider, bit // 2, low, hold_wait, quiet_wait
    raise ValueError("no PIO clock fits these SPI numbers")


def loop(wait):
    """(first, rounds, each): 1 + first + (rounds + 1) x (each + 1) cycles are `wait`.

    Of these the PIO takes first and each up to 15, rounds up to 31.
    """
    each = (wait - 1) // 33 + 1
    rounds = (wait - 1) // each
    return wait - 1 - rounds * each, rounds - 1, each - 1
