"""The catalogue: every message, state and code of the wire, as data.

From these tables come the packers and unpackers (`messages.py`), the fingerprint and, with
`meanings.py`, the tables of SPEC.md. Adding a message means adding a row here and the meaning
of its fields there; the meanings stay out of the firmware's memory.
"""

try:
    from collections.abc import Iterator
    from typing import Any
except ImportError:  # MicroPython has no typing and does not evaluate annotations
    pass

# Limits of the frozen part: body and CRC together, before COBS.
MAX_FRAME = 256
# Pairs that a device keeps one by one in a sweep, at most.
MAX_RAW_PAIRS = 2048

REPLY = 0x80  # a reply's kind is its request's kind with this bit set

TO_DEVICE = 0
TO_HOST = 1

# Every body starts with these: what it is, whose it is, which request it belongs to.
HEADER = (("kind", "u8"), ("session", "u32"), ("sequence", "u32"))

# One knot: means of all pairs since the last knot, kept as sums of ADC codes.
# (name, type); what each field means stands in meanings.py.
KNOT = (
    ("time_us", "u64"),
    ("voltage_sum", "u48"),
    ("current_sum", "u48"),
    ("pairs", "u32"),
    ("voltage_scatter", "u64"),
    ("current_scatter", "u64"),
)

STATES = {0: "safe", 1: "armed", 2: "charging", 3: "bleeding", 4: "fault"}

RESET_CAUSES = {0: "unknown", 1: "power on", 2: "reset pin", 3: "watchdog", 4: "soft reset"}

END_REASONS = {
    1: "complete",
    2: "time limit",
    3: "aborted",
    4: "stop loop opened",
    5: "over-voltage",
    6: "over-current",
    7: "host lost",
    8: "no current",
    9: "ring overrun",
    10: "supervision lost",
    11: "interrupted",
    12: "capacitor not empty",
    13: "sensor at fault",
    14: "switch shorted",
}

REFUSALS = {
    1: "unknown kind",
    2: "malformed",
    3: "unknown session",
    4: "stale",
    5: "wrong state",
    6: "busy charging",
    7: "bad token",
    8: "interlock",
    9: "no held sweep",
    10: "another sweep is held",
    11: "out of range",
}

# What a measured value and a limit in a refusal or a fault are counted in.
UNITS = {0: "", 1: "mV", 2: "mA", 3: "ms", 4: "mJ", 5: "codes", 6: "mohm", 7: "nF"}

# What an arming is for.
EXERCISES = {0: "sweep", 1: "source absent", 2: "hang while closed", 3: "relay left open"}

FLAG_EMULATED = 1  # hello_reply.flags

_GUARD = (
    ("guard", "u8"),
    ("measured", "i32"),
    ("limit", "i32"),
    ("unit", "u8"),
)

# Knots and raw pairs are fetched alike.
_FETCH = (
    ("sweep_id", "b16"),
    ("first", "u16"),
    ("count", "u16"),
    ("a_block", "u8"),
)
_FETCHED = (("first", "u16"), ("count", "u16"))

