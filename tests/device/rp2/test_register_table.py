"""If this fails, a rule of the RP2040 or of MicroPython that the firmware lives by has no test any
more, and nothing would say so when the firmware breaks it.
"""

from __future__ import annotations

from pathlib import Path

import pytest
from rules_more import RULES

TESTS = Path(__file__).parents[2]
MODELS = "device/rp2/test_register_models.py::"
CHIP = "chip/test_chip_"  # with an image of MicroPython for the Pico at hand

# What has to be kept, in words of our own, and what proves it: keys of RULES, or tests elsewhere.
REFERENCE: dict[str, tuple[str, ...]] = {
    "aliases flip, set and clear": (MODELS + "test_aliases_flip_set_and_clear",),
    "ADC: a full FIFO of four drops, and V and I swap: OVER after every sweep": (
        "adc-over",
        MODELS + "test_a_full_fifo_drops_and_says_so_until_told",
    ),
    "ADC: 96 cycles of 48 MHz, 500 kS/s in all": ("adc-pace",),
    "ADC: round robin from channel 0": (
        "adc-robin",
        MODELS + "test_round_robin_goes_on_from_ainsel",
    ),
    "ADC: to stop, clear START_MANY, wait for READY, drain": ("adc-ready", "adc-drain", "adc-last"),
    "ADC: a sum stands alone; pins are analogue": ("adc-sum", "adc-pads"),
    "ADC: wide codes": ("host/test_board_converters.py::test_four_codes_are_wide",),
    "DMA: request 36, half words": ("dma-dreq",),
    "DMA: a ring is aligned to its size": ("dma-aligned", "dma-ring"),
    "DMA: count counts transfers": ("dma-count",),
    "DMA: started before the converters": ("dma-first",),
    "DMA: stopped for good, nothing of before remains": ("dma-abort", "dma-credits"),
    "a soft reset closes DMA, leaves the ADC running and pins driven": ("start-safe", "outputs"),
    "a slot that has failed leaves no interrupt, PIO, ADC or DMA to the next one": (
        "device/rp2/test_forget.py::test_a_forgotten_slot_is_at_rest",
        "device/rp2/test_forget.py::test_a_slot_left_running_is_caught",
    ),
    "pulse: bounded by the program": ("pulse-bound", "pulse-wave"),
    "pulse: a word's periods, in cycles, whenever it comes": ("pulse-cycles",),
    "pulse: another contact, another program, changed at rest": ("pulse-contact",),
    "pulse: a renewal replaces": ("pulse-renewal",),
    "pulse: low by SIO before PIO and after; nothing else takes the pin": (
        "pulse-start",
        "pulse-stop",
        "pulse-alone",
    ),
    "supervision: 1 kHz, hard, trips on newest pair and stop loop": (
        "visit-ticks",
        "visit-stop",
        "visit-limits",
        "visit-rest",
    ),
    "supervision: two pairs in a row, one channel, its first code": ("trip-pairs", "trip-code"),
    "a trip ends the pulse by itself, for good, where the contact may break; no rise after it": (
        "trip-ends",
        "trip-stays",
        "trip-goes-on",
        "trip-given-back",
    ),
    "supervision: at most 20 us": (CHIP + "hal.py::test_a_supervision_visit_is_short",),
    "an exception in the callback ends the timer": (
        "emergency-buffer",
        MODELS + "test_an_exception_in_a_timer_callback_ends_it_silently",
        CHIP + "faults.py::test_",
    ),
    "timer: id -1 only": ("visit-ticks",),
    "no floats in an interrupt, nor anywhere in the firmware": (
        "device/test_widths.py::test_the_firmware_computes_in_integers_alone",
    ),
    "watchdog: at most 8388 ms, runs on through a soft reset": ("watchdog-feed",),
    "watchdog: stopped by CTRL bit 30 alone": ("watchdog-stop",),
    "the cause of a reset": ("reset-cause",),
    "ticks wrap at 2**30": ("ticks",),
    "64-bit time at its carry": (
        "time-carry",
        "began",
        MODELS + "test_the_low_half_latches_the_high_one",
    ),
    "heap: locked once, unlocked once": ("quiet",),
    "heap: nothing is allocated while charging": (
        "device/test_on_micropython.py::test_a_charge_of_many_slices_takes_no_memory",
    ),
    "USB: 03 interrupts, so no frame toward the device has it": (
        "protocol/test_framing.py::test_nothing_toward_the_device_is_a_ctrl_c",
    ),
    "USB: a forged Ctrl-C ends safe": (
        "device/test_device_loop.py::test_after_ctrl_c_in_mid_charge",
        CHIP + "faults.py::test_a_forged_ctrl_c_ends_safe",
    ),
    "USB: a write that gives up is short": (
        "stdout",
        "device/test_service.py::test_a_short_write_costs_one_frame_and_no_more",
    ),
    "USB: stdin blocks for all, so bytes are read one by one": ("stdin",),
    "USB: frames of 63, 64, 65 and 128 bytes": (
        "protocol/test_vectors.py::test_framing_vectors_cover_every_reason_and_the_lengths_that",
        CHIP + "hal.py::test_link_echoes_frames_of_awkward_lengths",
    ),
    "native code: integers wrap at 2**32, and words stay within": (
        "device/test_widths.py::test_folding_and_merging_stay_within_a_word",
        MODELS + "test_words_are_signed_where_native_code_has_them_so",
    ),
    "native and Thumb code: what the compiler for the core takes": (
        "device/test_compiles.py::test_compiles_for_the_rp2040",
    ),
    "files: renamed over the old, a slot's trial counted down first": (
        CHIP + "main.py::test_a_trial_is_counted_down_before_the_slot_runs",
    ),
    "SPI converters: whole pairs, exact pace, drops told": (
        "spi-words",
        "spi-pace",
        "spi-flush",
        "spi-stall",
        "spi-last",
        "spi-again",
        "spi-missing",
    ),
    "converters that cannot be had are refused": ("refusals",),
}


@pytest.mark.parametrize("rule", REFERENCE)
def test_the_rule_is_proven(rule: str) -> None:
    for proof in REFERENCE[rule]:
        if "::" in proof:
            file, name = proof.split("::")
            assert f"def {name}" in (TESTS / file).read_text(encoding="utf-8"), proof
        else:
            assert RULES[proof].checks, proof
            assert RULES[proof].broken, proof


def test_every_check_of_the_registers_stands_in_the_table() -> None:
    listed = {proof for proofs in REFERENCE.values() for proof in proofs if "::" not in proof}
    assert set(RULES) - listed == set()


def test_every_check_is_asked_for_by_a_rule() -> None:
    asked = {check for rule in RULES.values() for check in rule.checks}
    for file in Path(__file__).parent.glob("checks_*.py"):
        for line in file.read_text(encoding="utf-8").splitlines():
            name = line.removeprefix("def ").split("(")[0]
            if line == f"def {name}(new):" and not name.startswith("_"):
                assert f"{file.stem.removeprefix('checks_')}.{name}" in asked
