"""Kneewise: sweeps, traces and figures from a capacitor-load I-V tracer.

from kneewise import Tracer
with Tracer.open("emulator") as tracer:
    trace = tracer.sweep(knots=96)
trace.voltage, trace.current, trace.figures().pmp
"""

from __future__ import annotations

from importlib import metadata

from kneewise.errors import KneewiseError, UsageError
from kneewise.instrument.full_rate import FullRate
from kneewise.instrument.opened import Opened, register_opener
from kneewise.instrument.trace import REPLAY, Trace
from kneewise.instrument.tracer import Tracer
from kneewise.link.recording import read_recording
from kneewise.link.replay import ReplayPort

__version__ = metadata.version("kneewise")
__all__ = ["FullRate", "KneewiseError", "Trace", "Tracer", "__version__"]


def _emulator(target: str) -> Opened:
    from kneewise.emulator.opener import open_emulator

    return open_emulator(target)


# The instrument does not know the emulator; here, above both, they are put together.
register_opener("emulator", _emulator)


def _replay(target: str) -> Opened:
    file = target.partition(":")[2]
    if not file:
        raise UsageError(
            f"opening {target}",
            found="no file in it",
            expected="replay:FILE, a recording",
            next_step="`kneewise sweep --record FILE` makes one",
        )
    recording = read_recording(file)
    port = ReplayPort(recording)
    return Opened(
        connect=port.connect,
        close=port.close,
        rung=REPLAY,
        utc=port.utc,
        remark=f"REPLAYED from {file}, {recording.remark()}; nothing is measured now",
    )


register_opener("replay", _replay)