# kind: (name, direction, frozen, changes state, fields)
MESSAGES: "dict[int, tuple[str, int, bool, bool, tuple[tuple[str, str], ...]]]" = {
    # "H", and no control character where it can be helped: a hello may arrive at a MicroPython
    # prompt, where 0x01 and 0x04 on an empty line have effects of their own and 0x0d runs the
    # line. The versions, which hold zeros, come last: zeros nearer the front would make COBS
    # code bytes of 0x0a or 0x0d.
    0x48: (
        "hello",
        TO_DEVICE,
        True,
        False,
        (
            ("host_nonce", "u32"),
            ("fingerprint", "u32"),
            ("major", "u8"),
            ("minor", "u8"),
        ),
    ),
    0xC8: (
        "hello_reply",
        TO_HOST,
        True,
        False,
        (
            ("major", "u8"),
            ("minor", "u8"),
            ("fingerprint", "u32"),
            ("firmware_major", "u8"),
            ("firmware_minor", "u8"),
            ("firmware_patch", "u8"),
            ("flags", "u8"),
            ("device_id", "b8"),
            ("boot_nonce", "u32"),
            ("session", "u32"),
            ("reset_cause", "u8"),
            ("profile_crc", "u32"),
            ("max_frame", "u16"),
            ("window", "u8"),
            ("max_knots", "u16"),
            ("ticks_per_s", "u32"),
        ),
    ),
    0x50: ("prompt", TO_DEVICE, True, False, ()),
    0xD0: ("prompt_reply", TO_HOST, True, False, (("leaving", "u8"),)),
    0x04: ("abort", TO_DEVICE, False, True, ()),
    0x84: ("abort_reply", TO_HOST, False, False, (("state", "u8"),)),
    0x10: ("status", TO_DEVICE, False, False, ()),
    0x90: (
        "status_reply",
        TO_HOST,
        False,
        False,
        (
            ("state", "u8"),
            ("contact_closed", "u8"),
            ("bleed_engaged", "u8"),
            ("stop_loop_closed", "u8"),
            ("leads_reversed", "u8"),
            ("time_us", "u64"),
            ("voltage_sum", "u32"),
            ("current_sum", "u32"),
            ("capacitor_sum", "u32"),
            ("conversions", "u16"),
            ("held", "u8"),
            ("sweep_id", "b16"),
            ("frames_good", "u32"),
            ("frames_bad", "u32"),
            ("bleed_mj", "u32"),
            ("rest_ms", "u32"),
        )
        + _GUARD,
    ),
    0x11: ("read_profile", TO_DEVICE, False, False, ()),
    0x91: ("profile", TO_HOST, False, False, (("record", "bytes"),)),
    0x12: ("heartbeat", TO_DEVICE, False, False, ()),
    0x92: (
        "heartbeat_reply",
        TO_HOST,
        False,
        False,
        (
            ("received_us", "u64"),
            ("replied_us", "u64"),
        ),
    ),
    0x13: ("read_logbook", TO_DEVICE, False, False, ()),
    0x93: (
        "logbook",
        TO_HOST,
        False,
        False,
        (
            ("operations", "u32"),
            ("hot_openings", "u32"),
            ("proof_day", "u32"),
            ("proof_digest", "b16"),
            ("begun_anew", "u8"),
        ),
    ),
    0x23: ("note_proof", TO_DEVICE, False, True, (("day", "u32"), ("digest", "b16"))),
    0xA3: ("note_proof_reply", TO_HOST, False, False, (("kept", "u8"),)),
    0x20: (
        "arm",
        TO_DEVICE,
        False,
        True,
        (
            ("knots", "u16"),
            ("closed_limit_ms", "u32"),
            ("confirmed", "u8"),
            ("raw_from_us", "u32"),
            ("raw_pairs", "u16"),
            ("limit_mv", "u32"),
            ("limit_ma", "u32"),
            ("exercise", "u8"),
        ),
    ),
    0xA0: (
        "arm_reply",
        TO_HOST,
        False,
        False,
        (
            ("token", "u32"),
            ("life_ms", "u16"),
            ("voltage_sum", "u32"),
            ("capacitor_sum", "u32"),
            ("conversions", "u16"),
        ),
    ),
    0x21: (
        "fire",
        TO_DEVICE,
        False,
        True,
        (("token", "u32"), ("sweep_id", "b16")),
    ),
    0xA1: (
        "fire_reply",
        TO_HOST,
        False,
        False,
        (("quiet_ms", "u32"),),
    ),
    0x22: ("clear_fault", TO_DEVICE, False, True, ()),
    0xA2: ("clear_fault_reply", TO_HOST, False, False, (("state", "u8"),)),
    0xE0: (
        "charge_ended",
        TO_HOST,
        False,
        False,
        (("sweep_id", "b16"), ("end_reason", "u8")),
    ),
    0xE2: ("bleed_ended", TO_HOST, False, False, (("sweep_id", "b16"), ("state", "u8"))),
    0x30: ("read_manifest", TO_DEVICE, False, False, ()),
    0xB0: (
        "manifest",
        TO_HOST,
        False,
        False,
        (
            ("sweep_id", "b16"),
            ("end_reason", "u8"),
            ("knots", "u16"),
            ("pairs", "u32"),
            ("knots_crc", "u32"),
            ("ring_overruns", "u16"),
            ("conversions_lost", "u8"),
            ("conducting_us", "u64"),
            ("opened_us", "u64"),
            ("pair_ns", "u32"),
            ("skew_ns", "u32"),
            ("bin_pairs", "u32"),
            ("voltage_sum", "u32"),
            ("current_sum", "u32"),
            ("conversions", "u16"),
            ("residual_sum", "u32"),
            ("residual_conversions", "u16"),
            ("profile_crc", "u32"),
            ("voltage_zero_sum", "u32"),
            ("zero_conversions", "u16"),
            ("bounces", "u16"),
            ("raw_first", "u32"),
            ("raw_pairs", "u16"),
            ("raw_crc", "u32"),
            ("capacitor_before_sum", "u16"),
            ("capacitor_full_sum", "u16"),
            ("capacitor_conversions", "u8"),
            ("opening_code", "u16"),
            ("hot_opening", "u8"),
            ("bleed_tau_us", "u32"),
        ),
    ),
    0x31: (
        "fetch",
        TO_DEVICE,
        False,
        False,
        _FETCH,
    ),
    0xB1: (
        "fetch_reply",
        TO_HOST,
        False,
        False,
        _FETCHED,
    ),
    0xE1: (
        "block",
        TO_HOST,
        False,
        False,
        (("first", "u16"), ("data", "knots")),
    ),
    0x33: (
        "fetch_raw",
        TO_DEVICE,
        False,
        False,
        _FETCH,
    ),
    0xB3: (
        "fetch_raw_reply",
        TO_HOST,
        False,
        False,
        _FETCHED,
    ),
    0xE3: (
        "raw_block",
        TO_HOST,
        False,
        False,
        (("first", "u16"), ("data", "bytes")),
    ),
    0x32: ("acknowledge", TO_DEVICE, False, True, (("sweep_id", "b16"),)),
    0xB2: ("acknowledge_reply", TO_HOST, False, False, (("freed", "u8"),)),
    0xFF: (
        "refusal",
        TO_HOST,
        True,
        False,
        (("of_kind", "u8"), ("code", "u8")) + _GUARD,
    ),
}

KINDS = {MESSAGES[kind][0]: kind for kind in MESSAGES}


def canonical_lines() -> "Iterator[str]":
    """The catalogue written out in one fixed way, a line at a time, for the fingerprint."""
    yield _line("header", HEADER)
    yield _line("knot", KNOT)
    for kind in sorted(MESSAGES):
        name, direction, _, changes, fields = MESSAGES[kind]
        yield _line("%d %s %d %d" % (kind, name, direction, changes), fields)
    for codes in (STATES, RESET_CAUSES, END_REASONS, REFUSALS, UNITS, EXERCISES):
        yield ",".join(["%d=%s" % (code, codes[code]) for code in sorted(codes)]) + "\n"


def _line(name: str, fields: "Any") -> str:
    return name + ":" + ",".join([field[0] + " " + field[1] for field in fields]) + "\n"
