"""What each rule of the hardware is, the checks that hold the firmware to it, and changes of the
firmware that break it: each must be caught by one of the rule's checks.

Datasheet: RP2040 datasheet. Erratum texts: the same, appendix B, and pico-sdk's comments.
"""

from __future__ import annotations

from typing import NamedTuple

from from_text import Change


class Rule(NamedTuple):
    says: str
    source: str
    checks: tuple[str, ...]  # "file.function", file without "checks_"
    broken: dict[str, tuple[Change, ...]]


def lines(*parts: str) -> str:
    return "\n".join(parts) + "\n"


def without(file: str, *parts: str) -> tuple[Change, ...]:
    return ((file, lines(*parts), ""),)


def instead(file: str, old: str, new: str) -> tuple[Change, ...]:
    return ((file, old, new),)


ADC, RING, HAL, PULSE, SPI = "adc_rp2", "ring_rp2", "hal_rp2", "pulse_pio", "spi_pair"

CONVERTER = {
    "adc-drain": Rule(
        "the FIFO is drained before a capture",
        "datasheet 4.9.2.3",
        ("converter.fifo_is_drained",),
        {
            "not drained": without(
                ADC,
                "    while adc[_FCS] & _FCS_EMPTY == 0:",
                "        dropped = adc[_FIFO]  # noqa: F841",
            ),
        },
    ),
    "adc-ready": Rule(
        "after START_MANY is cleared, READY is waited for",
        "datasheet 4.9.6, CS.READY",
        ("converter.conversion_under_way_is_waited_for",),
        {
            "not waited for": instead(
                ADC,
                "    while adc[_CS] & _CS_READY == 0:\n        pass\n    adc[_FCS] = _FCS_UNDER",
                "    adc[_FCS] = _FCS_UNDER",
            ),
            "not stopped": instead(
                ADC,
                "    adc = ptr32(_ADC)\n    ptr32(_ADC_CLR)[_CS] = _CS_START_MANY\n"
                "    while adc[_CS] & _CS_READY == 0:\n        pass\n    adc[_FCS] = _FCS_UNDER",
                "    adc = ptr32(_ADC)\n    adc[_FCS] = _FCS_UNDER",
            ),
        },
    ),
    "adc-robin": Rule(
        "round robin starts at channel 0, so that V and I do not swap",
        "datasheet 4.9.6, CS.RROBIN: AINSEL moves on with each conversion",
        ("converter.voltage_comes_first",),
        {
            "goes on where it was": (
                (ADC, "    adc[_CS] = _CS_EN\n    adc[_DIV]", "    adc[_DIV]"),
                (
                    ADC,
                    "    adc[_CS] = _CS_EN | _CS_RROBIN_V_I",
                    "    ptr32(_ADC_SET)[_CS] = _CS_EN | _CS_RROBIN_V_I",
                ),
            ),
            "three channels": instead(ADC, "V_I = const(0x30000)", "V_I = const(0x70000)"),
        },
    ),
    "adc-over": Rule(
        "OVER is looked at after each sweep, told, and cleared by writing 1",
        "datasheet 4.9.6, FCS.OVER",
        ("converter.dropped_conversion_is_told_once",),
        {
            "UNDER instead": instead(ADC, "_OVER_LSB = const(11)", "_OVER_LSB = const(10)"),
            "not cleared": instead(ADC, "UNDER_OVER = const(0xC00)", "UNDER_OVER = const(0x400)"),
            "not told": instead(HAL, "        return dropped != 0", "        return False"),
        },
    ),
    "adc-last": Rule(
        "DMA fetches the last codes before it is stopped",
        "datasheet 4.9.2.3",
        ("converter.last_codes_arrive",),
        {
            "not waited for": without(
                ADC,
                "    while adc[_FCS] & _FCS_EMPTY == 0 and spins > 0:",
                "        spins -= 1",
            ),
        },
    ),
    "adc-pace": Rule(
        "96 cycles of 48 MHz a conversion, 500 kS/s in all, I 2 us after V",
        "datasheet 4.9.2",
        ("converter.pace_and_skew",),
        {
            "paced by DIV": instead(ADC, "    adc[_DIV] = 0", "    adc[_DIV] = 255 << 8"),
            "current first": instead(
                ADC, "_CS_EN | _CS_RROBIN_V_I", "_CS_EN | _CS_RROBIN_V_I | 1 << _CS_AINSEL_LSB"
            ),
        },
    ),
    "adc-sum": Rule(
        "a sum is of its channel alone, and the converter stands still afterwards",
        "charge of the channel before: from memory",
        ("converter.sums_are_of_their_channel_alone",),
        {
            "first one counted": instead(ADC, "    taken = -1", "    taken = 0"),
            "runs on": instead(
                ADC,
                "    found = _total(channel, count)\n    halt()",
                "    found = _total(channel, count)",
            ),
            "another channel": instead(ADC, "AINSEL_LSB = const(12)", "AINSEL_LSB = const(13)"),
        },
    ),
    "adc-pads": Rule(
        "analogue pins have no pulls and no digital input",
        "datasheet 4.9.1",
        ("converter.analogue_pins_have_no_digital_side",),
        {"one forgotten": instead(ADC, "_GPIO = (26, 27, 28)", "_GPIO = (26, 27)")},
    ),
}

