"""If these fail, knots stand where the curve is straight and miss the knee that matters."""

from itertools import pairwise

import charge_curves as curves
import folding
import numpy as np
import pytest
from charge_curves import charge, in_plane, misfit, module_curve, stepped_curve


def points(pairs: np.ndarray, knots: int, curve) -> np.ndarray:
    """The knots in the plane of the true curve."""
    placed = folding.Placed(folding.filled(pairs), knots)
    folding.check_knots(pairs, placed, knots)
    volt, current = curve
    v = np.array([k["voltage_sum"] / k["pairs"] for k in placed.knots]) - curves.V_ZERO
    i = np.array([k["current_sum"] / k["pairs"] for k in placed.knots]) - curves.A_ZERO
    return np.stack(
        [v * curves.V_PER_CODE / volt[-1], i * curves.A_PER_CODE / current.max()], axis=1
    )


def near(found: np.ndarray, spot: np.ndarray, reach: float = 0.12) -> int:
    """Knots within `reach` of a spot of the plane."""
    return int((np.hypot(*(found - spot).T) < reach).sum())


def knee(curve) -> np.ndarray:
    """Where the plane's curve is farthest from the corner opposite to (1, 1)."""
    plane = in_plane(curve)
    return plane[np.argmax(plane[:, 0] * plane[:, 1])]


@pytest.mark.parametrize("knots", [16, 24, 32, 48])
def test_knots_stand_closer_at_the_knee_than_elsewhere(knots):
    curve = module_curve()
    found = points(charge(curve), knots, curve)
    flat = np.array([0.3, 0.98])
    assert near(found, knee(curve)) >= max(2 * near(found, flat), knots // 4)


CODE = curves.A_PER_CODE / 9.2  # in the plane


@pytest.mark.parametrize(
    ("knots", "codes"),
    [(16, 3.0), (24, 1.5), (32, 1.5), (48, 1.5), (64, 1.5), (96, 1.5), (200, 1.5)],
)
def test_the_curve_between_knots_is_true_within_codes(knots, codes):
    """With many knots noise makes the errors and they are spread more evenly, but not blindly."""
    curve = module_curve()
    found = points(charge(curve), knots, curve)
    assert misfit(curve, found) < codes * CODE
    assert near(found, knee(curve)) >= knots // 7


@pytest.mark.parametrize(("knots", "share"), [(16, 0.3), (24, 0.3), (48, 0.3), (96, 0.6)])
def test_the_curve_between_knots_is_truer_than_between_as_many_equal_times(knots, share):
    curve = module_curve()
    pairs = charge(curve, noise=0.0)
    placed = misfit(curve, points(pairs, knots, curve))
    ends = np.linspace(0, len(pairs), knots + 1).astype(int)
    means = np.array([pairs[a:b].mean(axis=0) for a, b in pairwise(ends)])
    volt, current = curve
    scale = [curves.V_PER_CODE / volt[-1], curves.A_PER_CODE / current.max()]
    equal = misfit(curve, (means - [curves.V_ZERO, curves.A_ZERO]) * scale)
    assert placed < share * equal


def test_both_knees_of_a_shaded_module_get_their_share():
    curve = stepped_curve()
    found = points(charge(curve), 96, curve)
    plane = in_plane(curve)
    power = plane[:, 0] * plane[:, 1]
    half = plane[:, 0] < 0.72
    first = plane[half][np.argmax(power[half])]
    second = plane[~half][np.argmax(power[~half])]
    assert near(found, first, 0.1) >= 14
    assert near(found, second, 0.1) >= 14
    between = (found[:, 0] > first[0] + 0.1) & (found[:, 0] < second[0] - 0.1)
    assert between.sum() <= 14


@pytest.mark.parametrize("seed", range(6))
def test_at_low_light_noise_does_not_pass_for_a_knee(seed):
    # 0.18 A is 35 codes; each has a noise of one.
    curve = module_curve(0.18)
    pairs = charge(curve, seed=seed)
    found = points(pairs, 64, curve)
    assert near(found, knee(curve), 0.15) >= 12
    # Nor does any other part of the curve swallow them.
    for share in (0.2, 0.4, 0.6):
        spot = in_plane(curve)[np.argmin(abs(in_plane(curve)[:, 0] - share))]
        assert near(found, spot, 0.15) <= 20
    assert misfit(curve, found) < 0.004


@pytest.mark.parametrize("until", [0.02, 0.1, 0.4, 0.7])
def test_a_curve_cut_short_has_its_knots_along_what_there_is(until):
    curve = module_curve()
    pairs = charge(curve, until=until)
    found = points(pairs, 64, curve)
    steps = np.diff(found[:, 0])
    assert steps.max() < 0.1 * until
    assert found[-1, 0] == pytest.approx(until, rel=0.05)


@pytest.mark.parametrize("capacitance_f", [1e-3, 2.2e-3, 10e-3, 47e-3])
def test_the_pace_of_the_charge_does_not_move_the_knots_from_the_knee(capacitance_f):
    curve = module_curve()
    found = points(charge(curve, noise=0.0, capacitance_f=capacitance_f), 48, curve)
    assert misfit(curve, found) < 6e-4
    assert 12 <= near(found, knee(curve)) <= 22
