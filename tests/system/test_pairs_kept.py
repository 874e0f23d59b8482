"""Pairs kept one by one, through host, wire, firmware and plant: none lost, none misplaced."""

import numpy as np
import pytest

from kneewise import FullRate
from kneewise.errors import RefusedError, UsageError


def knots_within(trace):
    """(knot, its first pair, the pair behind its last) of those that lie in the stretch."""
    pairs = trace.full_rate.raw
    after = np.cumsum(trace.raw.pairs.astype(int))
    for knot, end in enumerate(after):
        begin = end - int(trace.raw.pairs[knot])
        if pairs.first <= begin and end <= pairs.first + len(pairs):
            yield knot, begin - pairs.first, end - pairs.first


@pytest.mark.parametrize(("start_ms", "duration_ms"), [(0.0, 8.192), (6.5, 8.0), (3.001, 2.0)])
def test_pairs_are_those_that_the_knots_sum_up(start_ms, duration_ms, bench, rung):
    """Pairs of another stretch, or shifted by one, would look just as good."""
    asked = FullRate(start_s=1e-3 * start_ms, duration_s=1e-3 * duration_ms)
    trace = bench(rung).tracer().sweep(full_rate=asked)
    assert trace.sound, [check for check in trace.checks if not check.holds]
    kept = trace.full_rate
    assert len(kept) == kept.asked == round(250 * duration_ms)
    assert kept.raw.first == int(250 * start_ms)
    assert kept.raw.voltage.dtype == kept.raw.current.dtype == np.uint16
    within = list(knots_within(trace))
    assert len(within) > 5
    for knot, begin, end in within:
        assert int(kept.raw.voltage[begin:end].sum(dtype=int)) == trace.raw.voltage_sum[knot]
        assert int(kept.raw.current[begin:end].sum(dtype=int)) == trace.raw.current_sum[knot]


def test_pairs_lie_about_the_curve_of_the_knots(bench, rung):
    """A wrong zero, scale or skew would shift them against the knots of the same sweep."""
    trace = bench(rung).tracer().sweep(full_rate=FullRate(start_s=0.003, duration_s=0.008))
    kept = trace.full_rate
    off_v = kept.voltage - np.interp(kept.time, trace.time, trace.voltage)
    off_i = kept.current - np.interp(kept.time, trace.time, trace.current)
    # 1.2 codes of noise on each conversion, and wide codes left as they are.
    assert abs(off_v.mean()) < 0.2 * 0.0165
    assert abs(off_i.mean()) < 1.0 * 0.0052
    assert off_v.std() < 1.5 * 0.0165
    assert off_i.std() < 2.5 * 0.0052


def test_converters_of_16_bits_keep_their_pairs_too(bench):
    one = bench("in-process", board={"converter": "spi16"})
    tracer = one.tracer()
    trace = tracer.sweep(full_rate=FullRate(start_s=0.002))
    assert trace.sound, [check for check in trace.checks if not check.holds]
    assert len(trace.full_rate) == 2048
    assert trace.full_rate.pair_ns == 1000 * tracer.profile["pair_us"]
    assert len(list(knots_within(trace))) > 5
    with pytest.raises(UsageError, match=f"2048 pairs at one every {tracer.profile['pair_us']} us"):
        tracer.sweep(full_rate=FullRate(start_s=0.0, duration_s=1.0))


def test_a_stretch_behind_the_sweep_s_end_is_short_and_says_so(bench, rung):
    tracer = bench(rung).tracer()
    trace = tracer.sweep(full_rate=FullRate(start_s=0.014, duration_s=0.008))
    kept = trace.full_rate
    assert trace.sound
    assert kept.asked == 2000
    assert kept.raw.first + len(kept) == trace.integrity.pairs
    none = tracer.sweep(full_rate=FullRate(start_s=1.0, duration_s=0.004))
    assert none.sound
    assert (len(none.full_rate), none.full_rate.asked) == (0, 1000)
    assert tracer.sweep().full_rate is None


def test_a_stretch_that_cannot_be_had_closes_no_contact(bench, rung):
    one = bench(rung)
    tracer = one.tracer()
    with pytest.raises(UsageError, match=r"10 ms, 2500 pairs; expected 0\.004 to 8\.192 ms"):
        tracer.sweep(full_rate=FullRate(start_s=0.0, duration_s=0.010))
    with pytest.raises(UsageError, match="longest closed time, 500 ms"):
        tracer.sweep(full_rate=FullRate(start_s=0.5), limit_s=0.5)
    assert not any(what == "relay" and level == 1 for _, what, level in one.board.record)


def test_pairs_of_a_held_sweep_come_with_it(bench, rung):
    """A full disk or a lost link would cost the very stretch that the sweep was made for."""

    def full(trace):
        raise OSError("no space left on device")

    tracer = bench(rung).tracer()
    with pytest.raises(OSError, match="no space"):
        tracer.sweep(full_rate=FullRate(start_s=0.002, duration_s=0.004), keep=full)
    trace = tracer.held()
    assert (len(trace.full_rate), trace.full_rate.asked) == (1000, None)
    assert trace.sound


@pytest.mark.parametrize("offset", [-12.0, 15.0])
def test_a_drifted_voltage_zero_is_measured_and_taken_out(offset, bench, rung):
    """15 codes are 0.25 V: 0.6 % of Voc, which no profile can follow."""
    one = bench(rung, board={"voltage_offset_codes": offset})
    trace = one.tracer().sweep(full_rate=FullRate(start_s=0.002, duration_s=0.004))
    truth = one.emulated.scenario.build_source().truth()
    assert trace.sound, [check for check in trace.checks if not check.holds]
    assert trace.zero_voltage.code == pytest.approx(24.0 + offset, abs=0.5)
    assert trace.figures().voc.value == pytest.approx(truth["voc"], rel=1e-3)
    assert trace.figures().pmp.value == pytest.approx(truth["pmp"], rel=1e-3)
    kept = trace.full_rate
    off_v = kept.voltage - np.interp(kept.time, trace.time, trace.voltage)
    assert abs(off_v.mean()) < 0.2 * 0.0165


def test_a_voltage_zero_far_off_is_refused(bench, rung):
    with pytest.raises(RefusedError, match="H11 sensor open") as refused:
        bench(rung, board={"voltage_offset_codes": 30.0}).tracer().sweep()
    assert refused.value.guard == 11
    assert refused.value.found.endswith("30 codes")
    assert refused.value.expected == "at most 24 codes"
