"""When a sweep began, by the host's clock: probes of the device's clock, and the time of day.

Comes in: a session. Goes out: UTC with its uncertainty. How offsets are weighed is
`link/clock.py`'s.
"""

from __future__ import annotations

from datetime import datetime, timedelta

from kneewise.errors import LinkError, TrustError
from kneewise.link.clock import Probe, estimate
from kneewise.link.session import Session

CLOCK_PROBES = 4
PROBE_TRIES = 40


def probes_of(session: Session) -> list[Probe]:
    """Clock probes. One that was sent twice says nothing: which of the two was answered?"""
    clock = session.port.clock
    counters = session.frames.counters
    found: list[Probe] = []
    for _ in range(PROBE_TRIES):
        sent, again = clock(), counters.sent_again
        reply = session.request("heartbeat")
        if counters.sent_again == again:
            received, replied = reply["received_us"] / 1e6, reply["replied_us"] / 1e6
            found.append(Probe(sent, received, replied, clock()))
        if len(found) == CLOCK_PROBES:
            return found
    if not found:
        raise LinkError(
            f"setting the clock by {session.port.name}",
            found=f"no answer at the first asking in {PROBE_TRIES} tries "
            f"({session.frames.summary()})",
            expected="one at the least",
            next_step="use a shorter or better cable; the sweep is still held",
        )
    return found


def utc_of(
    device_us: int, probes: list[Probe], session: Session, now: datetime
) -> tuple[str, float]:
    """UTC (ISO 8601) of a device's time, and its uncertainty in s. `now` is that at the tracer."""
    offset = estimate(probes)
    ago_s = session.port.clock() + offset.offset_s - device_us / 1e6
    try:
        started = now - timedelta(seconds=ago_s)
    except OverflowError:
        raise TrustError(
            f"setting the clock by {session.port.name}",
            found=f"a sweep {ago_s:g} s ago",
            expected="times since the device's boot",
            next_step="use firmware and host of the same version; then sweep again",
        ) from None
    return started.isoformat(), offset.uncertainty_s
