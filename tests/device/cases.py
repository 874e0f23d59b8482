"""Captures to be run alike: by CPython, in the MicroPython process and on the RP2040's core."""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from typing import Any

import charge_curves as curves
import folding
import numpy as np

RING_PAIRS = 1024
RAW_FIRST, RAW_PAIRS = 700, 500


def curve(count: int = 8000, code_bits: int = 12, **more: Any) -> np.ndarray:
    """Pairs of a charge of about that length."""
    pairs = curves.charge(curves.module_curve(), capacitance_f=0.64e-6 * count, **more)
    if code_bits == 16:
        draw = np.random.default_rng(1)
        pairs = np.clip(16 * pairs + draw.integers(0, 16, pairs.shape), 0, 65535)
    return pairs


def noise(count: int, code_bits: int = 12, seed: int = 1) -> np.ndarray:
    return np.random.default_rng(seed).integers(0, 1 << code_bits, (count, 2))


def bouncing(pairs: np.ndarray) -> np.ndarray:
    """The same, behind a contact that closes, opens and closes."""
    contact = np.repeat([[2400, 40], [9, 1800], [2400, 40], [20, 1700], [2400, 40]], 9, axis=0)
    return np.vstack([contact, pairs])


@dataclass(frozen=True)
class Case:
    pairs: np.ndarray
    knots: int
    code_bits: int = 12
    bounce_pairs: int = 0

    @property
    def wide(self) -> bool:
        return folding.layout(len(self.pairs), self.code_bits)[1] == 2

    def slices(self) -> list[int]:
        """How many pairs each call of `drain` finds."""
        draw = np.random.default_rng(len(self.pairs))
        return draw.integers(1, 900, 2 + len(self.pairs) // 300).tolist()

    def run(self, measure: Any = None) -> list[str]:
        """What came out, in the words that `told` of the MicroPython process prints."""
        raw = bytearray(4 * RAW_PAIRS)
        made = folding.capture(
            RING_PAIRS,
            code_bits=self.code_bits,
            bounce_pairs=self.bounce_pairs,
            raw=raw,
            raw_first=RAW_FIRST,
        )
        folding.feed(made, self.pairs, self.slices())
        made.finish(len(self.pairs))
        placed = folding.Placed(made, self.knots, measure=measure)
        used = made.full_bins() + (made.full_bins() * made.bin_pairs() < made.pairs())
        words = made.bins[: used * 2 if made.wide else used]
        return told(made, placed, words.tobytes(), bytes(raw[: 4 * made.raw_pairs()]))


def told(made: Any, placed: folding.Placed, bins: bytes, raw: bytes) -> list[str]:
    counts = made.skipped, made.bounces, made.pairs(), made.bin_pairs(), placed.count
    return [
        " ".join(str(int(count)) for count in counts),
        " ".join(str(place) for place in placed.cuts),
        str(placed.current_sum),
        *(hashlib.sha256(data).hexdigest() for data in (bins, raw, placed.records)),
    ]


CASES = {
    "a charge": Case(curve(3500), 96),
    "few knots": Case(curve(3500), 24),
    "without noise": Case(curve(3900, noise=0.0), 48),
    "two knees": Case(curves.charge(curves.stepped_curve()), 96),
    "low light": Case(curves.charge(curves.module_curve(0.18), seed=3), 64),
    "bins of two words": Case(curve(70_000), 96),
    "many knots": Case(curve(20_000), 400),
    "16 bits": Case(curve(4000, 16), 96, 16),
    "16 bits, two words": Case(curve(20_000, 16), 33, 16),
    "a bouncing contact": Case(bouncing(curve(5000)), 96, 12, 300),
    "noise": Case(noise(9000), 96),
    "16-bit noise": Case(noise(9000, 16), 40, 16),
    "no more than a few": Case(noise(45), 16),
}
