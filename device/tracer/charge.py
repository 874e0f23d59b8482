"""One charge: from the readings just before closing to the contact open again.

Runs to its end in one call, inside the board's quiet: nothing is sent, nothing collected.
Between slices it listens for abort alone. The make-and-break output is a bounded pulse that
each slice earns anew: only when both the supervision tick and the ring have moved on, and only
while it still runs: a contact that has opened by itself is not closed again.

In the quiet nothing is allocated. So time is counted in pairs, by the ring: a time in
microseconds since boot needs an object of its own from 18 minutes on.
"""

from micropython import const

from tracer import hal as board

SLICE_US = const(500)
SLICE_PAIRS = const(125)
LISTEN_PAIRS = const(2500)  # 10 ms: an abort is heard by then at the latest
READ_CONVERSIONS = const(2048)  # so that noise of a zero is far below that of a knot
ZERO_SETTLE_US = const(2000)  # of the voltage channel, to its zero and back
DARK_MS = const(100)  # without conduction for so long, the source is dark
FIRST_MS = const(2)  # before the first supervision tick can be asked for
PULSE_MARGIN_US = const(100)  # more than the wave's last period and the call itself
CONDUCTING_CODES = const(8)  # of 12 bits, above the current zero: more than noise ever reaches
END_SLICES = const(3)
STEP_US = const(2000)  # of a step of the work done meanwhile, with few knots

# End reasons, as on the wire.
COMPLETE = const(1)
TIME_LIMIT = const(2)
ABORTED = const(3)
STOP_LOOP = const(4)
OVER_VOLTAGE = const(5)
OVER_CURRENT = const(6)
HOST_LOST = const(7)
NO_CURRENT = const(8)
RING_OVERRUN = const(9)
SUPERVISION_LOST = const(10)
INTERRUPTED = const(11)


class Result:
    """What a charge leaves behind, the bins apart."""

    def __init__(self):
        self.end_reason = 0
        self.voltage_sum = 0
        self.current_sum = 0
        self.voltage_zero_sum = 0
        self.zero_conversions = 0
        self.conversions = READ_CONVERSIONS
        self.capture_us = 0
        self.opened_us = 0
        self.capturing = False
        self.conversions_lost = False
        self.pairs_written = 0


