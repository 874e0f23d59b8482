"""The board profile as the device stores and sends it: one record of integers.

The host compiles it from a profile's TOML; the firmware takes its limits from it and the host
its scale factors. In a file it is followed by its CRC-32, little endian.
"""

from kneewire import fields
from kneewire.seam import crc32

try:
    from typing import Any
except ImportError:  # MicroPython has no typing and does not evaluate annotations
    pass

FORMAT = 3

CLASSES = {1: "A", 2: "B"}
CONTACTS = {1: "relay+switch", 2: "relay"}
CONVERTERS = {1: "internal", 2: "spi16"}

# (name, type); what each field means stands in meanings.py.
PROFILE = (
    ("format", "u8"),
    ("name", "text"),
    ("device_id", "b8"),
    ("hazard_class", "u8"),
    ("contact", "u8"),
    ("breaks_dc", "u8"),
    ("switch_release_us", "u16"),
    ("converter", "u8"),
    ("pair_us", "u8"),
    ("spi_clock_khz", "u16"),
    ("spi_convert_ns", "u16"),
    ("wide_code_x16", "u16"),
    ("zero_switch", "u8"),
    ("voltage_nv_per_code", "u32"),
    ("voltage_zero_x16", "u16"),
    ("current_na_per_code", "u32"),
    ("current_zero_x16", "u16"),
    ("capacitor_nv_per_code", "u32"),
    ("capacitor_zero_x16", "u16"),
    ("voltage_delay_ns", "u32"),
    ("current_delay_ns", "u32"),
    ("divider_ohm", "u32"),
    ("lead_mohm", "u32"),
    ("rated_mv", "u32"),
    ("rated_ma", "u32"),
    ("capacitance_nf", "u32"),
    ("capacitance_low_percent", "u8"),
    ("capacitance_high_percent", "u8"),
    ("bleed_mohm", "u32"),
    ("bleed_mw", "u32"),
    ("bleed_mj", "u32"),
    ("bleed_cutoff", "u8"),
    ("permanent_bleeder_ohm", "u32"),
    ("relay_operate_ms", "u16"),
    ("relay_release_ms", "u16"),
    ("bleed_operate_ms", "u16"),
    ("bleed_release_ms", "u16"),
    ("bounce_ms", "u16"),
    ("dead_time_ms", "u16"),
    ("safe_mv", "u32"),
    ("start_permyriad", "u16"),
    ("near_zero_permyriad", "u16"),
    ("bleed_time_percent", "u16"),
    ("pulse_us", "u32"),
    ("closed_limit_ms", "u32"),
    ("token_life_ms", "u16"),
    ("heartbeat_lost_ms", "u16"),
    ("isolation_v", "u16"),
    ("isolation_tested_day", "u32"),
    ("declared", "u8"),
    ("reviewer", "text"),
    ("reviewed_day", "u32"),
    ("proof_days", "u16"),
)


def pack_profile(values: "dict[str, Any]") -> bytes:
    """The record; KeyError for a missing value, ValueError for one out of range."""
    out = bytearray()
    for row in PROFILE:
        try:
            fields.write(out, row[1], values[row[0]], 1)
        except ValueError as error:
            raise ValueError("%s: %s" % (row[0], error)) from None
    return bytes(out)


def unpack_profile(record: bytes) -> "dict[str, Any]":
    """The values of a record; ValueError where it is cut short or of another format."""
    values: dict[str, Any] = {}
    place = 0
    for row in PROFILE:
        values[row[0]], place = fields.read(record, place, row[1], 1)
    if values["format"] != FORMAT:
        raise ValueError("format %d" % values["format"])
    return values


def seal(record: bytes) -> bytes:
    """The record as it stands in a file: with its CRC-32."""
    return record + crc32(record).to_bytes(4, "little")


def unseal(data: bytes) -> bytes:
    """The record of a file; ValueError where the CRC does not agree."""
    record = data[:-4]
    if len(data) < 5 or crc32(record).to_bytes(4, "little") != data[-4:]:
        raise ValueError("crc")
    return record
