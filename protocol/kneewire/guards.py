"""What the guards are held to: limits in code, which no profile can lift.

The firmware acts by these numbers. `hazards.py` says which guard they belong to and what people
read about it; the firmware's memory does not hold that.
"""

# Times that a finding must be seen in a row before it counts.
LIVE_LOOKS = 3  # at the bleed's current, 10 ms apart
TRIP_PAIRS = 2  # of V and I, one behind the other in a supervision visit

ISOLATION_FREE_MV = 60000  # of class A; above it a tested barrier is asked for
ZERO_CODES = 24  # of 12 bits: how far a channel's zero may stand from the profile's
SENSORS_PERCENT = 6  # of rated_mv: how far source and capacitor may differ once they are joined
BLEED_LOW_PERCENT = 70  # of bleed_mohm: below it the bleed is shorted, in whole or in part
ABSENT_MV = 1000  # of a source that is taken as disconnected, in an exercise

# What no profile may ask for: (field, least, greatest). Class A and class B differ in four.
BOUNDS = (
    ("dead_time_ms", 20, 1000),
    ("safe_mv", 1, 60000),
    ("start_permyriad", 1, 500),
    ("near_zero_permyriad", 1, 500),
    ("bleed_time_percent", 110, 400),
    ("token_life_ms", 500, 10000),
    ("heartbeat_lost_ms", 1000, 10000),
    ("pulse_us", 1000, 20000),
    ("closed_limit_ms", 10, 120000),
    ("bleed_mw", 1, 1000000),
    ("bleed_mj", 1, 10000000),
    ("capacitance_low_percent", 50, 100),
    ("capacitance_high_percent", 100, 200),
    ("proof_days", 1, 366),
)
RATED_MV = (60000, 1000000)
RATED_MA = (20000, 50000)
STORED_MJ = (25000, 500000)  # at the rated voltage

# A bare relay's charge runs out before anything opens it, so pulse and watchdog must last as long.
BARE_CLOSED_MS = 5000

# Bits of `declared`: what the builder of a class B tracer answers for.
DECLARED_BARRIER = 1  # reinforced isolation between PV side and laptop
DECLARED_CONTACT = 2  # contact rated to break Voc and Isc dc
DECLARED_DISCONNECTOR = 4
DECLARED_FUSE = 8
DECLARED_ALL = 15
