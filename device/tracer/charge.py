"""One charge: from the readings just before closing to the contact open again.

Runs to its end in one call, inside the board's quiet: nothing is sent, nothing collected.
Between slices it listens for abort alone. With a switch the make-and-break output is a bounded
pulse that each slice earns anew: only when both the supervision tick and the ring have moved on,
and only while it still runs: a contact that has opened by itself is not closed again. A bare
relay is given one pulse and left to its charge; `contact.py` says why.

In the quiet nothing is allocated. So time is counted in pairs, by the ring: a time in
microseconds since boot needs an object of its own from 18 minutes on.
"""

from micropython import const

from kneewire.guards import ZERO_CODES
from tracer import hal as board
from tracer import interlocks
from tracer.contact import READ_CONVERSIONS as FEW_CONVERSIONS
from tracer.contact import Contact
from tracer.ending import EndRule
from tracer.sequencer import ZERO_SETTLE_US

SLICE_US = const(500)
SLICE_PAIRS = const(125)
LISTEN_PAIRS = const(2500)  # 10 ms: an abort is heard by then at the latest
READ_CONVERSIONS = const(2048)  # so that noise of a zero is far below that of a knot
DARK_MS = const(100)  # without conduction for so long, the source is dark
FIRST_MS = const(2)  # before the first supervision tick can be asked for
PULSE_MARGIN_US = const(100)  # more than the wave's last period and the call itself
CONDUCTING_CODES = const(8)  # of 12 bits, above the current zero: more than noise ever reaches
STEP_US = const(2000)  # of a step of the work done meanwhile, with few knots
HANG_PAIRS = const(500)  # an exercise: closed for so long before it hangs
SHORTED_CODES = const(32)  # that a capacitor may rise by before anything has closed
RENEWALS = const(2)
PREDICT_PAIRS = const(250)  # conducting for so long, the current of a charge is known

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
NOT_EMPTY = const(12)
SENSOR = const(13)
SHORTED = const(14)


class Result:
    """What a charge leaves behind, the bins apart."""

    def __init__(self):
        self.end_reason = 0
        self.finding = None  # what is to be latched for it
        self.voltage_sum = 0
        self.current_sum = 0
        self.voltage_zero_sum = 0
        self.zero_conversions = 0
        self.conversions = READ_CONVERSIONS
        self.capacitor_before_sum = 0
        self.capacitor_full_sum = 0
        self.capacitor_conversions = 0
        self.capture_us = 0
        self.opened_us = 0
        self.capturing = False
        self.conducted = False
        self.conversions_lost = False
        self.pairs_written = 0
        self.trip_code = 0
        self.opening_x16 = 0
        self.hot = False


class Settings:
    """What an arming asked for; limits that are above the ratings are none."""

    def __init__(self, closed_limit_ms, raw=None, raw_from_us=0):
        self.closed_limit_ms = closed_limit_ms
        self.raw = raw  # buffer for pairs kept one by one, or None
        self.raw_from_us = raw_from_us  # after conduction began
        self.limit_mv = interlocks.NO_LIMIT
        self.limit_ma = interlocks.NO_LIMIT
        self.exercise = interlocks.SWEEP


