"""Numbers that fail where they outgrow the RP2040's words, and buffers that hold them.

CPython's integers have no end, and the MicroPython process has words of 64 bits: neither shows
what would overflow on a board.
"""

from __future__ import annotations

import operator
from collections.abc import Callable, Iterable
from typing import Any

WORD = 1 << 32
HALF = 1 << 31
SMALL = 1 << 30  # MicroPython's small integers end here, on 32-bit words


class OutgrownError(AssertionError):
    """A result that a word cannot hold."""


class Word(int):
    """A signed word: no result may leave it."""

    least, end = -HALF, HALF

    @classmethod
    def of(cls, value: int) -> Word:
        if not cls.least <= value < cls.end:
            raise OutgrownError(f"{value} needs more than a word")
        return cls(value)


class SmallWord(Word):
    """What MicroPython's own code, not the native, holds without an object."""

    least, end = -SMALL, SMALL


def _checked(name: str) -> Callable[..., Any]:
    plain = getattr(operator, name.strip("_"), None) or getattr(operator, name)
    shift = "shift" in name

    def forward(self: Word, other: int) -> Word:
        if shift and not 0 <= other < 32:
            raise OutgrownError(f"shifted by {int(other)}")
        return type(self).of(plain(int(self), int(other)))

    return forward


def _reflected(name: str) -> Callable[..., Any]:
    forward = _checked(name)

    def backward(self: Word, other: int) -> Word:
        return forward(type(self)(other), int(self))

    return backward


for _name in ("add", "sub", "mul", "floordiv", "mod", "lshift", "rshift", "and", "or", "xor"):
    setattr(Word, f"__{_name}__", _checked(f"__{_name}__"))
    setattr(Word, f"__r{_name}__", _reflected(f"__{_name}__"))


def _single(plain: Callable[[int], int]) -> Callable[..., Any]:
    return lambda self: type(self).of(plain(int(self)))


for _name in ("neg", "abs", "invert"):
    setattr(Word, f"__{_name}__", _single(getattr(operator, _name)))


class Both(int):
    """Two sums in one word: they are added together, and neither may run into the other."""

    def __new__(cls, value: int) -> Both:
        if not 0 <= value < WORD:
            raise OutgrownError(f"{value} needs more than a word")
        return super().__new__(cls, value)

    def __add__(self, other: int) -> Both:
        if (int(self) & 0xFFFF) + (int(other) & 0xFFFF) >= 1 << 16:
            raise OutgrownError(f"{int(self):x} + {int(other):x} runs into the upper half")
        return Both(int(self) + int(other))

    __radd__ = __add__

    def __and__(self, other: int) -> Word:
        if not 0 <= other < 1 << 16:
            raise OutgrownError(f"{int(other):x} keeps more than the lower half")
        return Word(int(self) & int(other))

    def __rshift__(self, other: int) -> Word:
        """As the core shifts a word whose top bit is set: it is a negative number."""
        return Word((int(self) ^ HALF) - HALF >> int(other))


class Words(list[int]):
    """A buffer of signed words."""

    kind: Callable[[int], int] = Word.of

    def __init__(self, values: Iterable[int]) -> None:
        super().__init__(map(type(self).kind, values))

    def __setitem__(self, place: Any, value: Any) -> None:
        if isinstance(place, slice):
            super().__setitem__(place, map(type(self).kind, value))
            return
        if place < 0:
            raise IndexError(f"word {int(place)} lies before the buffer")
        super().__setitem__(place, type(self).kind(value))

    def __getitem__(self, place: Any) -> Any:
        if not isinstance(place, slice) and place < 0:
            raise IndexError(f"word {int(place)} lies before the buffer")
        return super().__getitem__(place)


class Packed(Words):
    """Words of two halves."""

    kind = Both


class Wide(Words):
    """Words of bins that may be either: two sums, or one."""

    @staticmethod
    def kind(value: int) -> int:
        return value if isinstance(value, Both) else Word.of(value)


def _bounded(end: int) -> Callable[[int], int]:
    def kind(value: int) -> int:
        if not 0 <= value < end:
            raise OutgrownError(f"{int(value)} in a buffer of numbers below {end}")
        return Word(value)

    return kind


class Halves(Words):
    kind = staticmethod(_bounded(1 << 16))


class Bytes(Words):
    kind = staticmethod(_bounded(1 << 8))
