"""The figures of a curve: what would a user lose? Isc, Voc, Pmp to stand behind.

Sources are single-diode ones: random and invented, or rows of the CEC module table of the SAM
project as it ships with pvlib, by their index, at 1000 W/m2 and 25 degC through
`pvlib.pvsystem.calcparams_cec`. The truth is `pvlib.pvsystem.singlediode`.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pvlib  # type: ignore[import-untyped]
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from traces import Floats, Knots, Source, reference_source, sweep

from kneewise.curve.figures import Figures, NoFigures, Quantity, extract

NAMES = ("isc", "voc", "imp", "vmp", "pmp", "ff")


def random_sources(count: int, seed: int) -> list[Source]:
    """Sources with fill factor 0.5 to 0.82, as the estimators are laid out for."""
    rng = np.random.default_rng(seed)
    sources: list[Source] = []
    while len(sources) < count:
        source = Source.random(rng)
        if 0.5 <= source.truth()["ff"] <= 0.82:
            sources.append(source)
    return sources


def cec_sources(step: int) -> list[Source]:
    table = pvlib.pvsystem.retrieve_sam("CECMod")
    sources = []
    for index in range(0, table.shape[1], step):
        row = table.iloc[:, index]
        at = pvlib.pvsystem.calcparams_cec(
            1000.0,
            25.0,
            row["alpha_sc"],
            row["a_ref"],
            row["I_L_ref"],
            row["I_o_ref"],
            row["R_sh_ref"],
            row["R_s"],
            row["Adjust"],
        )
        photocurrent, saturation, series, shunt, thermal = (float(part) for part in at)
        sources.append(Source(photocurrent, saturation, series, shunt, thermal))
    return sources


def figures_of(knots: Knots, voc_static: float | None) -> Figures:
    return extract(knots.voltage, knots.current, voc_static=voc_static, **knots.arguments())


def errors(
    source: Source, knots: int, *, start: float, static: bool = True, evenness: float = 0.3
) -> dict[str, float]:
    """Relative errors of the figures of a sweep without noise, in percent."""
    truth = source.truth()
    made = sweep(*source.path(start * truth["voc"]), knots, pairs=6000, evenness=evenness)
    figures = figures_of(made, truth["voc"] if static else None)
    return {name: 100.0 * (q.value / truth[name] - 1.0) for name, q in figures.named()}


@pytest.mark.parametrize("knots", [32, 96, 512])
def test_bias_over_random_sources_is_small(knots: int) -> None:
    for source in random_sources(60, seed=knots):
        found = errors(source, knots, start=0.03)
        assert abs(found["pmp"]) < 0.02
        assert abs(found["isc"]) < 0.02
        assert abs(found["vmp"]) < 0.1
        assert abs(found["imp"]) < 0.1
        assert abs(found["ff"]) < 0.06


def test_bias_over_the_cec_table_is_small() -> None:
    found = [errors(source, 64, start=0.05) for source in cec_sources(211)]
    assert len(found) > 100
    assert max(abs(each["pmp"]) for each in found) < 0.02
    assert max(abs(each["isc"]) for each in found) < 0.02
    assert abs(np.mean([each["pmp"] for each in found])) < 0.005


def test_few_and_lopsided_knots_still_serve() -> None:
    for source in random_sources(60, seed=1):
        found = errors(source, 32, start=0.03, evenness=0.05)
        assert abs(found["pmp"]) < 0.02
        assert abs(found["isc"]) < 0.06


def test_a_sweep_that_begins_at_14_percent_of_voc_still_gives_isc() -> None:
    # A residual 5 V in the capacitor does that.
    for source in random_sources(60, seed=2):
        assert abs(errors(source, 96, start=0.14)["isc"]) < 0.06


def test_voc_is_extrapolated_where_no_static_value_is_given() -> None:
    for source in random_sources(60, seed=3):
        assert abs(errors(source, 96, start=0.03, static=False)["voc"]) < 0.01


def test_scatter_agrees_with_the_stated_uncertainty() -> None:
    """Stated uncertainties must neither flatter nor frighten: z has a deviation of about 1."""
    z: dict[str, list[float]] = {name: [] for name in NAMES}
    deviation: list[float] = []
    for seed, source in enumerate(random_sources(160, seed=4)):
        truth = source.truth()
        made = sweep(
            *source.path(0.03 * truth["voc"]),
            96,
            voltage_noise=3e-4 * truth["voc"],
            current_noise=6e-4 * truth["isc"],
            seed=seed,
        )
        for name, quantity in figures_of(made, None).named():
            z[name].append((quantity.value - truth[name]) / quantity.standard_uncertainty)
            if name == "pmp":
                deviation.append(quantity.value / truth[name] - 1.0)
    for name, each in z.items():
        # The bias that is left is small beside one pair's noise, not beside the figure's own.
        assert 0.85 < np.std(each) < 1.25, name
        assert abs(np.mean(each)) < 0.6, name
    assert np.std(deviation) < 1.5e-4
    assert abs(np.mean(deviation)) < 5e-5


def test_uncertainty_is_the_linear_propagation_of_the_scatter() -> None:
    """Moving each knot by a little and adding in quadrature gives the same uncertainty."""
    made = sweep(*reference_source().path(1.0), 48, voltage_noise=0.01, current_noise=0.004, seed=5)
    base = figures_of(made, None)
    variance = dict.fromkeys(NAMES, 0.0)
    for column, sigma in (("voltage", made.voltage_sigma), ("current", made.current_sigma)):
        for index in range(len(made.voltage)):
            values: dict[str, Any] = {"voltage": made.voltage, "current": made.current}
            values[column] = values[column].copy()
            values[column][index] += 1e-3 * sigma[index]
            moved = extract(**values, **made.arguments())
            for name, quantity in moved.named():
                change = (quantity.value - getattr(base, name).value) / 1e-3
                variance[name] += change**2
    for name, quantity in base.named():
        assert quantity.standard_uncertainty == pytest.approx(np.sqrt(variance[name]), rel=0.05)


def shaded(levels: tuple[float, float, float]) -> tuple[Floats, Floats]:
    """A module of three strings of cells, each with its share of light and a bypass diode."""
    current = np.linspace(9.2, 0.002 * 9.0, 20_001)
    voltage = np.zeros_like(current)
    for level in levels:
        junction = np.linspace(-2.0, 13.6, 20_001)
        own = 9.0 * level - 9.0 * np.exp((junction - 13.3) / 0.53) - junction / 120.0
        at = np.interp(-current, -own, junction - 0.1 * own, left=-2.0)
        voltage += np.maximum(at, -0.5)
    keep = voltage > 1.0
    return voltage[keep], current[keep]


@pytest.mark.parametrize("levels", [(1.0, 1.0, 0.92), (1.0, 1.0, 0.5), (1.0, 0.65, 0.4)])
def test_of_several_maxima_the_highest_counts(levels: tuple[float, float, float]) -> None:
    voltage, current = shaded(levels)
    figures = figures_of(sweep(voltage, current, 96), float(voltage[-1]))
    best = int(np.argmax(voltage * current))
    assert figures.pmp.value == pytest.approx(voltage[best] * current[best], rel=5e-4)
    assert figures.vmp.value == pytest.approx(voltage[best], rel=3e-3)


def test_a_curve_cut_in_a_valley_does_not_pass_a_lower_maximum_off_as_the_highest() -> None:
    voltage, current = shaded((1.0, 0.65, 0.6))
    keep = voltage < 14.0
    made = sweep(voltage[keep], current[keep], 96)
    with pytest.raises(NoFigures, match=r"power may rise to .* W again"):
        figures_of(made, float(voltage[-1]))


def part(made: Knots, keep: Any) -> Knots:
    columns = ("voltage", "current", "weight", "voltage_sigma", "current_sigma", "time")
    return Knots(**{name: getattr(made, name)[keep] for name in columns})


def reference_sweep(noise: float = 0.004) -> Knots:
    return sweep(
        *reference_source().path(1.0), 96, voltage_noise=2 * noise, current_noise=noise, seed=6
    )


def test_a_curve_that_stops_before_its_maximum_has_no_figures() -> None:
    made = reference_sweep()
    with pytest.raises(NoFigures, match=r"ends at .* V and .* A without passing") as caught:
        figures_of(part(made, made.voltage < 32.0), 39.75)
    assert caught.value.reason == str(caught.value)


def test_a_curve_that_stops_soon_after_its_maximum_has_figures_only_with_a_static_voc() -> None:
    made = part(reference_sweep(), reference_sweep().voltage < 36.5)
    with pytest.raises(NoFigures, match="too early to extrapolate Voc"):
        figures_of(made, None)
    assert figures_of(made, 39.754).pmp.value == pytest.approx(275.608, rel=5e-4)


def test_a_curve_that_starts_past_its_maximum_has_no_figures() -> None:
    # A single cell behind long leads starts there.
    made = reference_sweep()
    with pytest.raises(NoFigures, match="past its maximum power"):
        figures_of(part(made, made.voltage > 35.0), 39.75)


def test_a_curve_that_starts_near_the_knee_has_no_isc() -> None:
    made = reference_sweep()
    with pytest.raises(NoFigures, match=r"too near the knee at .* to extrapolate to Isc"):
        figures_of(part(made, made.voltage > 29.5), 39.75)


def test_a_dark_module_has_no_figures() -> None:
    rng = np.random.default_rng(7)
    made = reference_sweep()
    sigma = np.full(96, 0.004)
    for current in (np.zeros(96), -np.full(96, 1e-3), rng.normal(0.0, 0.004, 96)):
        with pytest.raises(NoFigures):
            extract(
                made.voltage,
                current,
                weight=made.weight,
                voltage_sigma=sigma,
                current_sigma=sigma,
                voc_static=39.0,
            )


def test_open_leads_have_no_figures() -> None:
    rng = np.random.default_rng(8)
    sigma = np.full(64, 0.01)
    for _ in range(50):
        noise = rng.normal(0.0, 0.01, (2, 64))
        with pytest.raises(NoFigures):
            extract(
                *noise, weight=np.ones(64), voltage_sigma=sigma, current_sigma=sigma, voc_static=0.0
            )


def test_knots_on_one_spot_have_no_figures() -> None:
    one = np.ones(20)
    with pytest.raises(NoFigures):
        extract(
            one * 3, one, weight=one, voltage_sigma=one * 0, current_sigma=one * 0, voc_static=4.0
        )


def columns(count: int = 20) -> dict[str, Any]:
    voltage = np.linspace(0.0, 1.0, count)
    zero = np.zeros(count)
    return {
        "voltage": voltage,
        "current": 1.0 - voltage,
        "weight": np.ones(count),
        "voltage_sigma": zero,
        "current_sigma": zero,
    }


@pytest.mark.parametrize(
    ("name", "value", "message"),
    [
        ("current", np.nan, "current holds a number that is not finite"),
        ("voltage", np.inf, "voltage holds a number that is not finite"),
        ("weight", 0.0, "weight must be above zero"),
        ("current_sigma", -1e-3, "a sigma is below zero"),
    ],
)
def test_malformed_arrays_are_refused(name: str, value: float, message: str) -> None:
    given_columns = columns()
    given_columns[name] = given_columns[name].copy()
    given_columns[name][3] = value
    with pytest.raises(ValueError, match=message) as caught:
        extract(**given_columns)
    assert not isinstance(caught.value, NoFigures)


def test_too_few_knots_and_unlike_shapes_are_refused() -> None:
    with pytest.raises(ValueError, match="7 knots are too few for figures; 8 are needed"):
        extract(**columns(7))
    with pytest.raises(ValueError, match=r"weight has shape \(19,\), voltage has \(20,\)"):
        extract(**{**columns(), "weight": np.ones(19)})
    with pytest.raises(ValueError, match="voc_static is not finite"):
        extract(**columns(), voc_static=float("nan"))


def test_a_straight_curve_comes_out_exactly() -> None:
    figures = extract(**columns())
    assert figures.isc.value == pytest.approx(1.0, abs=1e-12)
    assert figures.voc.value == pytest.approx(1.0, abs=1e-12)
    assert figures.pmp.value == pytest.approx(0.25, abs=1e-12)
    assert figures.ff.value == pytest.approx(0.25, abs=1e-12)
    assert figures.isc_extrapolated_from_v == 0.0
    assert all(quantity.standard_uncertainty == 0.0 for _name, quantity in figures.named())


@settings(max_examples=40, deadline=None)
@given(
    volts=st.floats(0.01, 40.0),
    amperes=st.floats(1e-3, 1e3),
    order=st.randoms(use_true_random=False),
)
def test_figures_follow_the_units_and_not_the_order(volts: float, amperes: float, order) -> None:  # type: ignore[no-untyped-def]
    made = reference_sweep()
    base = figures_of(made, None)
    shuffled = list(range(len(made.voltage)))
    order.shuffle(shuffled)
    moved = part(made, np.array(shuffled))
    scaled = extract(
        moved.voltage * volts,
        moved.current * amperes,
        weight=moved.weight,
        voltage_sigma=moved.voltage_sigma * volts,
        current_sigma=moved.current_sigma * amperes,
    )
    factors = {"A": amperes, "V": volts, "W": volts * amperes, "": 1.0}
    for (_name, before), (_same, after) in zip(base.named(), scaled.named(), strict=True):
        assert after.value == pytest.approx(before.value * factors[before.unit], rel=1e-9)
        assert after.standard_uncertainty == pytest.approx(
            before.standard_uncertainty * factors[before.unit], rel=1e-6
        )


@settings(max_examples=100, deadline=None)
@given(data=st.data(), count=st.integers(8, 40))
def test_whatever_the_numbers_there_are_figures_or_a_reason(
    data: st.DataObject, count: int
) -> None:
    """No input ends in a stray exception, a warning or a figure that is not finite."""
    numbers = st.lists(
        st.floats(-1e6, 1e6, allow_subnormal=False).map(lambda x: round(x, 6)),
        min_size=count,
        max_size=count,
    )
    sigma = np.full(count, data.draw(st.sampled_from([0.0, 1e-3, 1.0])))
    try:
        figures = extract(
            data.draw(numbers),
            data.draw(numbers),
            weight=data.draw(st.lists(st.integers(1, 5000), min_size=count, max_size=count)),
            voltage_sigma=sigma,
            current_sigma=sigma,
            voc_static=data.draw(st.sampled_from([None, 0.0, 40.0])),
        )
    except NoFigures:
        return
    assert all(np.isfinite(value) for value in figures.as_dict().values())


def test_figures_agree_among_themselves_and_name_their_numbers() -> None:
    figures = figures_of(reference_sweep(), 39.754)
    assert figures.pmp.value == pytest.approx(figures.vmp.value * figures.imp.value, rel=1e-12)
    assert figures.ff.value == pytest.approx(
        figures.pmp.value / (figures.isc.value * figures.voc.value), rel=1e-12
    )
    numbers = figures.as_dict()
    assert numbers["pmp"] == figures.pmp.value
    assert numbers["pmp_standard_uncertainty"] == figures.pmp.standard_uncertainty
    assert 0.0 < numbers["isc_extrapolated_from_v"] < 5.0


@pytest.mark.parametrize(
    ("value", "uncertainty", "unit", "text"),
    [
        (9.18732, 0.002, "A", "9.187 A"),
        (9.18732, 0.02, "A", "9.19 A"),
        (275.6078, 0.03, "W", "275.61 W"),
        (275.6078, 4.0, "W", "276 W"),
        (0.78123, 0.0004, "", "0.7812"),
        (39.753965, 0.0, "V", "39.754 V"),
        (39.753965, 1e-9, "V", "39.754 V"),
        (1234.5, 40.0, "W", "1234 W"),
        (0.0, 0.01, "A", "0.00 A"),
    ],
)
def test_a_quantity_shows_what_its_uncertainty_leaves_of_it(
    value: float, uncertainty: float, unit: str, text: str
) -> None:
    assert str(Quantity(value, uncertainty, unit)) == text
