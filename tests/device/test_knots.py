"""If these fail, knots count pairs twice, lose them, or tell the wrong time."""

from itertools import pairwise
from math import isqrt

import folding
import numpy as np
from fake_board import Buffers
from folding import check_knots, place
from hypothesis import example, given, settings
from hypothesis import strategies as st

from kneewise.emulator.firmware import firmware_module

module = firmware_module("tracer.knots")
MAX_STRETCHES = firmware_module("tracer.memory").MAX_STRETCHES


@settings(max_examples=120)
@given(
    st.integers(0, 2**32 - 1),
    st.integers(1, 6000),
    st.integers(16, 512),
    st.sampled_from(["noise", "flat", "steps", "ramp"]),
)
@example(0, 1, 16, "noise")
@example(0, 15, 16, "ramp")
@example(0, 1024, 512, "noise")
@example(0, 1023, 512, "noise")
def test_every_pair_is_in_exactly_one_knot(seed, count, knots, kind):
    draw = np.random.default_rng(seed)
    pairs = {
        "noise": draw.integers(0, 4096, (count, 2)),
        "flat": np.full((count, 2), draw.integers(0, 4096)),
        "steps": np.repeat(draw.integers(0, 4096, (count // 7 + 1, 2)), 7, axis=0)[:count],
        "ramp": np.stack([np.arange(count) * 4095 // count, 4095 - np.arange(count) % 50], axis=1),
    }[kind]
    check_knots(pairs, place(folding.filled(pairs), knots), knots)


def test_folded_and_placed_as_one_holds_as_well():
    draw = np.random.default_rng(4)
    pairs = draw.integers(60, 4096, (5000, 2))
    filled = folding.capture()
    folding.feed(filled, pairs, [125] * 50)
    folding.finished(filled, pairs)
    check_knots(pairs[1:], place(filled, 96), 96)


def test_an_empty_capture_has_no_knots():
    assert place(folding.capture(), 96) == []


def test_the_same_capture_gives_the_same_knots_whatever_was_placed_before():
    draw = np.random.default_rng(5)
    one, other = (folding.filled(draw.integers(0, 4096, (n, 2))) for n in (900, 5000))
    fresh = place(one, 64)
    buffers = Buffers()
    place(other, 512, buffers=buffers)
    assert place(one, 64, buffers=buffers) == fresh
    assert place(one, 64, buffers=buffers) == fresh


def test_zeros_above_every_code_do_no_harm():
    pairs = np.random.default_rng(6).integers(0, 200, (3000, 2))
    check_knots(pairs, place(folding.filled(pairs), 96, zeros=(65535, 65535)), 96)


@settings(max_examples=300)
@given(st.data())
def test_cuts_rise_and_leave_every_knot_a_bin(data):
    sizes = data.draw(st.lists(st.integers(1, 40), min_size=1, max_size=60))
    shares = data.draw(st.lists(st.integers(1, 10**5), min_size=len(sizes), max_size=len(sizes)))
    knots = data.draw(st.integers(16, 512))
    starts = [0]
    for size in sizes:
        starts.append(starts[-1] + size)
    firsts = [0] * 513
    count = module.cuts(starts, shares, len(sizes), knots, firsts)
    assert count == min(knots, sum(sizes))
    assert firsts[0] == 0
    assert firsts[count] == sum(sizes)
    assert all(b > a for a, b in pairwise(firsts[: count + 1]))


@settings(max_examples=200)
@given(st.integers(1, 1024), st.integers(0, 2**32 - 1), st.sampled_from([0, 40, 4096]))
def test_stretches_cover_all_bins_in_the_room_there_is(used, seed, wild):
    draw = np.random.default_rng(seed)
    xs = np.arange(used) * 4096 // used + draw.integers(-wild, wild + 1, used)
    starts = [0] * (MAX_STRETCHES + 1)
    count = module.stretches(xs.tolist(), [0] * used, used, starts)
    assert 1 <= count <= MAX_STRETCHES
    assert starts[0] == 0
    assert starts[count] == used
    assert all(b > a for a, b in pairwise(starts[: count + 1]))


@settings(max_examples=500)
@given(st.integers(0, 2**70) | st.integers(0, 2**35).map(lambda r: max(r * r - 1, 0)))
@example(0)
@example(1)
@example(2)
@example(3)
@example(2**64)
@example(2**64 - 1)
def test_root_is_the_integer_root(number):
    assert module.root(number) == isqrt(number)
    assert module.bit_length(number) == number.bit_length()
