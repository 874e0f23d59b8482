"""The firmware's native functions on a Cortex-M0+ (`m0.py`), in place of CPython's."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Iterator
from contextlib import ExitStack, contextmanager
from functools import cache
from typing import Any
from unittest.mock import patch

from kneewise.emulator.firmware import firmware_module

from .m0 import Core

# Who calls them, and where they are.
CALLERS = {
    ("capture", "capture"): (
        *("fold", "fold_wide", "double", "widen", "double_wide"),
        *("conducting", "opened", "add_up", "copy"),
    ),
    ("knots", "plane"): ("sum_up", "largest", "along", "errors"),
    ("spacing", "spacing"): (
        *("cut", "respace", "exchange", "nudge", "settle"),
        *("worst", "take_over", "remember", "recall"),
    ),
    ("records", "records"): ("write", "add_currents"),
}


@cache
def core(file: str, name: str, counted: bool) -> Core:
    return Core(file, name, counted=counted)


def on_core(file: str, name: str, spent: Counter[str] | None = None) -> Callable[..., int]:
    """The function; where `spent` is given, its cycles are added up there."""
    made = core(file, name, spent is not None)

    def call(*arguments: Any) -> int:
        ran = made.call(*arguments)
        if spent is not None:
            spent[name] += ran.cycles
        return ran.result

    return call


@contextmanager
def machine_code(spent: Counter[str] | None = None) -> Iterator[None]:
    """Within, the firmware's decisions are CPython's and its loops are machine code."""
    with ExitStack() as swapped:
        for (caller, file), names in CALLERS.items():
            module = firmware_module(f"tracer.{caller}")
            for name in names:
                swapped.enter_context(patch.object(module, name, on_core(file, name, spent)))
        yield