class EndRule:
    """When is the sweep complete: the current is gone and the voltage stands.

    Current below 0.2 % of this sweep's peak (a quarter of a code at the least), and voltage
    within 0.1 % of the source's open voltage or no longer rising, for END_SLICES slices in a
    row. Never the slope of the voltage alone: a nearly dark substring crawls. What the permanent
    bleeder draws through the shunt does not count: in low light it is what current there is.
    """

    def __init__(self, leak_ratio=0, leak_shift=0):
        self.leak_ratio = leak_ratio
        self.leak_shift = leak_shift
        self.begin(0, 0, 0)

    def begin(self, zero_x16, open_x16, voltage_zero_x16, finer=1):
        """Forget the last sweep. The codes, in sixteenths: current zero, open voltage, its zero.

        `finer`: codes that make one of 12 bits.
        """
        self.zero_x16 = zero_x16
        self.finer = finer
        self.voltage_zero_x16 = voltage_zero_x16
        self.near_open_x16 = open_x16 - max((open_x16 - voltage_zero_x16) // 1000, 8 * finer)
        self.peak_x16 = 0
        self.quiet_slices = 0
        self.high_x16 = 0

    def complete(self, voltage_x16, current_x16):
        volts = max(voltage_x16 - self.voltage_zero_x16, 0) >> 4
        leak_x16 = volts * self.leak_ratio >> max(self.leak_shift - 4, 0)
        current = current_x16 - self.zero_x16 - leak_x16
        if current > self.peak_x16:
            self.peak_x16 = current
        rising = voltage_x16 > self.high_x16 + 2 * self.finer
        if voltage_x16 > self.high_x16:
            self.high_x16 = voltage_x16
        gone = current < 4 * self.finer or current * 500 < self.peak_x16
        if gone and (voltage_x16 >= self.near_open_x16 or not rising):
            self.quiet_slices += 1
        else:
            self.quiet_slices = 0
        return self.quiet_slices >= END_SLICES


class Charge:
    """The procedure; one object serves all charges of a board."""

    def __init__(self, hal, profile, capture, ear):
        self.hal = hal
        self.profile = profile
        self.capture = capture
        self.ear = ear
        self.rule = EndRule(*profile.leak())
        self.raw = None
        self.raw_from_us = 0
        self.meanwhile = None

    def run(self, closed_limit_ms, outputs, raw=None, raw_from_us=0, meanwhile=None):
        """Close, capture, open. `outputs` (the sequencer) is told what is commanded.

        `raw`: buffer for pairs kept one by one from `raw_from_us` after conduction on, or None.
        `meanwhile`: has work to do while the relay lets go, current being gone: `begin(result)`,
        then `step()` until it is True; or None.

        Ctrl-C ends the charge as an abort would; what was measured is kept.
        """
        hal = self.hal
        result = Result()
        profile = self.profile
        voltage_trip = profile.trip_code("voltage", profile["rated_mv"])
        current_trip = profile.trip_code("current", profile["rated_ma"])
        self.capture.begin(0)
        self.raw = raw
        self.raw_from_us = raw_from_us
        self.meanwhile = meanwhile
        try:
            hal.quiet_begin()
            self._before(result)
            self._prepare(outputs)
            self.ear.listen_out()
            result.end_reason = self._capture(result, closed_limit_ms, voltage_trip, current_trip)
        except KeyboardInterrupt:
            result.end_reason = INTERRUPTED
        finally:
            self._end(result, outputs)
        result.capture_us = hal.capture_began_us()
        result.opened_us = hal.now_us()
        return result

    def _end(self, result, outputs):
        """Whatever happened before, and whatever happens here: contact open, bleed engaged."""
        hal = self.hal
        try:
            hal.pulse(0)
            hal.zero_input(False)
            result.conversions_lost = hal.capture_stop()
            if result.capturing:
                result.pairs_written = hal.capture_written()
            hal.supervise_end()
            self._open(outputs, result)
        except BaseException:
            outputs.make_safe()
            raise
        finally:
            hal.quiet_end()

    def _before(self, result):
        hal = self.hal
        if self.profile["zero_switch"]:
            hal.zero_input(True)
            hal.wait_us(ZERO_SETTLE_US)
            result.voltage_zero_sum = hal.read(board.VOLTAGE, READ_CONVERSIONS)
            result.zero_conversions = READ_CONVERSIONS
            hal.zero_input(False)
            hal.wait_us(ZERO_SETTLE_US)
        result.voltage_sum = hal.read(board.VOLTAGE, READ_CONVERSIONS)
        result.current_sum = hal.read(board.CURRENT, READ_CONVERSIONS)

    def _prepare(self, outputs):
        """Release the bleed, and close the relay dry, with the make-and-break output still off."""
        hal = self.hal
        profile = self.profile
        hal.bleed(False)
        outputs.bleed_engaged = False
        hal.wait_us(1000 * (profile["bleed_operate_ms"] + profile["dead_time_ms"]))
        hal.relay(True)
        outputs.contact_closed = True
        hal.wait_us(1000 * 2 * profile["relay_operate_ms"])

    def _open(self, outputs, result):
        """The current is already broken by the pulse's end; the relay opens dry."""
        hal = self.hal
        profile = self.profile
        hal.wait_us(1000)
        hal.relay(False)
        outputs.contact_closed = False
        self._let_pass(1000 * (profile["relay_release_ms"] + profile["dead_time_ms"]), result)
        hal.bleed(True)
        outputs.bleed_engaged = True

    def _let_pass(self, us, result):
        """Wait, and do what there is to do; a step that takes longer makes the wait longer."""
        hal = self.hal
        began = hal.ticks_us()
        if self.meanwhile is not None:
            self.meanwhile.begin(result)
            while (hal.ticks_us() - began) & 0x3FFFFFFF < us - STEP_US:
                if self.meanwhile.step():
                    break
        passed = (hal.ticks_us() - began) & 0x3FFFFFFF
        if passed < us:
            hal.wait_us(us - passed)

    def _capture(self, result, closed_limit_ms, voltage_trip, current_trip):
        hal = self.hal
        profile = self.profile
        capture = self.capture
        zero_x16 = result.current_sum // (READ_CONVERSIONS // 16)
        open_x16 = result.voltage_sum // (READ_CONVERSIONS // 16)
        finer = profile.finer
        rule = self.rule
        rule.begin(zero_x16, open_x16, profile["voltage_zero_x16"], finer)
        pulse_us = profile["pulse_us"]
        pairs_a_ms = 1000 // hal.PAIR_US
        capture.begin(
            zero_x16 // 16 + CONDUCTING_CODES * finer,
            profile["bounce_ms"] * pairs_a_ms,
            self.raw,
            self.raw_from_us // hal.PAIR_US,
        )
        limit = pairs_a_ms * min(closed_limit_ms, profile["closed_limit_ms"])
        lost = pairs_a_ms * profile["heartbeat_lost_ms"]
        dark = pairs_a_ms * DARK_MS
        unticked = pairs_a_ms * FIRST_MS
        lapsed = (pulse_us - PULSE_MARGIN_US) // hal.PAIR_US

        result.capturing = True
        hal.capture_start()
        hal.supervise(voltage_trip, current_trip)
        self.ear.listen()
        if self.ear.aborted:
            return ABORTED
        renewed = hal.capture_written()
        hal.pulse(pulse_us)
        heard = 0
        listened = 0
        ticks = 0
        ticked = 0
        written = 0
        while True:
            # What a merge has left waiting is folded first; waiting can wait.
            waited = capture.behind() < SLICE_PAIRS
            if waited:
                hal.wait_us(SLICE_US)
            arrived = hal.capture_written()
            capture.drain(arrived)
            trips = hal.trips()
            if trips:
                return trip_reason(trips)
            # A flood of bytes must not hold up a reader that is behind already.
            if waited or arrived - listened >= LISTEN_PAIRS:
                listened = arrived
                if self.ear.listen():
                    heard = arrived
            if self.ear.aborted:
                return ABORTED
            if capture.overruns:
                return RING_OVERRUN
            if waited and arrived == written:
                return SUPERVISION_LOST
            written = arrived
            visits = hal.supervision_ticks()
            if visits != ticks:
                ticks = visits
                ticked = arrived
            elif arrived - ticked > unticked:
                return SUPERVISION_LOST
            if arrived >= limit or capture.full:
                return TIME_LIMIT
            if not capture.conducts():
                if arrived >= dark:
                    return NO_CURRENT
            elif capture.recent_means():
                if rule.complete(capture.voltage_x16, capture.current_x16):
                    return COMPLETE
            if arrived - heard >= lost:
                return HOST_LOST
            hal.watchdog(2000)
            late = hal.capture_written()
            if late - renewed >= lapsed:
                return SUPERVISION_LOST
            renewed = late
            hal.pulse(pulse_us)


def trip_reason(trips):
    if trips & board.TRIP_STOP_LOOP:
        return STOP_LOOP
    if trips & board.TRIP_OVER_VOLTAGE:
        return OVER_VOLTAGE
    return OVER_CURRENT
