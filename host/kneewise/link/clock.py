"""Device ticks to host time, from probes with four time stamps.

The offset of one probe and its round trip are those of RFC 5905 section 8:
theta = ((T2 - T1) + (T3 - T4)) / 2, delta = (T4 - T1) - (T3 - T2).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

FLOOR_S = 20e-6  # a round trip cannot be trusted to better than this


@dataclass(frozen=True, slots=True)
class Probe:
    """Times in seconds: `sent`, `returned` by the host, `received`, `replied` by the device."""

    sent: float
    received: float
    replied: float
    returned: float

    @property
    def offset(self) -> float:
        """Device time less host time."""
        return ((self.received - self.sent) + (self.replied - self.returned)) / 2

    @property
    def round_trip(self) -> float:
        return (self.returned - self.sent) - (self.replied - self.received)


@dataclass(frozen=True, slots=True)
class Offset:
    """Device time less host time in seconds, and a bound: half the best round trip."""

    offset_s: float
    uncertainty_s: float


def estimate(probes: Sequence[Probe]) -> Offset:
    """Weighted mean of the probes' offsets, weight 1 / (excess half round trip + 20 us)^2.

    ValueError for no probes.
    """
    if not probes:
        raise ValueError("no probes")
    least = min(probe.round_trip for probe in probes)
    weights = [((probe.round_trip - least) / 2 + FLOOR_S) ** -2 for probe in probes]
    mean = sum(w * probe.offset for w, probe in zip(weights, probes, strict=True)) / sum(weights)
    return Offset(mean, max(least, 0.0) / 2 + FLOOR_S)
