"""If these fail, the firmware breaks a rule of the RP2040 that nothing but a board would show:
channels swapped, a contact that stays closed, a watchdog that bites or never does. The firmware's
own files run here against models of the registers that they touch.

Where a test named "caught" fails, the test of that rule no longer sees what it is there for.
"""

from __future__ import annotations

import importlib
import re
from pathlib import Path
from typing import Any

import pytest
from board import Board
from from_text import Loader, sources
from rules_more import RULES

from kneewise.emulator.firmware import device_folder

CHECKS = [(key, check) for key, rule in RULES.items() for check in rule.checks]
BROKEN = [(key, name) for key, rule in RULES.items() for name in rule.broken]
# Ctrl-C is not delivered inside native code, and native code makes no objects: what must not be
# cut in two, what runs in the interrupt, and what runs with interrupts off (MicroPython's
# documentation, "Maximising MicroPython speed"; py/emitnative.c has no poll of pending exceptions).
NATIVE_ONES = {
    "hal_rp2": ("_lock", "_unlock", "_watchdog_off", "_pulse"),
    "ring_rp2": ("visit", "tripped", "begin", "arm", "halt", "end", "written", "_time"),
    "adc_rp2": ("arm", "halt", "finish", "_total"),
    "spi_pair": ("_to_start", "halt", "finish", "_total"),
    "pulse_pio": ("run", "stop", "_forget_words"),
}
# These come of a change that makes no sense, and prove nothing.
UNINTENDED = (NameError, SyntaxError, TypeError, AttributeError)


def run(check: str, texts: dict[str, str]) -> Any:
    """What the check gives: figures, where it has some."""
    file, function = check.split(".")
    loader = Loader(texts)
    return getattr(importlib.import_module(f"checks_{file}"), function)(
        lambda before=None, heap=None: Board(loader, before, heap)
    )


@pytest.mark.parametrize(("key", "check"), CHECKS, ids=lambda part: part)
def test_firmware_keeps_the_rule(key: str, check: str) -> None:
    print(key, check, run(check, sources()) or "")


@pytest.mark.parametrize(("key", "name"), BROKEN, ids=lambda part: part)
def test_firmware_that_breaks_the_rule_is_caught(key: str, name: str) -> None:
    texts = sources(RULES[key].broken[name])
    for check in RULES[key].checks:
        try:
            run(check, texts)
        except UNINTENDED:
            raise
        except Exception:
            return
    raise AssertionError(f"no check of {key} sees: {name}")


def not_native(file: str, text: str) -> list[str]:
    return [
        name
        for name in NATIVE_ONES[file]
        if not re.search(rf"^@micropython.viper\ndef {name}\(", text, re.MULTILINE)
    ]


@pytest.mark.parametrize("file", NATIVE_ONES)
def test_what_nothing_may_cut_in_two_is_native(file: str) -> None:
    text = (Path(device_folder()) / "tracer" / f"{file}.py").read_text(encoding="utf-8")
    assert not_native(file, text) == []
    assert not_native(file, text.replace("@micropython.viper\n", "", 1)) != []
