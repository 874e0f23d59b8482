"""The numbers of the wire: reading, coding, a bad link, overhead."""

from __future__ import annotations

import statistics
import time
import zlib
from collections.abc import Callable, Iterator
from random import Random

from cobs import cobs

from kneewire import framing
from kneewire.messages import KNOT_BYTES, Message, pack, unpack
from kneewise.emulator.faults import FaultyPort, LinkFaults
from kneewise.emulator.opener import connector, start
from kneewise.emulator.scenario import Scenario
from kneewise.errors import KneewiseError
from kneewise.instrument.opened import Opened
from kneewise.instrument.sweep import knot_view, unpack_records
from kneewise.instrument.trace import RawKnots, Trace
from kneewise.instrument.tracer import Tracer

from .m0 import Core
from .row import Row

KNOTS = 96
LOSE, CORRUPT = 0.01, 0.001
FIELDS = ("time_us", "voltage_sum", "current_sum", "pairs", "voltage_scatter", "current_scatter")


def rows(quick: bool) -> Iterator[Row]:
    yield reading(quick)
    yield coding()
    yield from bad_link(50 if quick else 500)
    yield overhead()


# -- reading ---------------------------------------------------------------------------------


def reading(quick: bool) -> Row:
    """A stream of full blocks to messages with numpy knots, against the bare loop."""
    draw = Random(1)
    frames = [
        framing.encode(
            pack("block", 7, 9, {"first": 6 * n % 512, "data": draw.randbytes(240)}), False
        )
        for n in range(2000)
    ]
    stream = b"".join(frames)

    def bare() -> int:
        good = 0
        for run in stream.split(b"\0"):
            if run:
                whole = cobs.decode(run)
                good += zlib.crc32(whole[:-4]) == int.from_bytes(whole[-4:], "little")
        return good

    def ours() -> int:
        decoder = framing.Decoder(4096, toward_device=False)
        read: list[Message] = []
        for place in range(0, len(stream), 4096):
            for item in decoder.feed(stream[place : place + 4096]):
                assert isinstance(item, bytes)
                message = unpack(item)
                message.values["knots"] = knot_view(message["data"])
                read.append(message)
        return len(read)

    assert bare() == ours() == len(frames)
    ratios = [_seconds(bare) / _seconds(ours) for _ in range(11 if quick else 41)]
    return Row("reading, over the bare loop", statistics.median(ratios), "1", 0.3, at_least=True)


def _seconds(action: Callable[[], object]) -> float:
    begun = time.perf_counter()
    action()
    return time.perf_counter() - begun


# -- the device's coder ------------------------------------------------------------------------


def coding() -> Row:
    """Worst cycles a byte of a full block, on an emulated Cortex-M0+, CRC excluded."""
    bodies = [bytes(256), bytes(range(1, 256)) + b"\1", Random(2).randbytes(256)]
    core = Core("coder_thumb", "cobs_into")
    ran = (core.call(bytearray(body), len(body), bytearray(259)) for body in bodies)
    worst = max(one.cycles for one in ran) / 256
    return Row("coding a block, cycles a byte", worst, "cycles", 100.0, at_least=False)


# -- a bad link ------------------------------------------------------------------------------


def same(one: RawKnots, other: RawKnots) -> bool:
    return all((getattr(one, name) == getattr(other, name)).all() for name in FIELDS)


def bad_link(sweeps: int) -> Iterator[Row]:
    """Sweeps with 1 % of bytes lost and 0.1 % damaged both ways, forged Ctrl-C included."""
    emulated = start(Scenario.default(), "in-process")
    connect = connector(emulated)
    ports: list[FaultyPort] = []

    def faulty() -> FaultyPort:
        faults = LinkFaults(lose=LOSE, corrupt=CORRUPT)
        ports.append(FaultyPort(connect(), faults, seed=len(ports) + 1))
        return ports[-1]

    exact = 0

    def keep(trace: Trace) -> None:
        nonlocal exact
        held = emulated.firmware.held
        exact += same(trace.raw, unpack_records(b"".join(bytes(piece) for piece in held.pieces())))

    def carried() -> int:
        return sum(port.carried for port in ports)

    clean_bytes, clean_s = clean_sweep()
    tracer = Tracer(Opened(connect=faulty, close=lambda: None, rung="in-process"))
    begun_us, begun_bytes = emulated.board.virtual_us, carried()
    for _ in range(sweeps):
        try:
            tracer.sweep(knots=KNOTS, keep=keep)
        except KneewiseError as error:
            print(f"lost: {error}")
    seconds = (emulated.board.virtual_us - begun_us) / 1e6 / sweeps - clean_s
    extra = (carried() - begun_bytes) / sweeps - clean_bytes
    rescues = tracer._session.frames.counters.rescues
    tracer.close()
    emulated.close()
    yield Row(f"bad link, exact of {sweeps} sweeps", exact, "sweeps", sweeps, at_least=True)
    yield Row("bad link, mean extra bytes a sweep", extra, "bytes", None)
    yield Row("bad link, mean extra time a sweep", seconds, "s", None)
    yield Row("bad link, rescues from the prompt", rescues, "times", None)


def clean_sweep() -> tuple[int, float]:
    """Bytes both ways and seconds of a sweep on a good link, from `sweep` to its return."""
    emulated = start(Scenario.default(), "in-process")
    port = FaultyPort(connector(emulated)(), LinkFaults(), seed=1)
    tracer = Tracer(Opened(connect=lambda: port, close=lambda: None, rung="in-process"))
    begun_us, begun_bytes = emulated.board.virtual_us, port.carried
    tracer.sweep(knots=KNOTS)
    spent = port.carried - begun_bytes, (emulated.board.virtual_us - begun_us) / 1e6
    tracer.close()
    emulated.close()
    return spent


# -- overhead --------------------------------------------------------------------------------


def overhead() -> Row:
    """All bytes from arm to acknowledgement over those of the knots' fields."""
    emulated = start(Scenario.default(), "in-process")
    port = FaultyPort(connector(emulated)(), LinkFaults(), seed=1)
    tracer = Tracer(Opened(connect=lambda: port, close=lambda: None, rung="in-process"))
    begun: list[int] = []

    def progress(stage: str) -> None:
        if stage == "arming":
            begun.append(port.carried)

    tracer.sweep(knots=KNOTS, progress=progress)
    spent = port.carried - begun[0]
    tracer.close()
    emulated.close()
    return Row("bytes over knot bytes", spent / (KNOTS * KNOT_BYTES), "1", 1.25, at_least=False)
