"""What is fetched in blocks, knots and raw pairs, as data for the checks of both sides."""

from __future__ import annotations

from dataclasses import dataclass

from kneewire.messages import KNOT_BYTES, KNOTS_A_BLOCK, RAW_A_BLOCK, RAW_BYTES


@dataclass(frozen=True, slots=True)
class Burst:
    """Its name for people, its fields in the manifest, the message that it comes in, sizes."""

    what: str
    count: str
    crc: str
    block: str
    record_bytes: int
    most_a_block: int


# By the request that asks for it.
BURSTS = {
    "fetch": Burst("knots", "knots", "knots_crc", "block", KNOT_BYTES, KNOTS_A_BLOCK),
    "fetch_raw": Burst("raw pairs", "raw_pairs", "raw_crc", "raw_block", RAW_BYTES, RAW_A_BLOCK),
}
BLOCKS = tuple(burst.block for burst in BURSTS.values())
REPLIES = tuple(f"{name}_reply" for name in BURSTS)
