"""Checks of K on a device: raw pairs, and the knots held against them, pair by pair."""

from __future__ import annotations

from itertools import accumulate, pairwise
from zlib import crc32

from conformance.bench import Bench
from conformance.checks import Check
from conformance.device_bodies import OTHER_ID, refused_as
from conformance.device_held import burst, everything
from conformance.report import Broken, Unseen
from conformance.sweeping import RAW_FROM, RAW_PAIRS, Sweep, short, whole
from kneewire import catalogue
from kneewire.messages import RAW_A_BLOCK, RAW_BYTES, Message, unpack_knots

BINS_BEFORE = 2
MOST_BEND = 16383
LATEST_US = 120000000
CODE_TOP = 0xFFFF
TIME_US = 1  # that a middle may be rounded by
CHANNELS = ("voltage", "current")

Knots = list[dict[str, int]]


def held(bench: Bench) -> Sweep:
    """The short sweep, still held, with raw pairs."""
    made = short(bench)
    if not made.manifest["raw_pairs"]:
        raise Broken(f"no raw pairs in a sweep of {made.manifest['pairs']} pairs")
    return made


def raw_bytes(bench: Bench, made: Sweep) -> bytes:
    """All raw pairs. Any block is good for what it holds: how they come is looked at elsewhere."""
    count = made.manifest["raw_pairs"]
    known: dict[int, bytes] = {}
    while len(known) < count:
        first = next(number for number in range(count) if number not in known)
        values = {"first": first, "count": count - first, "a_block": 0}
        frames = bench.answers(bench.frame("fetch_raw", {"sweep_id": made.sweep_id, **values}))
        before = len(known)
        for frame in frames:
            if frame.name == "raw_block":
                _take(known, frame.reply("raw_block"), count)
        if len(known) == before:
            raise Broken(f"{before} of {count} raw pairs, and no more of them")
    return b"".join(known[number] for number in range(count))


