"""The rest of `rules.py`: the supervision, and the make-and-break output that it ends."""

from __future__ import annotations

from from_text import Change
from rules import HAL, PULSE, RING, Rule, instead, lines, without

V_TRIPS = "if codes[at] >= trip and codes[before] >= trip:"
I_TRIPS = "if trips & 2 == 0 and codes[at + 1] >= trip and codes[before + 1] >= trip:"

SUPERVISION = {
    "visit-ticks": Rule(
        "a hard timer with id -1 visits each ms, counts, and ends when told",
        "MicroPython ports/rp2/machine_timer.c",
        ("supervision.ticks_are_milliseconds",),
        {
            "soft": instead(RING, "hard=True", "hard=False"),
            "another pace": instead(RING, "period=1,", "period=2,"),
            "another id": instead(RING, "machine.Timer(-1)", "machine.Timer(0)"),
            "ticks go on": without(RING, "    words[_W_TICKS] = 0"),
            "never ends": instead(
                RING,
                "def supervise_end():\n    timer.deinit()\n",
                "def supervise_end():\n",
            ),
        },
    ),
    "visit-stop": Rule(
        "an open stop loop trips, a broken wire as well, and the trip stays",
        "datasheet 2.3.1, GPIO_IN; 2.19.6.3, pulls",
        ("supervision.open_stop_loop_trips", "supervision.broken_wire_reads_reversed"),
        {
            "the pin beside it": instead(RING, "_STOP_LOOP = const(5)", "_STOP_LOOP = const(6)"),
            "pulled up": instead(HAL, "Pin.IN, Pin.PULL_DOWN", "Pin.IN, Pin.PULL_UP"),
            "reversed pulled down": instead(HAL, "Pin.IN, Pin.PULL_UP", "Pin.IN, Pin.PULL_DOWN"),
            "forgotten": instead(RING, "    trips = told[_W_TRIPS]", "    trips = 0"),
            "never cleared": without(RING, "    words[_W_TRIPS] = 0"),
        },
    ),
    "visit-limits": Rule(
        "codes at the limit in the newest two pairs trip, wherever in the ring they are",
        "DESIGN, limits: over-voltage and over-current within 2 ms",
        ("supervision.newest_pair_trips", "spi.codes_trip_in_words"),
        {
            "a pair too far": instead(RING, "2 * ((pairs - 1) &", "2 * ((pairs - 0) &"),
            "half a ring": instead(RING, "_RING_MASK = const(4095)", "_RING_MASK = const(2047)"),
            "current for voltage": instead(
                RING, V_TRIPS, "if codes[at + 1] >= trip and codes[before + 1] >= trip:"
            ),
            "voltage for current": instead(
                RING, I_TRIPS, "if trips & 2 == 0 and codes[at] >= trip and codes[before] >= trip:"
            ),
            "above only": instead(RING, V_TRIPS, "if codes[at] > trip and codes[before] > trip:"),
            "limits swapped": (
                (RING, "trip = told[_W_VOLTAGE_TRIP]", "trip = told[3]"),
                (RING, "trip = told[_W_CURRENT_TRIP]", "trip = told[2]"),
            ),
        },
    ),
    "visit-rest": Rule(
        "with no capture under way no pair trips",
        "DESIGN, supervision",
        ("supervision.pairs_of_before_do_not_trip",),
        {"always": instead(RING, "    if told[_W_RUNNING]:", "    if told[_W_RUNNING] >= 0:")},
    ),
}

ENDS = "    told[_W_TRIPS] = trips\n    if trips and told[_W_BREAKS]:\n        stop()\n"
_PULSE = """def _pulse(words: ptr32, periods: int, origin: int):
    irq = machine.disable_irq()
    if periods <= 0 or int(ring_rp2.tripped(words)) != 0:
        pulse_pio.stop()
    else:
        pulse_pio.run(periods, origin)
    machine.enable_irq(irq)
"""


def pulse(*parts: str) -> tuple[Change, ...]:
    """`_pulse` of these lines instead of its own."""
    first = _PULSE.split("\n", maxsplit=1)[0]
    return instead(HAL, _PULSE, lines(first, *(f"    {part}" for part in parts)))