DMA = {
    "dma-dreq": Rule(
        "DMA moves half words at DREQ_ADC, 36, from the FIFO",
        "datasheet 2.5.3.1",
        ("converter.fifo_is_drained",),
        {
            "another request": instead(ADC, "REQUEST = 36", "REQUEST = 35"),
            "words": instead(ADC, "SIZE = 1", "SIZE = 2"),
            "another register": instead(ADC, "SOURCE = 0x4004C00C", "SOURCE = 0x4004C004"),
        },
    ),
    "dma-aligned": Rule(
        "the ring is aligned to its size, at most 2**15 bytes",
        "datasheet 2.5.7, CTRL.RING_SIZE",
        ("ring.ring_is_aligned",),
        {
            "not looked at": instead(RING, "        gap = -uctypes", "        gap = 0 * uctypes"),
            "the last resort is not aligned": (
                (RING, "    at = uctypes.addressof(store) + _RING_BYTES - 1 & -_RING_BYTES", ""),
                (
                    RING,
                    "bytearray_at(at, _RING_BYTES)",
                    "bytearray_at(uctypes.addressof(store), _RING_BYTES)",
                ),
            ),
        },
    ),
    "dma-ring": Rule(
        "the write address wraps at the ring's end, and nothing beside the ring is written",
        "datasheet 2.5.1.1",
        ("ring.ring_wraps",),
        {
            "half of it": instead(RING, "_RING_BITS = const(14)", "_RING_BITS = const(13)"),
            "twice as much": instead(RING, "_RING_BITS = const(14)", "_RING_BITS = const(15)"),
            "the read address": instead(RING, "ring_sel=True", "ring_sel=False"),
            "does not move": instead(RING, "inc_write=True", "inc_write=False"),
            "the FIFO's address moves": instead(RING, "inc_read=False", "inc_read=True"),
        },
    ),
    "dma-count": Rule(
        "count counts transfers, two to a pair, and far beyond the ring",
        "datasheet 2.5.7, TRANS_COUNT",
        ("ring.count_goes_on_across_the_wrap", "ring.long_captures_are_counted"),
        {
            "taken for pairs": instead(RING, "= 2 - size", "= 0"),
            "ends with the ring": instead(
                RING, "_COUNT_BITS = const(31)", "_COUNT_BITS = const(13)"
            ),
            "not kept": instead(
                RING,
                "    words[_W_WRITTEN] = int(written(words))\n    words[_W_RUNNING] = 0",
                "    words[_W_RUNNING] = 0",
            ),
            "kept modulo 2**29": instead(
                RING,
                "    return int((done >> words[_W_SHIFT]) & 0x3FFFFFFF)",
                "    return int((done >> words[_W_SHIFT]) & 0x0FFFFFFF)",
            ),
        },
    ),
    "dma-first": Rule(
        "DMA waits before START_MANY is written",
        "datasheet 4.9.2.3; shared/reference",
        ("ring.dma_waits_before_the_converters_start",),
        {
            "afterwards": (
                (HAL, "        ring_rp2.arm(_words)\n", ""),
                (
                    HAL,
                    "        machine.enable_irq(irq)\n",
                    "        machine.enable_irq(irq)\n        ring_rp2.arm(_words)\n",
                ),
            ),
        },
    ),
    "dma-credits": Rule(
        "requests of before, whose codes are gone, are forgotten",
        "datasheet 2.5.3.1, 2.5.7 DBG_CTDREQ",
        ("ring.requests_of_before_are_forgotten",),
        {
            "not forgotten": without(
                RING,
                "    dma[_DBG_CTDREQ] = 0  # requests of before, whose codes have been thrown away",
            ),
        },
    ),
    "dma-abort": Rule(
        "EN is cleared before an abort, and the abort is waited for",
        "datasheet 2.5.5.3; pico-sdk hardware_dma/dma.h on RP2040-E13",
        ("ring.halt_leaves_nothing_in_flight", "ring.abort_is_waited_for"),
        {
            "EN stays": without(
                RING,
                "    dma[_AL1_CTRL] = words[_W_DMA_CTRL] - _DMA_EN"
                "  # before the abort: erratum RP2040-E13",
            ),
            "not waited for": without(
                RING, "    while ptr32(_CHAN_ABORT)[0] & bit:", "        pass"
            ),
            "not aborted": without(RING, "    ptr32(_CHAN_ABORT)[0] = bit"),
        },
    ),
}