class Charge:
    """The procedure; one object serves all charges of a board."""

    def __init__(self, hal, profile, capture, ear):
        self.hal = hal
        self.profile = profile
        self.capture = capture
        self.ear = ear
        self.contact = Contact(hal, profile)
        self.rule = EndRule(*profile.leak())
        self.settings = None
        self.meanwhile = None
        self._near_zero = 0  # codes above the current zero; an opening below is cold
        self._empty_sum = 0
        self._trips = (0, 0)
        # Of a bare relay: its pulse, when that began, and how often it may come again.
        self._most_us = 0
        self._pulsed = 0
        self._renewals = 0
        # Means of the newest pairs, when they were looked at last and before; one is a visit old.
        self._current_x16 = 0
        self._older_x16 = 0
        self._oldest_x16 = 0

    def run(self, settings, outputs, meanwhile=None):
        """Close, capture, open. `outputs` (the sequencer) is told what is commanded.

        `meanwhile`: has work to do while the relay lets go, current being gone: `begin(result)`,
        then `step()` until it is True; or None.

        Ctrl-C ends the charge as an abort would; what was measured is kept.
        """
        hal = self.hal
        result = Result()
        self._get_ready(settings)
        self.meanwhile = meanwhile
        try:
            hal.quiet_begin()
            result.end_reason = self._before(result) or self._prepare(outputs)
            if not result.end_reason:
                self.ear.listen_out()
                result.end_reason = self._capture(result)
                self._run_out(result)
        except KeyboardInterrupt:
            result.end_reason = INTERRUPTED
        finally:
            self._end(result, outputs)
        result.capture_us = hal.capture_began_us()
        result.opened_us = hal.now_us()
        result.finding = self._finding(result)
        return result

    def _get_ready(self, settings):
        """Limits in codes, while numbers may still be large."""
        profile = self.profile
        self.settings = settings
        self.capture.begin(0)
        self._current_x16 = self._older_x16 = self._oldest_x16 = 0
        self._near_zero = profile.near_zero_codes()
        self._trips = (
            profile.trip_code("voltage", self._rated_mv()),
            profile.trip_code("current", self._rated_ma()),
        )
        source = self.hal.read(board.VOLTAGE, FEW_CONVERSIONS)
        source_mv = profile.millivolts("voltage", source, FEW_CONVERSIONS)
        limit_mv = interlocks.start_limit_mv(profile, source_mv)
        self._empty_sum = FEW_CONVERSIONS * profile.code("capacitor", limit_mv)

    def _rated_mv(self):
        return min(self.profile["rated_mv"], self.settings.limit_mv)

    def _rated_ma(self):
        return min(self.profile["rated_ma"], self.settings.limit_ma)

    def _before(self, result):
        """The zeros and the open voltage; an end reason where they are not as they were."""
        hal = self.hal
        profile = self.profile
        if profile["zero_switch"]:
            hal.zero_input(True)
            hal.wait_us(ZERO_SETTLE_US)
            result.voltage_zero_sum = hal.read(board.VOLTAGE, READ_CONVERSIONS)
            result.zero_conversions = READ_CONVERSIONS
            hal.zero_input(False)
            hal.wait_us(ZERO_SETTLE_US)
        result.voltage_sum = hal.read(board.VOLTAGE, READ_CONVERSIONS)
        result.current_sum = hal.read(board.CURRENT, READ_CONVERSIONS)
        result.capacitor_before_sum = hal.read(board.CAPACITOR, FEW_CONVERSIONS)
        off = result.current_sum // READ_CONVERSIONS - profile["current_zero_x16"] // 16
        if abs(off) > ZERO_CODES * profile.finer:
            return SENSOR
        # What has crept back into the capacitor since the arming.
        if result.capacitor_before_sum > self._empty_sum:
            return NOT_EMPTY
        return 0

    def _prepare(self, outputs):
        near_zero = self._near_zero + self.profile["current_zero_x16"] // 16
        ready = self.contact.prepare(
            outputs,
            self.settings.exercise != interlocks.RELAY_OPEN,
            self._empty_sum + FEW_CONVERSIONS * SHORTED_CODES,
            FEW_CONVERSIONS * near_zero,
        )
        return 0 if ready else SHORTED

    def _end(self, result, outputs):
        """Whatever happened before, and whatever happens here: contact open, bleed engaged."""
        hal = self.hal
        try:
            if result.end_reason == INTERRUPTED:
                self._run_out(result)
            hal.pulse(0)
            hal.zero_input(False)
            result.conversions_lost = hal.capture_stop()
            if result.capturing:
                result.pairs_written = hal.capture_written()
                self._note_opening(result, outputs)
            hal.supervise_end()
            if outputs.contact_closed:
                self._open(outputs, result)
            else:
                outputs.make_safe()
                if self.meanwhile is not None:
                    self.meanwhile.begin(result)
        except BaseException:
            outputs.make_safe()
            raise
        finally:
            hal.quiet_end()

    def _note_opening(self, result, outputs):
        capture = self.capture
        result.conducted = capture.conducts()
        capture.recent_means()
        result.opening_x16 = capture.current_x16
        if result.end_reason != COMPLETE and self.contact.may_break:
            # What is newest may have come after the current was broken.
            result.opening_x16 = max(
                result.opening_x16, self._current_x16, self._older_x16, self._oldest_x16
            )
            if result.end_reason == OVER_CURRENT:
                result.opening_x16 = max(result.opening_x16, 16 * result.trip_code)
        above = result.opening_x16 - self.rule.zero_x16
        if result.conducted and above > 16 * self._near_zero:
            result.hot = True
            outputs.logbook.opened_hot()

    def _open(self, outputs, result):
        hal = self.hal
        self.contact.open()
        self._let_pass(self.contact.release_us(), result)
        outputs.open_contact()
        result.capacitor_full_sum = hal.read(board.CAPACITOR, FEW_CONVERSIONS)
        result.capacitor_conversions = FEW_CONVERSIONS
        outputs.engage_bleed()

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

    def _capture(self, result):
        hal = self.hal
        profile = self.profile
        capture = self.capture
        contact = self.contact
        settings = self.settings
        zero_x16 = result.current_sum // (READ_CONVERSIONS // 16)
        open_x16 = result.voltage_sum // (READ_CONVERSIONS // 16)
        finer = profile.finer
        rule = self.rule
        rule.begin(zero_x16, open_x16, profile["voltage_zero_x16"], finer)
        closed_limit_ms = min(settings.closed_limit_ms, profile.closed_limit_ms())
        self._most_us = 1000 * closed_limit_ms
        pulse_us = contact.pulse_us(closed_limit_ms)
        pairs_a_ms = 1000 // hal.PAIR_US
        capture.begin(
            zero_x16 // 16 + CONDUCTING_CODES * finer,
            profile["bounce_ms"] * pairs_a_ms,
            settings.raw,
            settings.raw_from_us // hal.PAIR_US,
        )
        limit = pairs_a_ms * closed_limit_ms
        lost = pairs_a_ms * profile["heartbeat_lost_ms"]
        dark = pairs_a_ms * DARK_MS
        unticked = pairs_a_ms * FIRST_MS
        lapsed = (pulse_us - PULSE_MARGIN_US) // hal.PAIR_US
        hang = settings.exercise == interlocks.HANG
        predicted = not contact.bare

        result.capturing = True
        hal.capture_start()
        hal.supervise(self._trips[0], self._trips[1], contact.may_break)
        self.ear.listen()
        if self.ear.aborted:
            return ABORTED
        renewed = hal.capture_written()
        self._pulse(pulse_us)
        self._renewals = 0
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
                result.trip_code = hal.trip_code()
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
            elif settings.exercise == interlocks.RELAY_OPEN:
                return SHORTED
            elif capture.recent_means():
                self._oldest_x16 = self._older_x16
                self._older_x16 = self._current_x16
                self._current_x16 = capture.current_x16
                if rule.complete(capture.voltage_x16, capture.current_x16):
                    return COMPLETE
                if not predicted and capture.pairs() >= PREDICT_PAIRS:
                    predicted = True
                    self._most_us = contact.predicted_us(
                        open_x16 - rule.voltage_zero_x16,
                        rule.peak_x16,
                        capture.pairs() * hal.PAIR_US,
                        self._most_us,
                    )
                    self._pulse(self._most_us)
                    self._renewals = RENEWALS
            if arrived - heard >= lost:
                return HOST_LOST
            if hang and arrived >= HANG_PAIRS:
                hal.hang()
            hal.watchdog(contact.watchdog_ms)
            if contact.bare:
                self._hold()
                continue
            late = hal.capture_written()
            if late - renewed >= lapsed:
                return SUPERVISION_LOST
            renewed = late
            hal.pulse(pulse_us)

    def _pulse(self, us):
        self.hal.pulse(us)
        self._pulsed = self.hal.ticks_us()

    def _since_pulse(self):
        return (self.hal.ticks_us() - self._pulsed) & 0x3FFFFFFF

    def _hold(self):
        """A bare relay's charge takes longer than predicted: a low fill factor, clouds."""
        since = self._since_pulse()
        if self._renewals and since >= self._most_us // 3 * 2:
            self._renewals -= 1
            # One that has let go by itself is not closed again.
            if since < self._most_us - PULSE_MARGIN_US:
                self._pulse(self._most_us)

    def _run_out(self, result):
        """A contact that is not rated to break stays closed until the current is gone, or its last
        pulse has ended.
        """
        contact = self.contact
        if contact.may_break or not result.capturing or result.end_reason in (COMPLETE, NO_CURRENT):
            return
        hal = self.hal
        capture = self.capture
        while self._since_pulse() < self._most_us:
            hal.wait_us(SLICE_US)
            self._hold()
            if not capture.overruns:
                capture.drain(hal.capture_written())
            hal.watchdog(contact.watchdog_ms)
            if capture.conducts() and capture.recent_means():
                if self.rule.complete(capture.voltage_x16, capture.current_x16):
                    break

    def _finding(self, result):
        """What the end of the charge latches, with what was measured; None for nothing."""
        profile = self.profile
        reason = result.end_reason
        if reason == STOP_LOOP:
            return 12, 0, 0, interlocks.UNIT_NONE
        if reason == SUPERVISION_LOST:
            return 7, 0, 0, interlocks.UNIT_NONE
        if reason == OVER_VOLTAGE:
            milli = profile.milli_of("voltage", result.trip_code)
            return 4, milli, self._rated_mv(), interlocks.UNIT_MV
        if reason == OVER_CURRENT:
            milli = profile.milli_of("current", result.trip_code)
            return 6, milli, self._rated_ma(), interlocks.UNIT_MA
        if reason == SENSOR:
            off = result.current_sum // READ_CONVERSIONS - profile["current_zero_x16"] // 16
            return 11, off, ZERO_CODES * profile.finer, interlocks.UNIT_CODES
        if reason == SHORTED:
            full = self.contact.shorted_sum or result.capacitor_full_sum
            full_mv = profile.millivolts("capacitor", full, FEW_CONVERSIONS)
            empty_mv = profile.millivolts("capacitor", self._empty_sum, FEW_CONVERSIONS)
            return 2, full_mv, empty_mv, interlocks.UNIT_MV
        # Under load the capacitor has risen since the newest pairs were looked at.
        if not result.capturing or not result.capacitor_conversions or result.hot:
            return None
        full_mv = profile.millivolts("capacitor", result.capacitor_full_sum, FEW_CONVERSIONS)
        if result.conducted:
            return interlocks.sensors_agree(
                profile, profile.milli_of("voltage", self.capture.voltage_x16 // 16), full_mv
            )
        # No current was seen, and so the capacitor must be as empty as before.
        return interlocks.sensors_agree(profile, 0, full_mv)


def trip_reason(trips):
    if trips & board.TRIP_STOP_LOOP:
        return STOP_LOOP
    if trips & board.TRIP_OVER_VOLTAGE:
        return OVER_VOLTAGE
    return OVER_CURRENT
