"""A scout sweep: a coarse first sweep that tells the one after it where to look.

Comes in: the scout's trace, and what was asked for. Goes out: the settings of the sweep that
follows, and afterwards a check that the two agree, so that a change of light between them
shows. Speaking to the device is `tracer.py`'s.
"""

from __future__ import annotations

from dataclasses import replace
from math import hypot
from typing import Any

import numpy as np

from kneewise.curve.figures import NoFigures
from kneewise.errors import TrustError
from kneewise.instrument.full_rate import pair_us_of
from kneewise.instrument.trace import Check, Trace

SCOUT_KNOTS = 32
LONGER = 2.0
"""The sweep that follows may last so much longer than the scout: by noise alone the end of one
is found up to half as late again as that of the other."""
LEAST_MARGIN_S = 0.02
LIMITS = {"isc": 0.01, "voc": 0.005, "pmp": 0.01}
"""How far the figures of two sweeps of one source in one light may differ, as fractions. Current
goes with the light; Voc moves by its logarithm, and by 0.3 % for a kelvin (common practice)."""
SIGMAS = 4.0
NAMES = {"isc": "Isc", "voc": "Voc", "pmp": "Pmp"}


def unusable(scout: Trace) -> TrustError | None:
    """Why nothing can be steered by this scout; None for a good one."""
    failed = [check for check in scout.checks if not check.holds]
    found = [f"{check.name}: {check.found}" for check in failed]
    expected = [f"{check.name}: {check.expected}" for check in failed]
    try:
        scout.figures()
    except NoFigures as error:
        found.append(f"no figures: {error.reason}")
        expected.append("a curve with a maximum")
    if not found:
        return None
    return TrustError(
        f"scout sweep {scout.trace_id[:8]}",
        found="; ".join(found),
        expected="; ".join(expected),
        next_step="the sweep that it was to steer was not made; mend the cause and sweep again, "
        "or sweep without a scout",
    )


def maximum_s(trace: Trace) -> float:
    """When the maximum power was passed, s after conduction began. NoFigures."""
    vmp = trace.figures().vmp.value
    return float(np.interp(vmp, np.maximum.accumulate(trace.voltage), trace.time))


def steered_limit_s(scout: Trace, limit_s: float, profile: dict[str, Any]) -> float:
    """The longest closed time for a source that the scout found to take so long."""
    lasted_s = 1e-6 * pair_us_of(profile) * scout.integrity.pairs
    margin_s = LEAST_MARGIN_S + 1e-3 * float(profile.get("bounce_ms", 0))
    return min(limit_s, LONGER * lasted_s + margin_s)


def with_scout(trace: Trace, scout: Trace) -> Trace:
    """`trace` with its scout, and with the check that the two agree."""
    return replace(trace, scout=scout, checks=(*trace.checks, agreement(scout, trace)))


def agreement(scout: Trace, trace: Trace) -> Check:
    """Do Isc, Voc and Pmp differ by less than `LIMITS`, or by less than scatter explains?"""
    name = "agrees with the scout sweep"
    expected = ", ".join(f"{NAMES[each]} within {100 * LIMITS[each]:g} %" for each in LIMITS)
    try:
        before, after = scout.figures(), trace.figures()
    except NoFigures as error:
        return Check(name, False, f"no figures: {error.reason}", expected)
    holds, found = True, []
    for each, limit in LIMITS.items():
        one, two = getattr(before, each), getattr(after, each)
        scatter = hypot(one.standard_uncertainty, two.standard_uncertainty)
        holds &= abs(two.value - one.value) <= max(limit * abs(one.value), SIGMAS * scatter)
        found.append(f"{NAMES[each]} {100 * (two.value / one.value - 1):+.2f} %")
    return Check(name, bool(holds), ", ".join(found), expected)