def _take(known: dict[int, bytes], block: Message, count: int) -> None:
    data = block["data"]
    for number in range(min(len(data) // RAW_BYTES, count - block["first"])):
        known[block["first"] + number] = data[number * RAW_BYTES : (number + 1) * RAW_BYTES]


def codes(data: bytes, channel: int) -> list[int]:
    """Of one channel: 0 the voltage, 1 the current."""
    start = 2 * channel
    return [
        int.from_bytes(data[place : place + 2], "little")
        for place in range(start, len(data), RAW_BYTES)
    ]


def starts(knots: Knots) -> list[int]:
    """Number of each knot's first pair, and of the pair behind the last."""
    return [0, *accumulate(knot["pairs"] for knot in knots)]


def knots_follow_each_other(bench: Bench) -> str:
    """K1, and each sum that raw pairs show."""
    made = held(bench)
    manifest = made.manifest
    knots = unpack_knots(everything(bench, made))
    bounds = starts(knots)
    for number, (knot, start) in enumerate(zip(knots, bounds, strict=False)):
        last = number == len(knots) - 1
        if knot["pairs"] % manifest["bin_pairs"] and not last:
            raise Broken(f"knot {number} of {knot['pairs']} pairs, a bin {manifest['bin_pairs']}")
        middle_ns = (2 * start + knot["pairs"] - 1) * manifest["pair_ns"] // 2
        due_us = manifest["conducting_us"] + middle_ns // 1000
        if abs(knot["time_us"] - due_us) > TIME_US:
            raise Broken(f"knot {number} at {knot['time_us']} us, its middle is at {due_us} us")
    if bounds[-1] != manifest["pairs"]:
        raise Broken(f"{bounds[-1]} pairs in the knots, {manifest['pairs']} in the manifest")
    raw = raw_bytes(bench, made)
    first, seen = manifest["raw_first"], 0
    for number, (start, after) in enumerate(pairwise(bounds)):
        if start < first or after > first + manifest["raw_pairs"]:
            continue
        seen += 1
        for channel, name in enumerate(CHANNELS):
            total = sum(codes(raw, channel)[start - first : after - first])
            if knots[number][f"{name}_sum"] != total:
                found = knots[number][f"{name}_sum"]
                raise Broken(f"{name}_sum {found} in knot {number}, its raw pairs make {total}")
    if not seen:
        raise Unseen("no knot lies within the raw pairs")
    return f"{len(knots)} knots without a gap, {seen} of them the sums of their raw pairs"


def scatter_by_hand(bins: list[int], first: int, after: int) -> int:
    """Of the bins from `first` to before `after`, by the sums of these and of the two before."""
    bends = (bins[n] - 2 * bins[n - 1] + bins[n - 2] for n in range(first, after))
    return sum(min(abs(bend), MOST_BEND) ** 2 for bend in bends)


def scatter_is_that_of_the_pairs(bench: Bench) -> str:
    made = held(bench)
    manifest = made.manifest
    size = manifest["bin_pairs"]
    raw = raw_bytes(bench, made)
    knots = unpack_knots(everything(bench, made))
    skipped = -(-manifest["raw_first"] // size)  # bins that do not lie within the raw pairs
    many = (manifest["raw_first"] + manifest["raw_pairs"]) // size - skipped
    at = skipped * size - manifest["raw_first"]
    seen = 0
    for channel, name in enumerate(CHANNELS):
        found = codes(raw, channel)
        bins = [sum(found[at + n * size : at + (n + 1) * size]) for n in range(many)]
        for number, (start, after) in enumerate(pairwise(starts(knots))):
            first, end = start // size - skipped, after // size - skipped
            if first < BINS_BEFORE or end > many:
                continue
            seen += 1
            due = scatter_by_hand(bins, first, end)
            if knots[number][f"{name}_scatter"] != due:
                told = knots[number][f"{name}_scatter"]
                raise Broken(f"{name}_scatter {told} in knot {number}, its raw pairs make {due}")
    if not seen:
        raise Unseen("no knot and the two bins before it lie within the raw pairs")
    return f"that of the raw pairs in {seen // len(CHANNELS)} knots"


def the_zero_reading(bench: Bench) -> str:
    manifest = whole(bench).manifest
    count, total = manifest["zero_conversions"], manifest["voltage_zero_sum"]
    if not bench.profile:
        raise Unseen("the device holds no profile")
    if not bench.profile["zero_switch"]:
        if count or total:
            raise Broken(f"{total} in {count} conversions, and no switch")
        return "none, as the profile says"
    if not 0 < total <= count * CODE_TOP:
        raise Broken(f"a sum of {total} in {count} conversions")
    if total * manifest["conversions"] >= manifest["voltage_sum"] * count:
        raise Broken("a zero no lower than the source's voltage")
    return f"code {total / count:.2f} in {count} conversions"


def bounces_are_told(bench: Bench) -> str:
    bounces = whole(bench).manifest["bounces"]
    if not bench.profile:
        raise Unseen("the device holds no profile")
    if not bench.profile["bounce_ms"] and bounces:
        raise Broken(f"{bounces} bounces of a contact that does not bounce")
    if bench.profile["bounce_ms"] and not bounces:
        raise Unseen("the contact has not bounced")
    return f"{bounces} bounces, {bench.profile['bounce_ms']} ms allowed"


def raw_pairs_out_of_range(bench: Bench) -> str:
    if bench.state() != "safe":
        raise Unseen("an arm is refused for another reason in a fault")
    most = catalogue.MAX_RAW_PAIRS
    wrong = [{"raw_pairs": most + 1}, {"raw_pairs": 65535}]
    wrong += [{"raw_pairs": 1, "raw_from_us": late} for late in (LATEST_US + 1, 0xFFFFFFFF)]
    for change in wrong:
        frame = bench.ask("arm", bench.arm_values(confirmed=0, **change))
        refused_as(frame, catalogue.KINDS["arm"], f"an arm with {change}", "out of range")
    return f"{len(wrong)} arms refused"


def the_manifest_tells_of_raw_pairs(bench: Bench) -> str:
    made = held(bench)
    manifest = made.manifest
    due = min(RAW_PAIRS, manifest["pairs"] - RAW_FROM)
    if (manifest["raw_first"], manifest["raw_pairs"]) != (RAW_FROM, due):
        told = f"{manifest['raw_pairs']} raw pairs from {manifest['raw_first']}"
        raise Broken(f"{told}, {due} from {RAW_FROM} are due")
    if crc32(raw_bytes(bench, made)) != manifest["raw_crc"]:
        raise Broken("raw_crc is not that of the raw pairs")
    return f"{due} raw pairs from {RAW_FROM} on, and their CRC"


def none_where_none_were_asked_for(bench: Bench) -> str:
    made = whole(bench)
    told = [made.manifest[name] for name in ("raw_first", "raw_pairs", "raw_crc")]
    if any(told):
        raise Broken(f"raw_first, raw_pairs and raw_crc are {told}")
    values = {"sweep_id": made.sweep_id, "first": 0, "count": 1, "a_block": 0}
    frame = bench.ask("fetch_raw", values)
    refused_as(frame, catalogue.KINDS["fetch_raw"], "a fetch_raw of none", "out of range")
    return "none, and none to fetch"


def raw_pairs_in_blocks(bench: Bench) -> str:
    made = held(bench)
    count = made.manifest["raw_pairs"]
    data = raw_bytes(bench, made)
    for a_block in (1, 7):
        part = burst(bench, "fetch_raw", made, 0, count, a_block)
        if part != data[: len(part)]:
            raise Broken(f"other raw pairs in blocks of {a_block}")
    for first in (count - 1, count // 2, count // 2):
        one = burst(bench, "fetch_raw", made, first, 1)
        if one != data[first * RAW_BYTES : (first + 1) * RAW_BYTES]:
            raise Broken(f"another raw pair {first} when asked for alone")
    values = {"sweep_id": OTHER_ID, "first": 0, "count": 1, "a_block": 0}
    if not bench.ask("fetch_raw", values).refusal():
        raise Broken("raw pairs of a sweep that is not held")
    return f"{count} raw pairs, in blocks of {RAW_A_BLOCK}, 7 and 1, and by their place"


def raw_fetches_out_of_range(bench: Bench) -> str:
    made = held(bench)
    count = made.manifest["raw_pairs"]
    wrong = [(count, 1, 0), (0, 0, 0), (0, count + 1, 0), (count - 1, 2, 0), (0, 1, 255)]
    for first, many, a_block in wrong:
        values = {"sweep_id": made.sweep_id, "first": first, "count": many, "a_block": a_block}
        frame = bench.ask("fetch_raw", values)
        what = f"fetch_raw {first}, {many}"
        refused_as(frame, catalogue.KINDS["fetch_raw"], what, "out of range")
    return f"{len(wrong)} fetches refused"


# While nothing is held.
FIRST_CHECKS = (
    Check("raw pairs out of range", ("B7", "K5"), "`out of range`", raw_pairs_out_of_range),
)
# These look at the whole sweep, which has no raw pairs.
CHECKS = (
    Check("the zero reading", ("K3",), "codes where there is a switch", the_zero_reading),
    Check("bounces", ("K4",), "none where none is allowed for", bounces_are_told),
    Check(
        "no raw pairs", ("K6",), "none where none were asked for", none_where_none_were_asked_for
    ),
)
# One more sweep, of which most pairs are raw ones as well.
LAST_CHECKS = (
    Check(
        "raw pairs in the manifest",
        ("K6",),
        "as many as were asked for, from where they were, and their CRC",
        the_manifest_tells_of_raw_pairs,
    ),
    Check("raw pairs in blocks", ("K7",), "blocks in order, as many as due", raw_pairs_in_blocks),
    Check("raw fetches out of range", ("B7", "K7"), "`out of range`", raw_fetches_out_of_range),
    Check(
        "knots follow each other",
        ("K1",),
        "whole bins without a gap, with the sums of their pairs",
        knots_follow_each_other,
    ),
    Check("scatter", ("K2",), "that of the bins' sums", scatter_is_that_of_the_pairs),
)
