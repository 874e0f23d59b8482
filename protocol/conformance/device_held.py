"""Checks of W9 to W11 on a device: a held sweep, its manifest, its knots, its end."""

from __future__ import annotations

from itertools import pairwise
from zlib import crc32

from conformance.bench import KNOTS, Bench, new_nonce
from conformance.bursts import BURSTS
from conformance.checks import Check
from conformance.device_bodies import OTHER_ID, refused_as
from conformance.report import Broken
from conformance.sweeping import Sweep, whole
from kneewire import catalogue
from kneewire.messages import KNOT_BYTES, KNOTS_A_BLOCK, unpack_knots


def held(bench: Bench) -> Sweep:
    """The whole sweep, still held."""
    made = whole(bench)
    status = bench.status()
    if not status["held"] or status["sweep_id"] != made.sweep_id:
        raise Broken("the sweep is no longer held")
    if not made.manifest["knots"]:
        raise Broken(f"no knots in a sweep that ended as {made.end_reason}")
    return made


def burst(bench: Bench, name: str, made: Sweep, first: int, count: int, a_block: int = 0) -> bytes:
    """The records of one `fetch` or `fetch_raw`, each block looked at."""
    kind = BURSTS[name]
    size, what = kind.record_bytes, kind.what
    values = {"sweep_id": made.sweep_id, "first": first, "count": count, "a_block": a_block}
    *blocks, last = bench.answers(bench.frame(name, values))
    reply = last.reply(f"{name}_reply")
    limit = a_block or kind.most_a_block
    due = min(count, bench.device["window"] * limit)
    if (reply["first"], reply["count"]) != (first, due):
        raise Broken(f"{reply} to {values}")
    data = b""
    for frame in blocks:
        block = frame.reply(kind.block)
        if frame.sequence != last.sequence:
            raise Broken(f"a block with another sequence than its {name}")
        if block["first"] != first + len(data) // size:
            raise Broken(f"a block from number {block['first']} out of order")
        if not 0 < len(block["data"]) <= limit * size or len(block["data"]) % size:
            raise Broken(f"a block of {len(block['data'])} bytes, {limit} {what} at most")
        data += block["data"]
    if len(data) != due * size or len(blocks) > bench.device["window"]:
        raise Broken(f"{len(blocks)} blocks with {len(data) // size} of {due} {what}")
    return data


def fetch(bench: Bench, made: Sweep, first: int, count: int, a_block: int = 0) -> bytes:
    """The knot records of one burst."""
    return burst(bench, "fetch", made, first, count, a_block)


def everything(bench: Bench, made: Sweep) -> bytes:
    count = made.manifest["knots"]
    data = b""
    while len(data) < count * KNOT_BYTES:
        first = len(data) // KNOT_BYTES
        data += fetch(bench, made, first, count - first)
    return data


def a_held_sweep_stays(bench: Bench) -> str:
    made = held(bench)
    bench.hello(new_nonce())
    frame = bench.ask("arm", bench.arm_values())
    if frame.refusal() != "another sweep is held":
        raise Broken(f"{frame} to an arm while a sweep is held")
    held(bench)
    manifest = bench.ask("read_manifest").reply("manifest")
    if manifest["knots_crc"] != made.manifest["knots_crc"]:
        raise Broken("another sweep in its place")
    return "held in a new session, and in the way of arming"


def knots_in_blocks(bench: Bench) -> str:
    made = held(bench)
    count = made.manifest["knots"]
    data = everything(bench, made)
    for a_block in (1, 4):
        part = fetch(bench, made, 0, count, a_block)
        if part != data[: len(part)]:
            raise Broken(f"other knots in blocks of {a_block}")
    for first in (count - 1, count // 2, count // 2):
        if fetch(bench, made, first, 1) != data[first * KNOT_BYTES : (first + 1) * KNOT_BYTES]:
            raise Broken(f"another knot {first} when asked for alone")
    refused = bench.ask("fetch", {"sweep_id": OTHER_ID, "first": 0, "count": 1, "a_block": 0})
    if not refused.refusal():
        raise Broken("knots of a sweep that is not held")
    return f"{count} knots, in blocks of {KNOTS_A_BLOCK}, 4 and 1, and by their place"


def fetches_out_of_range(bench: Bench) -> str:
    made = held(bench)
    count = made.manifest["knots"]
    wrong = [(count, 1, 0), (0, 0, 0), (0, count + 1, 0), (count - 1, 2, 0), (0, 1, 255)]
    for first, many, a_block in wrong:
        values = {"sweep_id": made.sweep_id, "first": first, "count": many, "a_block": a_block}
        frame = bench.ask("fetch", values)
        refused_as(frame, catalogue.KINDS["fetch"], f"fetch {first}, {many}", "out of range")
    return f"{len(wrong)} fetches refused"


def the_manifest_agrees(bench: Bench) -> str:
    made = held(bench)
    manifest = made.manifest
    data = everything(bench, made)
    if manifest["sweep_id"] != made.sweep_id:
        raise Broken("the manifest of another sweep")
    if crc32(data) != manifest["knots_crc"]:
        raise Broken("knots_crc is not that of the knots")
    if sum(knot["pairs"] for knot in unpack_knots(data)) != manifest["pairs"]:
        raise Broken("pairs of the manifest are not those of the knots")
    if not 0 < manifest["knots"] <= KNOTS:
        raise Broken(f"{manifest['knots']} knots, {KNOTS} asked for")
    return f"{manifest['knots']} knots of {manifest['pairs']} pairs, and their CRC"


def acknowledge_frees(bench: Bench) -> str:
    made = held(bench)
    if bench.ask("acknowledge", {"sweep_id": OTHER_ID}).reply("acknowledge_reply")["freed"]:
        raise Broken("freed by the id of another sweep")
    held(bench)
    freed = bench.ask("acknowledge", {"sweep_id": made.sweep_id})
    if freed.reply("acknowledge_reply")["freed"] != 1:
        raise Broken("not freed by its own id")
    if bench.ask("read_manifest").refusal() != "no held sweep":
        raise Broken("still held after its acknowledgement")
    return "freed by its own id, and not by another"


def a_fired_token_is_spent(bench: Bench) -> str:
    made = whole(bench)
    bench.drop_own()
    bench.refused_fire(made.token, "a token that has fired")
    return "refused"


def times_of_a_sweep(bench: Bench) -> str:
    made = held(bench)
    knots = unpack_knots(everything(bench, made))
    manifest = made.manifest
    times = [
        made.before["time_us"],
        manifest["conducting_us"],
        *(knot["time_us"] for knot in knots),
        manifest["opened_us"],
        made.in_bleeding["time_us"],
    ]
    for earlier, later in pairwise(times):
        if later < earlier:
            raise Broken(f"{later} us after {earlier} us")
    return f"{manifest['conducting_us']} us to {manifest['opened_us']} us, and knots between"


CHECKS = (
    Check("the manifest", ("W10",), "id, counts and CRC of the knots", the_manifest_agrees),
    Check("knots in blocks", ("W11",), "blocks in order, as many as due", knots_in_blocks),
    Check("fetches out of range", ("B7", "W11"), "`out of range`", fetches_out_of_range),
    Check("times of a sweep", ("T1",), "rising from before the fire on", times_of_a_sweep),
    Check("a held sweep stays", ("W9",), "held until acknowledged", a_held_sweep_stays),
)
LAST_CHECKS = (
    Check("acknowledging", ("W10",), "freed by its own id alone", acknowledge_frees),
    Check("a token that has fired", ("W3",), "a refusal", a_fired_token_is_spent),
)
