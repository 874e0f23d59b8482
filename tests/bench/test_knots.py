"""If these fail, the curve through the knots is less true than so few points allow.

The search for the optimum needs many tolerances; here one is enough: that the error found, over
the goal's factor, is out of reach for any choice of as many points.
"""

from __future__ import annotations

import numpy as np
import pytest

from bench import knots, optimum, placing
from bench.charges import PAIR_NS, SOURCES, codes_of, pace, source


@pytest.mark.parametrize("name", SOURCES)
@pytest.mark.parametrize("count", knots.KNOTS)
def test_the_hosts_points_are_near_the_best_and_far_better_than_equal_times(
    name: str, count: int
) -> None:
    curve = knots.Curve.of(name)
    cuts = placing.exact_places(curve.x, curve.y, count)
    assert len(cuts) == count + 1
    found = curve.error(*curve.points(cuts))
    out_of_reach = found / knots.over_optimum(name)
    assert not optimum.feasible(curve.fine_x, curve.fine_y, count, out_of_reach)
    equal = curve.error(*curve.at_equal_times(count))
    assert equal >= knots.UNDER_EQUAL_TIMES * found


@pytest.mark.parametrize(
    ("name", "bin_pairs"), [("mini-module", 1), ("string", 2), ("100 W/m2", 8)]
)
def test_the_firmwares_records_are_the_sums_over_its_pairs(name: str, bin_pairs: int) -> None:
    made = source(name)
    codes = codes_of(made, count=int(made.end_s / (1e-9 * PAIR_NS)))
    raw, found_bin_pairs = placing.sent(codes, 96)
    assert found_bin_pairs == bin_pairs
    expected = codes.knots(raw.pairs.astype(np.int64), bin_pairs)
    assert len(raw) == 96
    for column in ("time_us", "voltage_sum", "current_sum", "voltage_scatter", "current_scatter"):
        assert (getattr(raw, column) == getattr(expected, column)).all(), column


@pytest.mark.parametrize("points", [2, 3, 9, 40])
def test_the_search_finds_the_known_optimum_of_a_circle(points: int) -> None:
    angle = np.linspace(0.0, np.pi / 2.0, 937)
    x, y = np.sin(angle), np.cos(angle)
    best = 1.0 - np.cos(np.pi / 4.0 / (points - 1))
    assert optimum.optimum(x, y, points) == pytest.approx(best, rel=0.05)
    assert not optimum.feasible(x, y, points, 0.99 * best)


@pytest.mark.parametrize(
    ("volts", "begin_a", "end_a", "milliseconds"), [(4.0, 8.0, 8.0, 1.00), (1.6, 7.0, 6.0, 0.49)]
)
def test_charges_take_the_time_of_capacitance_times_voltage_over_current(
    volts: float, begin_a: float, end_a: float, milliseconds: float
) -> None:
    """C dV / I (common practice) with 2 mF: 8 A for 4 V, a mean of 6.5 A for 1.6 V."""
    share = np.linspace(0.0, 1.0, 1001)
    time = pace(volts * share, begin_a + (end_a - begin_a) * share, 2e-3)
    assert 1e3 * time[-1] == pytest.approx(milliseconds, abs=0.005)


@pytest.mark.parametrize(("name", "fill_factor"), [("one knee", 0.78), ("low fill factor", 0.55)])
def test_the_sources_are_what_their_names_say(name: str, fill_factor: float) -> None:
    made = source(name)
    assert made.truth["pmp"] / (made.isc * made.voc) == pytest.approx(fill_factor, abs=0.005)
