"""The guards: each one small function over measured numbers.

A guard returns None where all is well, else a finding: (hazard number, measured, limit, unit)
with the numbers of the design's hazard table and the wire's unit codes. It decides nothing
else; `sequencer.py` acts on it.
"""

UNIT_NONE = 0
UNIT_MV = 1
UNIT_CODES = 5

# Of 12 bits each.
ZERO_TOLERANCE_CODES = 24  # how far a current zero may stand from the profile's
RAIL_CODES = 4090
ISOLATION_FREE_MV = 60000


class Readings:
    """What the guards look at: taken by the sequencer just before they are asked."""

    def __init__(self, profile, voltage_sum, current_sum, capacitor_sum, conversions):
        self.voltage_sum = voltage_sum
        self.current_sum = current_sum
        self.capacitor_sum = capacitor_sum
        self.conversions = conversions
        self.stop_loop_closed = True
        self.leads_reversed = False
        self.confirmed = False
        if profile is not None:
            self.source_mv = profile.millivolts("voltage", voltage_sum, conversions)
            self.capacitor_mv = profile.millivolts("capacitor", capacitor_sum, conversions)


def profile_valid(profile, readings):
    """H14."""
    return None if profile is not None else (14, 0, 0, UNIT_NONE)


def stop_loop(profile, readings):
    """H12."""
    return None if readings.stop_loop_closed else (12, 0, 0, UNIT_NONE)


def polarity(profile, readings):
    """H5: a comparator tells reversed leads from a dark source."""
    return (5, 0, 0, UNIT_NONE) if readings.leads_reversed else None


def zero_current(profile, readings):
    """H11: with the contact open the current channel must stand at its zero."""
    code = readings.current_sum // readings.conversions
    off = code - profile["current_zero_x16"] // 16
    tolerance = ZERO_TOLERANCE_CODES * profile.finer
    if abs(off) > tolerance:
        return 11, off, tolerance, UNIT_CODES
    return None


def source_rating(profile, readings):
    """H4, measured before closing. A code at the rail may hide any voltage."""
    if (
        readings.source_mv > profile["rated_mv"]
        or readings.voltage_sum // readings.conversions >= RAIL_CODES * profile.finer
    ):
        return 4, readings.source_mv, profile["rated_mv"], UNIT_MV
    return None


def isolation(profile, readings):
    """H19."""
    if readings.source_mv > ISOLATION_FREE_MV and not (
        profile["isolation_v"] * 1000 > readings.source_mv and profile["isolation_tested_day"]
    ):
        return 19, readings.source_mv, ISOLATION_FREE_MV, UNIT_MV
    return None


def stands_alone(profile, readings):
    """H20: only the operator can know."""
    return None if readings.confirmed else (20, 0, 0, UNIT_NONE)


def start_limit_mv(profile, source_mv):
    """Capacitor voltage below which a sweep may start; three codes at the least."""
    least = 3 * profile["capacitor_nv_per_code"] // 1000000 + 1
    return max(source_mv * profile["start_permyriad"] // 10000, least)


def empty_to_start(profile, readings):
    """H1, the threshold for starting."""
    limit = start_limit_mv(profile, readings.source_mv)
    if readings.capacitor_mv > limit:
        return 1, readings.capacitor_mv, limit, UNIT_MV
    return None


BEFORE_CLOSING = (
    profile_valid,
    stop_loop,
    polarity,
    zero_current,
    source_rating,
    isolation,
    stands_alone,
    empty_to_start,
)


def first_finding(guards, profile, readings):
    """The first finding of several guards, or None."""
    for guard in guards:
        finding = guard(profile, readings)
        if finding is not None:
            return finding
    return None


def bleed_progress(profile, from_mv, now_mv, elapsed_ms, limit_mv):
    """H1 and H2 while bleeding: falling as predicted, or why not.

    After the allowed time (prediction x bleed_time_percent, 100 ms at least) a capacitor that
    still holds nearly all of its voltage is fed through a welded contact (H2) or has lost its
    bleed; both look alike from here until the bleed's own current is known, and H2 is the one
    that must not be missed.
    """
    allowed = profile.predicted_bleed_ms(from_mv, limit_mv) * profile["bleed_time_percent"] // 100
    allowed = max(allowed, 100)
    if elapsed_ms <= allowed or now_mv <= limit_mv:
        return None
    if now_mv * 2 > from_mv and now_mv > profile["safe_mv"]:
        return 2, now_mv, limit_mv, UNIT_MV
    return 1, now_mv, limit_mv, UNIT_MV
