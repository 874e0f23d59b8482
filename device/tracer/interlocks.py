"""The guards: each one small function over measured numbers.

A guard returns None where all is well, else a finding: (hazard number, measured, limit, unit)
with the numbers of `kneewire.guards` and the wire's unit codes. It decides nothing else;
`sequencer.py` acts on it. Those over a bleed are in `bleeding.py`, those in mid-charge in
`charge.py`.
"""

from micropython import const

from kneewire import guards

UNIT_NONE = 0
UNIT_MV = 1
UNIT_MA = 2
UNIT_MJ = 4
UNIT_CODES = 5
UNIT_MOHM = 6
UNIT_NF = 7

RAIL_CODES = const(4090)  # of 12 bits

NO_LIMIT = 0xFFFFFFFF  # but the rating

# What an arming is for, as on the wire.
SWEEP = 0
SOURCE_ABSENT = 1
HANG = 2
RELAY_OPEN = 3


class Readings:
    """What the guards look at: taken by the sequencer just before they are asked."""

    def __init__(self, profile, voltage_sum, current_sum, capacitor_sum, conversions):
        self.voltage_sum = voltage_sum
        self.current_sum = current_sum
        self.capacitor_sum = capacitor_sum
        self.conversions = conversions
        self.voltage_zero_sum = None  # where the board can bring the channel there
        self.stop_loop_closed = True
        self.leads_reversed = False
        self.confirmed = False
        self.heat_mj = 0
        self.limit_mv = NO_LIMIT
        self.exercise = SWEEP
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


def _off_zero(profile, name, code_sum, conversions):
    off = code_sum // conversions - profile[name] // 16
    tolerance = guards.ZERO_CODES * profile.finer
    return (11, off, tolerance, UNIT_CODES) if abs(off) > tolerance else None


def zero_current(profile, readings):
    """H11: with the contact open the current channel must stand at its zero."""
    return _off_zero(profile, "current_zero_x16", readings.current_sum, readings.conversions)


def zero_voltage(profile, readings):
    """H11: so must the voltage channel, where its input can be brought to its zero."""
    if readings.voltage_zero_sum is None:
        return None
    return _off_zero(profile, "voltage_zero_x16", readings.voltage_zero_sum, readings.conversions)


def capacitor_in_range(profile, readings):
    """H11: a capacitor channel at its rail may hide any voltage."""
    code = readings.capacitor_sum // readings.conversions
    if code >= RAIL_CODES:
        return 11, code, RAIL_CODES, UNIT_CODES
    return None


def source_limit_mv(profile, readings):
    if readings.exercise in (SOURCE_ABSENT, HANG):
        return guards.ABSENT_MV
    return min(profile["rated_mv"], readings.limit_mv)


def source_rating(profile, readings):
    """H4, measured before closing. A code at the rail may hide any voltage."""
    limit = source_limit_mv(profile, readings)
    if (
        readings.source_mv > limit
        or readings.voltage_sum // readings.conversions >= RAIL_CODES * profile.finer
    ):
        return 4, readings.source_mv, limit, UNIT_MV
    return None


def isolation(profile, readings):
    """H19."""
    limit = guards.ISOLATION_FREE_MV
    if readings.source_mv > limit and not (
        profile["isolation_v"] * 1000 > readings.source_mv and profile["isolation_tested_day"]
    ):
        return 19, readings.source_mv, limit, UNIT_MV
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


def bleed_cool(profile, readings):
    """H10: the bleed resistor must have room for what this source will put on the capacitor."""
    mj = readings.heat_mj + profile.stored_mj(max(readings.source_mv, 0))
    if mj > profile["bleed_mj"]:
        return 10, mj, profile["bleed_mj"], UNIT_MJ
    return None


BEFORE_CLOSING = (
    profile_valid,
    stop_loop,
    polarity,
    zero_current,
    zero_voltage,
    capacitor_in_range,
    source_rating,
    isolation,
    stands_alone,
    empty_to_start,
    bleed_cool,
)


def first_finding(wanted, profile, readings):
    """The first finding of the `wanted` guards, or None."""
    for guard in wanted:
        finding = guard(profile, readings)
        if finding is not None:
            return finding
    return None


def sensors_agree(profile, source_mv, capacitor_mv):
    """H11, once a charge has joined source and capacitor: both must have risen alike."""
    limit = profile["rated_mv"] * guards.SENSORS_PERCENT // 100
    if abs(source_mv - capacitor_mv) > limit:
        return 11, capacitor_mv - source_mv, limit, UNIT_MV
    return None


def capacitance(profile, nf):
    """H15: from the charge of a sweep and the voltage that it has brought."""
    low = profile["capacitance_nf"] * profile["capacitance_low_percent"] // 100
    high = profile["capacitance_nf"] * profile["capacitance_high_percent"] // 100
    if nf < low:
        return 15, nf, low, UNIT_NF
    if nf > high:
        return 15, nf, high, UNIT_NF
    return None
