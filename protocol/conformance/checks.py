"""What a check of a device is: data, with one function."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from conformance.bench import Bench


@dataclass(frozen=True, slots=True)
class Check:
    """`run` returns what was found in words, or raises a `Verdict`.

    It begins in a session of its own, with the device safe or in a fault, and may leave any
    state that an abort ends.
    """

    name: str
    clauses: tuple[str, ...]
    expected: str
    run: Callable[[Bench], str]
