"""Checks of T and C on a device, and of F and B over all that it has sent."""

from __future__ import annotations

from conformance.bench import Bench
from conformance.checks import Check
from conformance.report import Broken
from kneewire import catalogue, framing
from kneewire.messages import pack


def times_never_go_back(bench: Bench) -> str:
    if bench.device["ticks_per_s"] != 1000000:
        raise Broken(f"ticks_per_s {bench.device['ticks_per_s']}")
    last = 0
    for frame in bench.heard:
        for field in ("time_us", "replied_us"):
            if frame.message is not None and field in frame.message.values:
                if frame.message[field] < last:
                    raise Broken(f"{field} {frame.message[field]} after {last}")
                last = frame.message[field]
    return f"{last} us at the last"


def heartbeats_stamp(bench: Bench) -> str:
    before = bench.status()["time_us"]
    reply = bench.ask("heartbeat").reply("heartbeat_reply")
    after = bench.status()["time_us"]
    times = (before, reply["received_us"], reply["replied_us"], after)
    if sorted(times) != list(times):
        raise Broken(f"{', '.join(str(time) for time in times)} us")
    return f"{reply['replied_us'] - reply['received_us']} us from request to reply"


def counters_count(bench: Bench) -> str:
    good, bad = 7, 5
    before = bench.counts()
    many = b"".join(bench.frame("heartbeat", sequence=number) for number in range(good))
    bench.answers(many + bad * (b"zz" + b"\0"))
    after = bench.counts()
    counted = (after[0] - before[0], after[1] - before[1])
    # Two heartbeats that end an exchange, and the second status.
    if counted != (good + 3, bad):
        raise Broken(f"{counted[0]} good and {counted[1]} bad for {good + 3} and {bad}")
    return f"{good + 3} good and {bad} bad frames counted"


def no_bad_run(bench: Bench, *reasons: str) -> str:
    wrong = [run for run in bench.bad if run.reason in reasons]
    if wrong:
        raise Broken(f"{len(wrong)} runs that are no frame ({wrong[0].reason})")
    return f"{len(bench.heard)} frames"


def coded_by_cobs(bench: Bench) -> str:
    return no_bad_run(bench, framing.BAD_COBS)


def crc_agrees(bench: Bench) -> str:
    return no_bad_run(bench, framing.BAD_CRC)


def lengths_fit(bench: Bench) -> str:
    for frame in bench.heard:
        if len(frame.body) + framing.CRC_BYTES > catalogue.MAX_FRAME:
            raise Broken(f"{frame} of {len(frame.body)} bytes")
    return no_bad_run(bench, framing.BAD_SHORT)


def bodies_as_in_the_tables(bench: Bench) -> str:
    names = set()
    for frame in bench.heard:
        message = frame.message
        if message is None:
            raise Broken(f"a body that is no message: {frame.body.hex()}")
        body = pack(message.name, message.session, message.sequence, message.values)
        if body != frame.body:
            raise Broken(f"{message.name} is {frame.body.hex()}, by the tables {body.hex()}")
        names.add(message.name)
    return f"{len(names)} kinds of message"


CHECKS = (
    Check("stamps of a heartbeat", ("T2",), "rising times", heartbeats_stamp),
    Check("the counters", ("C3",), "each frame counted, good or bad", counters_count),
)
# Over all frames of the whole run.
LAST_CHECKS = (
    Check("times never go back", ("T1",), "rising times, in us", times_never_go_back),
    Check("coded by COBS", ("F1",), "runs that COBS can have made", coded_by_cobs),
    Check("the CRC agrees", ("F2",), "the CRC-32 of each body", crc_agrees),
    Check("lengths", ("F3",), "bodies of 1 to 252 bytes", lengths_fit),
    Check("bodies", ("B1",), "fields as in the tables, without gaps", bodies_as_in_the_tables),
)
