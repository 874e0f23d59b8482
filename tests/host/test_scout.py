"""What a scout tells the sweep after it, and when the two no longer agree."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from traces import make_trace, reference_source

from kneewise.instrument.scout import agreement, maximum_s, steered_limit_s, unusable, with_scout
from kneewise.instrument.trace import Check

PROFILE = {"pair_us": 4, "bounce_ms": 0}


def test_the_instant_of_the_maximum() -> None:
    trace = make_trace(knots=32)
    vmp = trace.figures().vmp.value
    behind = int(np.searchsorted(trace.voltage, vmp))
    assert trace.time[behind - 1] <= maximum_s(trace) <= trace.time[behind]


def test_a_closed_time_of_twice_the_scout_s_and_never_more_than_asked_for() -> None:
    scout = make_trace()
    assert scout.integrity.pairs == 4000
    assert steered_limit_s(scout, 10.0, PROFILE) == pytest.approx(2 * 0.016 + 0.02)
    assert steered_limit_s(scout, 10.0, {**PROFILE, "bounce_ms": 8}) == pytest.approx(0.06)
    assert steered_limit_s(scout, 0.03, PROFILE) == 0.03


@pytest.mark.parametrize(("change", "holds"), [(0.0, True), (0.008, True), (-0.012, False)])
def test_a_change_of_light_shows(change: float, holds: bool) -> None:
    """Else a cloud between the two would pass for a property of the module."""
    source = reference_source()
    lit = replace(source, photocurrent=source.photocurrent * (1.0 + change))
    check = agreement(make_trace(source, knots=32), make_trace(lit, seed=1))
    assert check.name == "agrees with the scout sweep"
    assert check.holds == holds, check.found
    assert f"Isc {100 * change:+.1f}" in check.found
    assert check.expected == "Isc within 1 %, Voc within 0.5 %, Pmp within 1 %"


def test_scatter_alone_is_no_change_of_light() -> None:
    scouts = [make_trace(knots=32, noise=0.03, seed=seed) for seed in range(6)]
    assert all(agreement(scout, make_trace(noise=0.03, seed=99)).holds for scout in scouts)


def test_a_sweep_without_figures_agrees_with_nothing() -> None:
    dark = make_trace()
    dark = replace(dark, current=np.zeros_like(dark.current))
    check = agreement(make_trace(), dark)
    assert not check.holds
    assert check.found.startswith("no figures: ")


def test_a_sweep_keeps_its_scout_and_is_judged_by_it() -> None:
    scout, trace = make_trace(knots=32), make_trace()
    both = with_scout(trace, scout)
    assert both.scout is scout
    assert both.checks[:-1] == trace.checks
    assert both.sound


def test_a_bad_scout_is_told_with_what_failed() -> None:
    scout = make_trace(knots=32)
    assert unusable(scout) is None
    bad = replace(scout, checks=(Check("ended by itself", False, "time limit", "complete"),))
    error = unusable(bad)
    assert error is not None
    assert (error.found, error.expected) == (
        "ended by itself: time limit",
        "ended by itself: complete",
    )
    assert "was not made" in error.next_step
    dark = unusable(replace(scout, current=np.zeros_like(scout.current)))
    assert dark is not None
    assert dark.found.startswith("no figures: ")