OFF, ON = "irq = machine.disable_irq()", "machine.enable_irq(irq)"
BY_LOOK = "if periods <= 0 or int(ring_rp2.tripped(words)) != 0:"
BY_KEPT = "if periods <= 0 or tripped != 0:"
KEEP = "tripped = int(ring_rp2.tripped(words))"
STOP = ("    pulse_pio.stop()",)
STOP_OR_RUN = (*STOP, "else:", "    pulse_pio.run(periods, origin)")

TRIPS = {
    "trip-pairs": Rule(
        "two pairs in a row trip, one alone does not, wherever in the ring they are",
        "hal.py, supervise; DESIGN, limits",
        (
            "trips.two_pairs_in_a_row_trip",
            "trips.pairs_beside_the_rings_end_trip",
            "trips.first_pair_waits_for_another",
        ),
        {
            "one voltage": instead(RING, V_TRIPS, "if codes[at] >= trip:"),
            "one current": instead(RING, I_TRIPS, "if trips & 2 == 0 and codes[at + 1] >= trip:"),
            "the voltage before": instead(RING, V_TRIPS, "if codes[before] >= trip:"),
            "the current before": instead(
                RING, I_TRIPS, "if trips & 2 == 0 and codes[before + 1] >= trip:"
            ),
            "either": instead(RING, V_TRIPS, V_TRIPS.replace("and", "or")),
            "current beside voltage": instead(
                RING, V_TRIPS, "if codes[at] >= trip and codes[before + 1] >= trip:"
            ),
            "a place before the ring": instead(
                RING, "before = 2 * ((pairs - 2) & _RING_MASK)", "before = at - 2"
            ),
            "a place behind the ring": instead(
                RING, "before = 2 * ((pairs - 2) & _RING_MASK)", "before = 2 * (pairs - 2)"
            ),
            "two pairs before": instead(RING, "(pairs - 2) &", "(pairs - 3) &"),
            "the pair of long ago": instead(RING, "if pairs > 1 and", "if pairs > 0 and"),
            "the second pair not looked at": instead(RING, "if pairs > 1 and", "if pairs > 2 and"),
        },
    ),
    "trip-code": Rule(
        "a trip is of one channel, the voltage before the current, and of its first code",
        "hal.py, trip_code",
        ("trips.first_code_that_trips_is_told", "trips.code_of_before_is_forgotten"),
        {
            "looked at again after a trip": instead(
                RING, "if pairs > 1 and trips & 6 == 0:", "if pairs > 1:"
            ),
            "voltage alone not looked at again": instead(RING, "trips & 6 == 0", "trips & 2 == 0"),
            "current alone not looked at again": instead(RING, "trips & 6 == 0", "trips & 4 == 0"),
            "not looked at with the loop open": instead(RING, "trips & 6 == 0", "trips == 0"),
            "both channels": instead(RING, "if trips & 2 == 0 and codes", "if codes"),
            "no current with the loop open": instead(
                RING, "if trips & 2 == 0 and codes", "if trips == 0 and codes"
            ),
            "kept for the next supervision": without(RING, "    words[_W_TRIP_CODE] = 0"),
            "the pair before": instead(
                RING, "told[_W_TRIP_CODE] = codes[at]\n", "told[_W_TRIP_CODE] = codes[before]\n"
            ),
            "the other channel": instead(
                RING, "told[_W_TRIP_CODE] = codes[at + 1]", "told[_W_TRIP_CODE] = codes[at]"
            ),
            "none": instead(HAL, "return ring_rp2.trip_code()", "return 0"),
        },
    ),
    "trip-ends": Rule(
        "a trip ends the wave in the visit: low within 1 ms and the visit of what trips",
        "DESIGN, limits: within 2 ms; hal.py, supervise",
        (
            "trips.trip_ends_the_wave_in_a_visit",
            "trips.wave_that_stands_beside_a_trip_is_ended",
        ),
        {
            "left to the loop": instead(RING, ENDS, "    told[_W_TRIPS] = trips\n"),
            "at the next visit": instead(
                RING,
                ENDS,
                "    if told[_W_TRIPS] and told[_W_BREAKS]:\n        stop()\n"
                "    told[_W_TRIPS] = trips\n",
            ),
            "once": instead(
                RING,
                ENDS,
                "    if trips != told[_W_TRIPS] and told[_W_BREAKS]:\n        stop()\n"
                "    told[_W_TRIPS] = trips\n",
            ),
            "the stop loop alone": instead(RING, "if trips and told", "if trips & 1 and told"),
            "not the stop loop": instead(RING, "if trips and told", "if trips & 6 and told"),
            "not the current": instead(RING, "if trips and told", "if trips & 3 and told"),
            "half as often": instead(RING, "period=1,", "period=2,"),
            "not told to": instead(RING, "1 if breaks else 0", "0"),
            "lost on the way": instead(
                HAL, "voltage_trip_code, current_trip_code, breaks)\n\n", "1, 1, False)\n\n"
            ),
        },
    ),
    "trip-stays": Rule(
        "after a trip no call lets the wave rise, whether the visit comes before, in or after it",
        "hal.py, supervise",
        ("orders.no_pulse_after_a_trip", "orders.no_pulse_after_any_trip"),
        {
            "not looked for": pulse(OFF, "if periods <= 0:", *STOP_OR_RUN, ON),
            "interrupts on": pulse(BY_LOOK, *STOP_OR_RUN),
            "looked for before interrupts are off": pulse(KEEP, OFF, BY_KEPT, *STOP_OR_RUN, ON),
            "interrupts on again before the start": pulse(OFF, KEEP, ON, BY_KEPT, *STOP_OR_RUN),
            "looked for after the start": pulse("pulse_pio.run(periods, origin)", BY_LOOK, *STOP),
            "looked for before the start and after": pulse(
                BY_LOOK, *STOP_OR_RUN, "if int(ring_rp2.tripped(words)) != 0:", *STOP
            ),
            "started, then looked for": pulse(
                OFF, "pulse_pio.run(periods, origin)", BY_LOOK, *STOP, ON
            ),
            "interrupts stay off": pulse(OFF, BY_LOOK, *STOP_OR_RUN),
            "not for the stop loop": instead(
                RING, "    if words[_W_TRIPS] and words", "    if words[_W_TRIPS] & 6 and words"
            ),
            "for the stop loop alone": instead(
                RING, "    if words[_W_TRIPS] and words", "    if words[_W_TRIPS] & 1 and words"
            ),
            "not for the current": instead(
                RING, "    if words[_W_TRIPS] and words", "    if words[_W_TRIPS] & 3 and words"
            ),
        },
    ),
    "trip-goes-on": Rule(
        "without breaks a trip is told and the wave goes on",
        "contact.py: an opening under load draws an arc",
        ("orders.trip_without_breaks_lets_the_wave_go_on",),
        {
            "the visit ends it": instead(RING, "if trips and told[_W_BREAKS]:", "if trips:"),
            "the call ends it": instead(
                RING, "if words[_W_TRIPS] and words[_W_BREAKS]:", "if words[_W_TRIPS]:"
            ),
            "always": instead(RING, "1 if breaks else 0", "1"),
        },
    ),
    "trip-given-back": Rule(
        "the end of the supervision, the next one, or a new object gives the pulse back",
        "hal.py, supervise_end",
        ("orders.supervise_end_gives_the_pulse_back",),
        {
            "kept": instead(
                RING,
                "    timer.deinit()\n    words[_W_BREAKS] = 0\n",
                "    timer.deinit()\n",
            ),
            "kept for a new object": instead(
                HAL,
                "        ring_rp2.supervise_end()\n        adc_rp2",
                "        ring_rp2.timer.deinit()\n        adc_rp2",
            ),
            "trips kept": without(RING, "    words[_W_TRIPS] = 0"),
            "no pulse at all": instead(
                RING, "if words[_W_TRIPS] and words[_W_BREAKS]:", "if words[_W_BREAKS]:"
            ),
        },
    ),
}

