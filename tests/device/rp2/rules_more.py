"""The rest of `rules.py`: resets, watchdog, quiet, the link, clocks, SPI converters."""

from __future__ import annotations

from rules import CONVERTER, DMA, HAL, PULSE, RING, SPI, Rule, instead, lines, without
from rules_output import OUTPUT, SUPERVISION, TRIPS

SAFETY = {
    "start-safe": Rule(
        "a start brings all to rest: a soft reset leaves pins driven and the converter running",
        "MicroPython ports/rp2/main.c, rp2_pio.c (rp2_pio_deinit), rp2_dma.c (close)",
        (
            "safety.start_after_a_soft_reset_is_safe",
            "safety.second_object_takes_over",
            "safety.second_object_stops_spi",
        ),
        {
            "pulse left": instead(
                PULSE, "[_SM0_ADDR] & 31\n        stop()\n", "[_SM0_ADDR] & 31\n"
            ),
            "relay left": instead(HAL, "Pin(_RELAY, Pin.OUT, value=0)", "Pin(_RELAY, Pin.OUT)"),
            "bleed release left": instead(
                HAL, "Pin(_BLEED_RELEASE, Pin.OUT, value=0)", "Pin(_BLEED_RELEASE, Pin.OUT)"
            ),
            "converter left": without(HAL, "        adc_rp2.halt()"),
            "SPI left": without(HAL, "        machine.mem32[_PIO1_CTRL_CLR] = 1"),
            "supervision left": instead(
                HAL, "        ring_rp2.supervise_end()\n        adc_rp2", "        adc_rp2"
            ),
            "DMA left": instead(
                RING, "    halt(words)\n    words[_W_RUNNING]", "    words[_W_RUNNING]"
            ),
            "count left": instead(
                RING, "    words[_W_RUNNING] = 0\n    words[_W_WRITTEN] = 0\n", ""
            ),
        },
    ),
    "reset-cause": Rule(
        "the cause of a reset is told by TIMER3's mark, REASON and CHIP_RESET, in this order",
        "datasheet 4.7.6 REASON, 2.12.8 CHIP_RESET; modmachine.c: reset() forces the watchdog",
        ("safety.reset_cause_is_told",),
        {
            "mark not looked at": instead(HAL, "if soft or reason & 2:", "if reason & 2:"),
            "mark not left": without(HAL, "    machine.mem32[_TIMER3] = _SOFT_RESET_MARK"),
            "forced one taken for a bite": instead(HAL, "reason & 2:", "0:"),
            "bite not looked at": without(
                HAL, "    if reason & 1:", "        return hal.RESET_WATCHDOG"
            ),
            "RUN not looked at": instead(HAL, "_HAD_RUN = const(0x10000)", "_HAD_RUN = const(0x2)"),
            "power-on for RUN": instead(
                HAL, "_HAD_RUN = const(0x10000)", "_HAD_RUN = const(0x100)"
            ),
        },
    ),
    "watchdog-stop": Rule(
        "CTRL bit 30, through the alias that clears, stops the watchdog",
        "datasheet 4.7.6, CTRL.ENABLE; 2.1.2, aliases",
        ("safety.watchdog_can_be_stopped",),
        {
            "another bit": instead(HAL, "ENABLE_LSB = const(30)", "ENABLE_LSB = const(26)"),
            "the alias that sets": instead(HAL, "const(0x4005B000)", "const(0x4005A000)"),
            "not stopped": instead(
                HAL, "            _watchdog_off()\n", "            self._wdt.feed()\n"
            ),
            "not started again": without(HAL, "            self._watchdog_ms = 0"),
        },
    ),
    "watchdog-feed": Rule(
        "the watchdog bites unfed, in its time, at most 8388 ms, also after a soft reset",
        "machine_wdt.c; datasheet 4.7.6 LOAD and erratum RP2040-E1",
        (
            "safety.watchdog_bites_unfed",
            "safety.watchdog_is_fed",
            "safety.watchdog_takes_any_time",
            "safety.watchdog_outlives_a_soft_reset",
        ),
        {
            "not fed": instead(HAL, "            self._wdt.feed()\n", "            pass\n"),
            "first time kept": instead(
                HAL,
                "elif ms == self._watchdog_ms:",
                "elif self._watchdog_ms:",
            ),
            "more than it counts": instead(HAL, "min(ms, _WATCHDOG_MAX_MS)", "ms"),
        },
    ),
    "quiet": Rule(
        "the heap is collected, then locked once, and unlocked once, however often it is asked",
        "py/modmicropython.c: locks are counted, and one unlock too many locks for good",
        ("safety.lock_is_balanced", "safety.heap_is_collected_before_the_lock"),
        {
            "locked twice": instead(
                HAL,
                "    if quiet[0] == 0:\n        quiet[0] = 1\n        micropython.heap_lock()",
                "    quiet[0] = 1\n    micropython.heap_lock()",
            ),
            "unlocked twice": instead(
                HAL,
                "    if quiet[0] == 1:\n        quiet[0] = 0\n        micropython.heap_unlock()",
                "    quiet[0] = 0\n    micropython.heap_unlock()",
            ),
            "not marked": instead(
                HAL, "        quiet[0] = 1\n        micropython", "        micropython"
            ),
            "not collected": instead(
                HAL, "        gc.collect()\n        _lock(_quiet)", "        _lock(_quiet)"
            ),
            "collected late": instead(
                HAL,
                "        gc.collect()\n        _lock(_quiet)",
                "        _lock(_quiet)\n        gc.collect()",
            ),
        },
    ),
    "emergency-buffer": Rule(
        "an exception in an interrupt has memory to be told in",
        "MicroPython's documentation, writing interrupt handlers",
        ("safety.emergency_buffer_is_there",),
        {"left out": without(HAL, "micropython.alloc_emergency_exception_buf(100)")},
    ),
    "stdin": Rule(
        "stdin blocks for all that it is asked for: poll, then read one by one",
        "shared/reference, USB",
        ("safety.bytes_are_read_one_by_one",),
        {
            "all at once": instead(
                "usb_serial",
                "            self._in.readinto(byte)\n            buffer[count] = byte[0]\n"
                "            count += 1\n",
                "            count += self._in.readinto(buffer)\n",
            ),
            "not polled": instead(
                "usb_serial",
                "            for _ in self._poll.ipoll(0):\n                break\n"
                "            else:\n                break\n",
                "",
            ),
            "polled for long": instead(
                "usb_serial", "in self._poll.ipoll(0):", "in self._poll.ipoll(1):"
            ),
        },
    ),
    "stdout": Rule(
        "a write that gives up after 500 ms is short, and says so",
        "shared/reference, USB; ports/rp2/mphalport.c",
        ("safety.short_write_is_told",),
        {
            "taken as whole": instead(
                "usb_serial",
                "return self._out.write(data) or 0",
                "self._out.write(data)\n        return len(data)",
            ),
        },
    ),
    "refusals": Rule(
        "converters that the board has not, or cannot pace, are refused",
        "hal.py",
        ("safety.unknown_converters_are_refused",),
        {
            "any pace": instead(
                HAL, "kind == hal.INTERNAL and pair_us == adc_rp2.PAIR_US", "kind == hal.INTERNAL"
            ),
        },
    ),
}

