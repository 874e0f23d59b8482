"""If these fail, volts and amperes are off by what the host knows and could have taken out."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from bench import placing
from bench.charges import (
    CONDUCTING_US,
    PAIR_NS,
    SKEW_NS,
    SOURCES,
    Charge,
    Codes,
    codes_of,
    convert_raw,
    convert_sweep,
    figures_of,
    partition,
    scales,
    source,
)

from kneewise.curve.unbend import Cells
from kneewise.instrument.checks import check_trace
from kneewise.instrument.convert import Converted, _Channel
from kneewise.instrument.profile import Scales
from kneewise.instrument.trace import Integrity, RawKnots, RawPairs

WHOLE = 0.9995
"""Of the open voltage: where a sweep ends by itself."""


def fine(
    made: Charge, *, skew_ns: int = 0, finer: float = 64.0, end: float = 0.997
) -> tuple[Charge, Codes]:
    """A charge on a board with codes so fine that neither they nor noise matter."""
    made = replace(made, volts=made.volts / finer, amperes=made.amperes / finer)
    at = 1e-9 * PAIR_NS * np.arange(made.pairs(end))
    voltage, current = made.at(at)[0], made.at(at + 1e-9 * skew_ns)[1]
    return made, Codes(np.rint(voltage / made.volts + 24.0), np.rint(current / made.amperes + 40.0))


def off_the_curve(made: Charge, points: Converted) -> float:
    """Largest distance in current from the static curve, relative to the largest current."""
    at = np.interp(points.voltage, made.voltage, made.current)
    inner = slice(2, -2)
    return float(np.abs(points.current - at)[inner].max() / made.current[0])


@pytest.mark.parametrize("name", SOURCES)
def test_the_skew_is_taken_out(name: str) -> None:
    made, codes = fine(source(name), skew_ns=SKEW_NS)
    counts = partition(made, 128)
    points = convert_sweep(made, codes, counts, skew_ns=SKEW_NS)
    left = convert_sweep(made, codes, counts, skew_ns=0)
    assert off_the_curve(made, points) < 2e-4
    assert off_the_curve(made, points) < off_the_curve(made, left) / 2.0


def test_without_taking_the_skew_out_power_is_off_and_with_it_is_not() -> None:
    made, codes = fine(source("one knee"), skew_ns=SKEW_NS)
    counts = partition(made, 64)
    for skew_ns, low, high in ((0, 0.02, 0.04), (SKEW_NS, 0.0, 0.004)):
        figures = figures_of(convert_sweep(made, codes, counts, skew_ns=skew_ns))
        assert low <= abs(100.0 * (figures.pmp.value / made.truth["pmp"] - 1.0)) < high


@pytest.mark.parametrize("delay_us", [5.0, 60.0])
def test_delays_of_the_channels_are_taken_out_however_many_knots_long(delay_us: float) -> None:
    """A voltage filtered later than the current, and the other way round."""
    made = source("one knee")
    counts = partition(made, 128)
    at = 1e-9 * PAIR_NS * np.arange(made.pairs())
    late = np.maximum(at - 1e-6 * delay_us, 0.0)
    for v_at, i_at, v_us, i_us in ((late, at, delay_us, 0.0), (at, late, 0.0, delay_us)):
        finer, _codes = fine(made)
        voltage, current = made.at(v_at)[0], made.at(i_at)[1]
        codes = Codes(
            np.rint(voltage / finer.volts + 24.0), np.rint(current / finer.amperes + 40.0)
        )
        board = scales(volts=finer.volts, amperes=finer.amperes)
        board = replace(board, voltage_delay_s=1e-6 * v_us, current_delay_s=1e-6 * i_us)
        points = convert_sweep(finer, codes, counts, board=board)
        at_time = np.interp(points.time, made.time, made.voltage)
        assert np.abs(points.voltage - at_time)[3:-3].max() < 2e-4 * made.voc
        assert off_the_curve(made, points) < 5e-4


def test_points_are_told_at_the_instants_of_the_current() -> None:
    made, codes = fine(source("one knee"), skew_ns=SKEW_NS)
    counts = partition(made, 64)
    points = convert_sweep(made, codes, counts, skew_ns=SKEW_NS)
    firsts = np.concatenate(([0], np.cumsum(counts)[:-1]))
    middles = 1e-9 * (PAIR_NS * (firsts + (counts - 1) / 2) + SKEW_NS)
    assert points.time == pytest.approx(middles, abs=1e-12)
    voltage, current = made.at(points.time)
    assert np.abs(points.voltage - voltage)[1:-1].max() < 1e-4 * made.voc
    assert np.abs(points.current - current)[2:-2].max() < 1e-4 * made.current[0]


def test_the_dividers_current_and_the_leads_drop_are_put_back() -> None:
    made, codes = fine(source("one knee"))
    counts = partition(made, 64)
    plain = scales(volts=made.volts, amperes=made.amperes)
    board = replace(plain, divider_ohm=1e4, lead_ohm=0.1)
    bare = convert_sweep(made, codes, counts, board=plain)
    found = convert_sweep(made, codes, counts, board=board)
    assert found.current == pytest.approx(bare.current + bare.voltage / 1e4, rel=1e-9)
    assert found.voltage == pytest.approx(bare.voltage + 0.1 * found.current, rel=1e-9)


@pytest.mark.parametrize(("knots", "noise"), [(64, 1.2), (512, 1.2), (512, 0.4)])
def test_stated_deviations_are_those_of_the_points(knots: int, noise: float) -> None:
    """The ramp of the voltage, a code from pair to pair, is no noise."""
    made = source("one knee")
    counts = partition(made, knots)
    exact, codes = fine(made)
    truth = convert_sweep(exact, codes, counts)
    z = []
    for seed in range(30):
        points = convert_sweep(made, codes_of(made, seed=seed, noise=noise), counts)
        z.append((points.voltage - truth.voltage) / points.voltage_sigma)
        z.append((points.current - truth.current) / points.current_sigma)
    assert 0.9 < np.std(z) < 1.1
    assert np.abs(z).max() < 7.0


@pytest.mark.parametrize("name", ["one knee", "two steps", "100 W/m2", "mini-module"])
@pytest.mark.parametrize("knots", [32, 512])
def test_the_firmwares_scatter_tells_the_noise_whatever_its_bins(name: str, knots: int) -> None:
    """Bins of 1, 2 and 8 pairs; with 512 knots most hold few of them."""
    made = source(name)
    count = int(made.end_s / (1e-9 * PAIR_NS))
    at = 1e-9 * PAIR_NS * np.arange(count)
    exact = made.at(at)[0] / made.volts + 24.0, made.at(at)[1] / made.amperes + 40.0
    z, told = [], []
    for seed in range(6):
        raw, bin_pairs = placing.sent(codes_of(made, seed=seed, noise=1.2, count=count), knots)
        cells = Cells.of(raw.pairs)
        sums, scatters = (
            (raw.voltage_sum, raw.current_sum),
            (raw.voltage_scatter, raw.current_scatter),
        )
        for each, truth, scatter in zip(sums, exact, scatters, strict=True):
            channel = _Channel.of(cells, each, scatter, scales(), bin_pairs)
            true_means = np.add.reduceat(truth, cells.borders[:-1]) / cells.samples
            z.append((channel.means - true_means) / channel.sigmas)
            told.append(channel.noise)
    assert np.mean(told) == pytest.approx(1.2, rel=0.03)
    assert 0.9 < np.std(np.concatenate(z)) < 1.1


def test_single_knots_and_few_knots_are_converted_as_well() -> None:
    made = source("one knee")
    codes = codes_of(made)
    for counts in ([3000], [1000, 1000], [1, 1, 1], [500, 1, 900]):
        for wide in (1.0, 9.0):
            points = convert_sweep(
                made,
                codes,
                np.array(counts),
                board=replace(scales(wide=wide), voltage_delay_s=3e-6),
                skew_ns=SKEW_NS,
            )
            assert np.isfinite(points.voltage).all()
            assert np.isfinite(points.current_sigma).all()


def checked(made: Charge, raw: RawKnots, board: Scales) -> dict[str, bool]:
    points = convert_raw(made, raw, 1, board=board)
    found = check_trace(
        raw,
        points.voltage,
        points.current,
        points.time,
        points.voltage_sigma,
        voc_static=points.voc_static,
        residual_v=0.0,
        conducting_us=CONDUCTING_US,
        pair_ns=PAIR_NS,
        end_reason="complete",
        integrity=Integrity(len(raw), int(raw.pairs.sum()), 0, 0, 0, True),
        conversions_lost=False,
        scales=board,
        zero_off=(None, 0.0),
        bounce_ms=0,
        pairs=RawPairs(0, np.zeros(0, dtype=np.uint16), np.zeros(0, dtype=np.uint16)),
    )
    return {check.name: check.holds for check in found}


@pytest.mark.parametrize(("code_max", "finer"), [(4095, 1.0), (65535, 16.0)])
def test_a_channel_at_its_rail_is_told_for_either_converter(code_max: int, finer: float) -> None:
    made, codes = fine(source("one knee"), finer=finer, end=WHOLE)
    counts = partition(made, 64, count=made.pairs(WHOLE))
    board = scales(volts=made.volts, amperes=made.amperes, code_max=code_max)
    assert all(checked(made, codes.knots(counts), board).values())
    stuck = Codes(codes.voltage, np.maximum(codes.current, code_max - 3.0))
    assert not checked(made, stuck.knots(counts), board)["within the converter's range"]
    below = Codes(codes.voltage, np.minimum(codes.current * 10.0, code_max - 6.0 * finer))
    assert checked(made, below.knots(counts), board)["within the converter's range"]


@pytest.mark.parametrize("knots", [64, 256, 512])
def test_noise_alone_makes_no_check_fail(knots: int) -> None:
    made = source("one knee")
    counts = partition(made, knots, count=made.pairs(WHOLE))
    for seed in range(25):
        codes = codes_of(made, seed=seed, end=WHOLE)
        held = checked(made, codes.knots(counts), scales())
        assert all(held.values()), held


def test_times_that_disagree_with_the_counts_are_told() -> None:
    made = source("one knee")
    counts = partition(made, 64)
    codes = codes_of(made)
    raw = codes.knots(counts)
    shifted = replace(raw, time_us=raw.time_us + np.uint64(3))
    for given, holds in ((raw, True), (shifted, False)):
        held = checked(made, given, scales())["times agree with the counts of pairs"]
        assert held == holds
