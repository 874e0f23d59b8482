"""If these fail, knots count pairs twice, lose them, or tell the wrong time."""

import charge_curves as curves
import folding
import numpy as np
import pytest
from fake_board import Buffers
from folding import BIN_WORDS, Placed, check_knots
from hypothesis import example, given, settings
from hypothesis import strategies as st

from kneewire.messages import unpack_knots

CODE_BITS = st.sampled_from([12, 16])
KINDS = st.sampled_from(["noise", "flat", "steps", "ramp", "late", "curve"])
FINER = {12: 1, 16: 16}


def codes(kind: str, count: int, seed: int, code_bits: int) -> np.ndarray:
    """Pairs of codes of every kind there may be, real or not."""
    draw = np.random.default_rng(seed)
    most = (1 << code_bits) - 1
    at = np.arange(count)
    if kind == "noise":
        return draw.integers(0, most + 1, (count, 2))
    if kind == "flat":
        return np.full((count, 2), draw.integers(0, most + 1))
    if kind == "steps":
        return np.repeat(draw.integers(0, most + 1, (count // 7 + 1, 2)), 7, axis=0)[:count]
    if kind == "ramp":
        return np.stack([at * most // count, most - at % 50], axis=1)
    if kind == "late":  # all of the curve in its last hundredth
        return np.stack([np.where(at > count - count // 99, most, 0), np.full(count, most)], axis=1)
    share = at / count
    v = most * share**0.7
    i = most * (1 - share**9)
    noise = draw.normal(0, FINER[code_bits], (count, 2))
    return np.clip(np.rint(np.stack([v, i], axis=1) + noise), 0, most).astype(np.int64)


@settings(max_examples=80)
@given(st.integers(0, 2**32 - 1), st.integers(1, 9000), st.integers(16, 512), KINDS, CODE_BITS)
@example(0, 1, 16, "noise", 12)
@example(0, 15, 16, "ramp", 12)
@example(0, 31, 16, "ramp", 16)
@example(0, 32, 16, "ramp", 12)
@example(0, BIN_WORDS, 512, "noise", 12)
@example(0, BIN_WORDS + 1, 512, "noise", 16)
@example(0, 512, 512, "curve", 12)
@example(0, 513, 512, "curve", 12)
@pytest.mark.clause("K1", "K2")
def test_every_pair_is_in_exactly_one_knot(seed, count, knots, kind, code_bits):
    pairs = codes(kind, count, seed, code_bits)
    check_knots(pairs, Placed(folding.filled(pairs, code_bits), knots), knots, code_bits)


@settings(max_examples=25)
@given(st.integers(0, 2**32 - 1), st.integers(1, 200_000), st.integers(16, 512), KINDS, CODE_BITS)
@example(210361, 705, 22, "steps", 12)  # cuts were out of order once
@example(1, 200_000, 96, "curve", 12)
@example(1, 200_000, 96, "noise", 16)
@example(1, 131_000, 512, "noise", 12)
@pytest.mark.clause("K1", "K2")
def test_folded_and_placed_as_one_holds_as_well(seed, count, knots, kind, code_bits):
    """Several doublings and the change to two words between the converter and the record."""
    pairs = codes(kind, count, seed, code_bits)
    pairs[:, 1] = np.maximum(pairs[:, 1], folding.THRESHOLD + 1)
    filled = folding.capture(2048, code_bits=code_bits)
    draw = np.random.default_rng(seed)
    folding.feed(filled, pairs, iter(lambda: int(draw.integers(0, 1900)), None))
    folding.finished(filled, pairs)
    if count == 1:
        assert Placed(filled, knots).count == 0
    else:
        check_knots(pairs[1:], Placed(filled, knots), knots, code_bits)


def test_an_empty_capture_has_no_knots():
    assert Placed(folding.capture(), 96).count == 0


def test_less_than_a_bin_is_one_knot():
    """A capture that a bounce began anew has bins of one pair; only a full bin is ever whole."""
    filled = folding.holding(np.array([[7, 9]]), 64, 3)
    (knot,) = Placed(filled, 96).knots
    assert (knot["pairs"], knot["voltage_sum"], knot["current_sum"]) == (3, 7, 9)


def test_the_same_capture_gives_the_same_knots_whatever_was_placed_before():
    curve = curves.module_curve()
    one = folding.filled(curves.charge(curve, until=0.4))
    other = folding.filled(codes("noise", 70_000, 3, 12))
    fresh = Placed(one, 64).records
    buffers = Buffers()
    work = folding.capture(8192).ring
    Placed(other, 512, buffers=buffers, work=work)
    assert Placed(one, 64, buffers=buffers, work=work).records == fresh
    assert Placed(one, 64, buffers=buffers, work=work).records == fresh


@pytest.mark.parametrize("code_bits", [12, 16])
def test_zeros_above_every_code_do_no_harm(code_bits):
    pairs = codes("noise", 5000, 6, code_bits) // 20
    placed = Placed(folding.filled(pairs, code_bits), 96, zeros=(65535, 65535))
    check_knots(pairs, placed, 96, code_bits)


def test_a_record_in_any_block_is_the_same():
    """The host fetches gaps by any first knot and any count."""
    pairs = codes("curve", 70_001, 5, 12)
    filled = folding.filled(pairs)
    buffers = Buffers()
    placed = Placed(filled, 96, buffers=buffers)
    records = folding.records
    told = buffers.placing
    records.describe(told, filled, 96, folding.CONDUCTING_US, 4)
    for first, count, place in [(0, 1, 0), (5, 6, 13), (95, 1, 9), (90, 6, 1), (47, 3, 255 - 120)]:
        told[records.R_FIRST], told[records.R_COUNT], told[records.R_OUT] = first, count, place
        records.write(filled.bins, buffers.cuts, buffers.body, told)
        found = unpack_knots(bytes(buffers.body[place : place + 40 * count]))
        assert found == placed.knots[first : first + count]


@pytest.mark.parametrize(("began_us", "pair_us"), [(0, 4), (2**32 - 7, 2), (2**63, 10), (5, 255)])
@pytest.mark.clause("K1")
def test_a_knots_time_is_that_of_the_middle_of_its_pairs(began_us, pair_us):
    pairs = codes("flat", 20_001, 5, 12)
    filled = folding.filled(pairs)
    buffers = Buffers()
    placed = Placed(filled, 16, buffers=buffers)
    folding.records.describe(buffers.placing, filled, 16, began_us, pair_us)
    told, records = buffers.placing, folding.records
    start = 0
    for number in range(16):
        told[records.R_FIRST], told[records.R_COUNT], told[records.R_OUT] = number, 1, 0
        records.write(filled.bins, buffers.cuts, buffers.body, told)
        (knot,) = unpack_knots(bytes(buffers.body[:40]))
        middle = pair_us * (2 * start + knot["pairs"] - 1) // 2
        assert knot["time_us"] == began_us + middle
        start += placed.knots[number]["pairs"]


@pytest.mark.clause("K2")
def test_a_ramp_has_no_scatter_and_noise_has_what_its_deviation_says():
    """The variance of a second difference of independent bins is six times a bin's."""
    at = np.arange(BIN_WORDS)
    ramp = np.stack([at % 4096, 4095 - at // 2], axis=1)
    for knot in Placed(folding.filled(ramp), 32).knots:
        assert knot["voltage_scatter"] == 0
        assert knot["current_scatter"] <= knot["pairs"]
    deviation = 11.0
    noise = np.random.default_rng(1).normal(0, deviation, (BIN_WORDS, 2))
    found = Placed(folding.filled(np.rint(2000 + noise).astype(int)), 32).knots
    total = sum(knot["voltage_scatter"] for knot in found)
    assert total / 6 / (BIN_WORDS - 2) == pytest.approx(deviation**2, rel=0.1)


@pytest.mark.clause("K2")
def test_a_jump_adds_no_more_than_its_bound():
    pairs = np.zeros((20_000, 2), int)
    pairs[9_000:] = 4095
    filled = folding.filled(np.repeat(pairs, 4, axis=0))
    total = sum(knot["voltage_scatter"] for knot in Placed(filled, 32).knots)
    assert total == 2 * folding.LARGEST_BEND**2
