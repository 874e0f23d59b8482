"""Kneewise: sweeps, traces and figures from a capacitor-load I-V tracer.

from kneewise import Tracer
with Tracer.open("emulator") as tracer:
    trace = tracer.sweep(knots=96)
trace.voltage, trace.current, trace.figures().pmp
"""

from __future__ import annotations

from importlib import metadata

from kneewise.errors import KneewiseError
from kneewise.instrument.trace import Trace
from kneewise.instrument.tracer import Opened, Tracer, register_opener

__version__ = metadata.version("kneewise")
__all__ = ["KneewiseError", "Trace", "Tracer", "__version__"]


def _emulator(target: str) -> Opened:
    from kneewise.emulator.opener import open_emulator

    return open_emulator(target)


# The instrument does not know the emulator; here, above both, they are put together.
register_opener("emulator", _emulator)