CLOCKS = {
    "time-carry": Rule(
        "the 64-bit time is read again where the carry came between its halves",
        "datasheet 4.6.2",
        ("time.now_is_right_at_the_carry",),
        {
            "read once": without(
                RING,
                "    while raw[0] != high:",
                "        high = raw[0]",
                "        low = raw[1]",
            ),
            "low half first": instead(
                RING,
                "    high = raw[0]\n    low = raw[1]\n    while raw[0] != high:",
                "    low = raw[1]\n    high = raw[0]\n    while raw[0] != high:",
            ),
            "only the high half again": instead(
                RING,
                "        high = raw[0]\n        low = raw[1]\n    words[_W_TIME_HIGH]",
                "        high = raw[0]\n    words[_W_TIME_HIGH]",
            ),
        },
    ),
    "began": Rule(
        "a capture began with its first conversion, also at the carry and beside an interrupt",
        "datasheet 4.6.2; SPEC.md, time of a sweep",
        ("time.began_is_the_first_conversion", "time.no_interrupt_between_time_and_start"),
        {
            "carry not noticed": without(
                RING,
                "    if raw[0] != high and low >= 0:",
                "        high = raw[0]  # the carry came between the two reads",
            ),
            "carry after the low half taken for one before": instead(
                RING, "if raw[0] != high and low >= 0:", "if raw[0] != high:"
            ),
            "interrupts on": (
                (HAL, "        irq = machine.disable_irq()\n", ""),
                (HAL, "        machine.enable_irq(irq)\n", ""),
            ),
            "interrupts stay off": instead(HAL, "        machine.enable_irq(irq)\n", ""),
        },
    ),
    "ticks": Rule(
        "ticks wrap at 2**30",
        "MicroPython extmod/modtime.c",
        ("time.ticks_wrap",),
        {"the whole clock": instead(HAL, "return time.ticks_us()", "return ring_rp2.now_us()")},
    ),
}