OUTPUT = {
    "pulse-wave": Rule(
        "a square wave of 25.6 kHz, high for 18 us of 39",
        "DESIGN, bounded pulse: 10 kHz or more",
        ("pulse.wave_is_of_its_period", "pulse.never_longer_than_asked"),
        {
            "slower": instead(PULSE, "_STEP_HZ = const(333333)", "_STEP_HZ = const(166667)"),
            "one period more": instead(PULSE, "us // PERIOD_US - 1", "us // PERIOD_US + 1"),
            "from the other end": instead(
                PULSE, "out_shiftdir=rp2.PIO.SHIFT_RIGHT", "out_shiftdir=rp2.PIO.SHIFT_LEFT"
            ),
            "inverted": (
                (PULSE, "pull().side(0)", "pull().side(1)"),
                (PULSE, "nop().side(1)[5]", "nop().side(0)[5]"),
            ),
        },
    ),
    "pulse-bound": Rule(
        "the program bounds the wave, whatever word it is given",
        "DESIGN, bounded pulse",
        ("pulse.bounded_whatever_the_word", "bound.garbled_words_are_bounded"),
        {
            "all bits": instead(PULSE, "out(x, bits)", "out(x, 32)"),
            "one bit more": instead(PULSE, "SWITCH_BITS = const(9)", "SWITCH_BITS = const(10)"),
            "one bit more for a bare relay": instead(
                PULSE, "BARE_BITS = const(17)", "BARE_BITS = const(18)"
            ),
            "a switch taken for a bare relay": instead(
                PULSE, "bits = BARE_BITS if bare else SWITCH_BITS", "bits = BARE_BITS"
            ),
            "a bare relay taken for a switch": instead(
                PULSE, "bits = BARE_BITS if bare else SWITCH_BITS", "bits = SWITCH_BITS"
            ),
            "a bare relay at the start": instead(
                HAL,
                "self._pulse = BoundedPulse(False)",
                "self._pulse = BoundedPulse(True)",
            ),
        },
    ),
    "pulse-cycles": Rule(
        "a word's periods end in their cycles, whenever in a period it comes, and never later",
        "datasheet 3.2, 3.4; DESIGN, bounded pulse",
        (
            "bound.periods_are_alike",
            "bound.renewed_at_any_cycle",
            "bound.renewed_twice_at_any_cycles",
            "bound.flushed_at_any_cycle",
            "bound.started_at_any_moment",
            "bound.stuck_processor_drops_the_pin",
        ),
        {
            "does not rest": instead(PULSE, "pull().side(0)", "pull(noblock).side(0)"),
            "a cycle more": instead(PULSE, "nop().side(1)[5]", "nop().side(1)[6]"),
            "high for a cycle more": (
                (PULSE, "nop().side(1)[5]", "nop().side(1)[6]"),
                (PULSE, "pull(noblock).side(0)[3]", "pull(noblock).side(0)[2]"),
            ),
            "not counted": instead(PULSE, 'jmp(x_dec, "high")', 'jmp("high")'),
            "none left is one more": without(
                PULSE, "        wrap()  # none left: low, back to rest"
            ),
            "a renewal begins anew": instead(
                PULSE, "if ptr32(_CTRL)[0] & _SM_ENABLE == 0:", "if ptr32(_CTRL)[0] >= 0:"
            ),
            "a word for rest waits behind": instead(
                PULSE,
                "    _forget_words()\n    ptr32(_TXF0)[0] = periods\n",
                "    ptr32(_TXF0)[0] = periods\n",
            ),
            "looked for at rest alone": instead(
                PULSE, "    pull(noblock).side(0)[3]", "    mov(osr, x).side(0)[3]"
            ),
            "one period more": instead(PULSE, "us // PERIOD_US - 1", "us // PERIOD_US"),
            "more than its bits": instead(
                PULSE, "min(max(us // PERIOD_US - 1, 0), self._most)", "us // PERIOD_US - 1"
            ),
        },
    ),
    "pulse-contact": Rule(
        "another contact's program takes the place of the one before, with the wave at rest",
        "datasheet 3.2.1, 32 words; rp2_pio.c",
        ("pulse.contact_is_changed_at_rest", "pulse.contact_can_be_changed_again"),
        {
            "loaded under the wave": instead(
                PULSE, "        stop()\n        bits =", "        bits ="
            ),
            "no room made": without(PULSE, "        rp2.PIO(0).remove_program()"),
            "PIO keeps the pin": instead(
                PULSE, "[_SM0_ADDR] & 31\n        stop()\n", "[_SM0_ADDR] & 31\n"
            ),
            "not changed": instead(HAL, "self._pulse = BoundedPulse(bare)", "pass"),
        },
    ),
    "pulse-renewal": Rule(
        "a renewal replaces what is left; the FIFO is emptied, so that no queued word extends it",
        "datasheet 3.7, SHIFTCTRL.FJOIN_RX: a change flushes; TXF: a full FIFO drops the word",
        ("pulse.renewal_replaces", "pulse.queued_words_do_not_extend"),
        {
            "not emptied": instead(
                PULSE, "    _forget_words()\n    ptr32(_TXF0)", "    ptr32(_TXF0)"
            ),
            "not looked for": instead(
                PULSE, "    pull(noblock).side(0)[3]", "    mov(osr, x).side(0)[3]"
            ),
            "FJOIN not changed back": instead(
                PULSE,
                "    shiftctrl[0] = fjoin_rx  # a change of this bit flushes both FIFOs\n"
                "    shiftctrl[0] = fjoin_rx\n",
                "    shiftctrl[0] = fjoin_rx\n",
            ),
        },
    ),
    "pulse-stop": Rule(
        "a stop drives the pin low by SIO first, and the machine stands still",
        "DESIGN, bounded pulse; datasheet 2.3.1, 2.19.2",
        ("pulse.stop_is_low_first", "pulse.safe_stops_the_pulse"),
        {
            "SIO's level not set": without(PULSE, "    ptr32(_SIO_OUT_CLR)[0] = 1 << _GPIO"),
            "SIO does not drive": without(PULSE, "    ptr32(_SIO_OE_SET)[0] = 1 << _GPIO"),
            "PIO keeps the pin": without(PULSE, "    ptr32(_GPIO2_CTRL)[0] = _FUNCTION_SIO"),
            "machine runs on": instead(
                PULSE,
                "    ptr32(_GPIO2_CTRL)[0] = _FUNCTION_SIO\n    ptr32(_CTRL_CLR)[0] = _SM_ENABLE\n",
                "    ptr32(_GPIO2_CTRL)[0] = _FUNCTION_SIO\n    ptr32(_CTRL_CLR)[0] = 0\n",
            ),
            "machine stopped first": (
                (PULSE, "    ptr32(_CTRL_CLR)[0] = _SM_ENABLE\n", ""),
                (
                    PULSE,
                    "    ptr32(_SIO_OUT_CLR)[0] = 1 << _GPIO\n",
                    "    ptr32(_CTRL_CLR)[0] = _SM_ENABLE\n"
                    "    ptr32(_SIO_OUT_CLR)[0] = 1 << _GPIO\n",
                ),
            ),
            "safe forgets it": instead(
                HAL, "        pulse_pio.stop()\n        self._relay", "        self._relay"
            ),
            "left to run out": instead(HAL, "if periods <= 0 or", "if periods < 0 or"),
        },
    ),
    "pulse-start": Rule(
        "the pin is low as PIO takes it",
        "DESIGN, bounded pulse; datasheet 3.7, SMx_INSTR",
        ("pulse.pin_is_low_as_pio_takes_it",),
        {
            "PIO's level is the old one": without(
                PULSE,
                '        ptr32(_SM0_INSTR)[0] = origin  # "jmp origin" with the side-set pin low',
            ),
            "taken too early": instead(
                PULSE,
                '        ptr32(_SM0_INSTR)[0] = origin  # "jmp origin" with the side-set pin low\n'
                "        ptr32(_GPIO2_CTRL)[0] = _FUNCTION_PIO0\n",
                "        ptr32(_GPIO2_CTRL)[0] = _FUNCTION_PIO0\n"
                "        ptr32(_SM0_INSTR)[0] = origin\n",
            ),
        },
    ),
    "pulse-alone": Rule(
        "nothing else changes the pin's function",
        "DESIGN, bounded pulse",
        ("pulse.nothing_else_takes_the_pin",),
        {
            "the relay": instead(HAL, "_RELAY = const(3)", "_RELAY = const(2)"),
            "the supervision": instead(
                RING,
                "    told = ptr32(words)\n    told[_W_TICKS]",
                "    told = ptr32(words)\n    ptr32(0x40014014)[0] = 5\n    told[_W_TICKS]",
            ),
        },
    ),
    "outputs": Rule(
        "relay, bleed release and zero input are high when on; safe makes all of them low",
        "device/README.md, the table of pins",
        ("pulse.outputs_do_as_told",),
        {
            "relay forgotten": without(HAL, "        self._relay.off()"),
            "bleed forgotten": without(HAL, "        self._release.off()"),
            "bleed turned round": instead(HAL, "0 if engaged else 1", "1 if engaged else 0"),
            "relay turned round": instead(HAL, "1 if closed else 0", "0 if closed else 1"),
        },
    ),
}