FLUSH = lines(
    "    flip[_SM0_SHIFTCTRL] = fjoin_rx  # a change of this bit flushes both FIFOs",
    "    flip[_SM0_SHIFTCTRL] = fjoin_rx",
)

SPI_PAIR = {
    "spi-words": Rule(
        "each word in the ring is a pair, voltage low, from the first sampling on",
        "datasheet 3.4; spi_pair.py on what it assumes of a converter",
        ("spi.pairs_arrive_whole", "spi.sums_are_of_their_channel"),
        {
            "goes on in mid-pair": instead(SPI, "    _to_start(_origin)\n", "    pass\n"),
            "select not low at the start": without(SPI, "    pio[_SM0_INSTR] = _SET_SELECT_LOW"),
            "half words": instead(SPI, "\nSIZE = 2", "\nSIZE = 1"),
            "another FIFO's request": instead(SPI, "REQUEST = 12", "REQUEST = 8"),
            "data lines turned round": instead(
                SPI, "in_base=Pin(_DATA[0])", "in_base=Pin(_DATA[1])"
            ),
            "first one counted": instead(SPI, "    taken = -1", "    taken = 0"),
            "another channel": instead(SPI, "_total(16 * channel", "_total(8 * channel"),
        },
    ),
    "spi-pace": Rule(
        "select rises every pair_us, exactly; the first time as the capture starts",
        "datasheet 3.5.5, clock dividers; CTRL.CLKDIV_RESTART",
        ("spi.pace_is_exact",),
        {
            "undivided": without(SPI, "    machine.mem32[_SM0_CLKDIV_AT] = divider << 16"),
            "skew of the other": instead(SPI, "SKEW_NS = 0", "SKEW_NS = 2000"),
        },
    ),
    "spi-flush": Rule(
        "words of before are thrown away by a change of FJOIN",
        "datasheet 3.7, SHIFTCTRL.FJOIN_RX",
        ("spi.words_of_before_are_thrown_away",),
        {
            "not flushed": instead(SPI, FLUSH, ""),
            "machine not stopped": instead(
                SPI,
                '    """The state machine stands still, its FIFO is empty."""\n'
                "    ptr32(_PIO1_CLR)[_CTRL] = _SM_ENABLE\n",
                "",
            ),
        },
    ),
    "spi-stall": Rule(
        "RXSTALL is looked at after each sweep, told, and cleared by writing 1",
        "datasheet 3.7, FDEBUG.RXSTALL",
        ("spi.dropped_pair_is_told_once",),
        {
            "not told": instead(SPI, "return pio[_FDEBUG] & _RXSTALL", "return 0"),
            "not cleared": without(SPI, "    ptr32(_PIO1)[_FDEBUG] = _RXSTALL"),
        },
    ),
    "spi-last": Rule(
        "DMA fetches the last pairs before it is stopped",
        "datasheet 3.7, FSTAT.RXEMPTY",
        ("spi.last_pairs_arrive",),
        {
            "not waited for": without(
                SPI, "    while pio[_FSTAT] & _RXEMPTY == 0 and spins > 0:", "        spins -= 1"
            ),
        },
    ),
    "spi-again": Rule(
        "converters can be chosen again and again: the old program makes room",
        "datasheet 3.2.1, 32 words; pico-sdk hardware_pio/pio.c",
        ("spi.converters_can_be_chosen_again",),
        {
            "no room made": without(SPI, "    rp2.PIO(1).remove_program()"),
        },
    ),
    "spi-missing": Rule(
        "a data line that is not connected reads full scale",
        "device/README.md, the table of pins",
        ("spi.missing_converter_reads_full_scale",),
        {"pulled down": instead(SPI, "Pin.PULL_UP", "Pin.PULL_DOWN")},
    ),
}

GROUPS: dict[str, dict[str, Rule]] = {
    "converter": CONVERTER,
    "dma": DMA,
    "supervision": SUPERVISION,
    "trips": TRIPS,
    "output": OUTPUT,
    "safety": SAFETY,
    "clocks": CLOCKS,
    "spi": SPI_PAIR,
}
RULES = {key: rule for group in GROUPS.values() for key, rule in group.items()}
