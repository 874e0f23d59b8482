"""The states of the tracer and the only ways between them.

    safe      contact open, bleed engaged, capacitor empty enough to start
    armed     as safe; a token waits for its fire
    charging  bleed released, contact closing, closed or opening
    bleeding  contact open, bleed engaged, capacitor falling
    fault     as bleeding, latched until it is cleared; with a welded contact the bleed is let go
              once it has taken up its allowance of heat

Comes in: events, and time through `tick`. Goes out: commands to the board. What a request
looks like on the wire is `service.py`'s business; the charge itself is `charge.py`'s.
"""

from micropython import const

from tracer import hal as board
from tracer import interlocks
from tracer.bleeding import Bleed
from tracer.heat import Heat

SAFE = const(0)
ARMED = const(1)
CHARGING = const(2)
BLEEDING = const(3)
FAULT = const(4)

EV_ARM = const(0)
EV_DISARM = const(1)
EV_FIRE = const(2)
EV_OPENED = const(3)
EV_CHARGED = const(4)
EV_BLED = const(5)
EV_FAULT = const(6)
EV_CLEAR = const(7)
EV_RESUME = const(8)

# What a transition does besides.
DO_NOTHING = const(0)
DO_BLEED = const(1)  # outputs to their safe levels, and watch the capacitor fall from now on
DO_SAFE = const(2)  # outputs to their safe levels; a bleed that is watched goes on being watched
DO_KEEP = const(3)  # write the logbook

# (state, event): (next state, what is done). There is no other way between states.
TABLE = {
    (SAFE, EV_ARM): (ARMED, DO_NOTHING),
    (SAFE, EV_CHARGED): (BLEEDING, DO_BLEED),
    (SAFE, EV_FAULT): (FAULT, DO_BLEED),
    (SAFE, EV_RESUME): (BLEEDING, DO_BLEED),
    (ARMED, EV_DISARM): (SAFE, DO_NOTHING),
    (ARMED, EV_FIRE): (CHARGING, DO_NOTHING),
    (ARMED, EV_FAULT): (FAULT, DO_BLEED),
    (ARMED, EV_RESUME): (BLEEDING, DO_BLEED),
    (CHARGING, EV_OPENED): (BLEEDING, DO_BLEED),
    (CHARGING, EV_FAULT): (FAULT, DO_BLEED),
    (CHARGING, EV_RESUME): (BLEEDING, DO_BLEED),
    (BLEEDING, EV_BLED): (SAFE, DO_KEEP),
    (BLEEDING, EV_FAULT): (FAULT, DO_SAFE),
    (BLEEDING, EV_RESUME): (BLEEDING, DO_BLEED),
    (FAULT, EV_FAULT): (FAULT, DO_SAFE),
    (FAULT, EV_CLEAR): (BLEEDING, DO_BLEED),
    (FAULT, EV_RESUME): (FAULT, DO_BLEED),
}

CONVERSIONS = const(64)  # averaged in each reading
LOOK_MS = const(100)  # between looks at the capacitor while safe; ten times as often bleeding
WATCHDOG_MS = const(2000)
ZERO_SETTLE_US = const(2000)  # of the voltage channel, to its zero and back
WELDED = const(2)  # hazards
STOPPED = const(12)
NO_FINDING = (0, 0, 0, 0)


class Sequencer:
    """Holds the state and keeps the board in what the state means."""

    def __init__(self, hal, profile, logbook):
        self.hal = hal
        self.profile = profile
        self.logbook = logbook
        self.state = SAFE
        self.finding = NO_FINDING
        self.contact_closed = False
        self.bleed_engaged = True
        self.token = 0
        self.armed_until_us = 0
        self.residual = (0, 0)
        self.heat = None
        self.watch = None
        self._live_mv = 0  # when the bleed was let go across a live source
        self._looked_us = 0
        # Nothing is known of the capacitor yet, so the first state is bleeding; without a profile
        # it cannot be measured, and nothing can be armed either.
        self.make_safe()
        if profile is not None:
            self.heat = Heat(profile, hal.now_us())
            self.watch = Bleed(profile)
            self.state = BLEEDING
            self._start_bleed()

    def event(self, event):
        """Take the transition of `event`; ValueError where the table has none."""
        key = (self.state, event)
        if key not in TABLE:
            raise ValueError("no transition", key)
        self.state, action = TABLE[key]
        if self.state != ARMED:
            self.token = 0
        if action == DO_BLEED:
            self._start_bleed()
        elif action == DO_SAFE:
            self.make_safe()
        elif action == DO_KEEP:
            self.logbook.keep()
        # On from arming until safe and bled; only then may the board stand still.
        self.hal.watchdog(0 if self.state == SAFE else WATCHDOG_MS)

    def resume(self):
        """Begin, or begin again after the prompt, where nothing was watched over."""
        self.make_safe()
        if self.profile is not None:
            self.event(EV_RESUME)
            if self.finding[0] == WELDED:
                self.heat.fill()
                self._release_bleed()

    # -- outputs; contact and bleed exclude each other (H3) ------------------------------

    def make_safe(self):
        """Contact open, bleed engaged, and the voltage measured at the source."""
        self.hal.safe()
        self.contact_closed = False
        self.bleed_engaged = True
        self.hal.zero_input(False)

    def close_contact(self):
        """Note that the contact is about to close; ValueError while the bleed is engaged."""
        if self.bleed_engaged:
            raise ValueError("contact and bleed")
        self.contact_closed = True

    def open_contact(self):
        self.contact_closed = False

    def engage_bleed(self):
        """ValueError while the contact is closed."""
        if self.contact_closed:
            raise ValueError("contact and bleed")
        self.hal.bleed(True)
        self.bleed_engaged = True

    def release_bleed(self):
        self.hal.bleed(False)
        self.bleed_engaged = False

    # -- arming ----------------------------------------------------------------------

    def readings(self, confirmed=False, limit_mv=interlocks.NO_LIMIT, exercise=0):
        """All three channels and the two switches, now."""
        hal = self.hal
        found = interlocks.Readings(
            self.profile,
            hal.read(board.VOLTAGE, CONVERSIONS),
            hal.read(board.CURRENT, CONVERSIONS),
            hal.read(board.CAPACITOR, CONVERSIONS),
            CONVERSIONS,
        )
        found.stop_loop_closed = hal.stop_loop_closed()
        found.leads_reversed = hal.leads_reversed()
        found.confirmed = confirmed
        found.limit_mv = limit_mv
        found.exercise = exercise
        if self.heat is not None:
            self._count_heat(found.capacitor_mv)
            found.heat_mj = self.heat.mj()
        return found

    def read_zero(self, found):
        """Have the voltage channel's zero among the readings, where the board can show it."""
        if self.profile is not None and self.profile["zero_switch"]:
            hal = self.hal
            hal.zero_input(True)
            hal.wait_us(ZERO_SETTLE_US)
            found.voltage_zero_sum = hal.read(board.VOLTAGE, CONVERSIONS)
            hal.zero_input(False)
            hal.wait_us(ZERO_SETTLE_US)

    def arm(self, token, readings):
        """Finding that speaks against closing, or None: armed."""
        finding = interlocks.first_finding(interlocks.BEFORE_CLOSING, self.profile, readings)
        if finding is None:
            self.event(EV_ARM)
            self.token = token
            self.armed_until_us = self.hal.now_us() + 1000 * self.profile["token_life_ms"]
        return finding

    def disarm(self):
        if self.state == ARMED:
            self.event(EV_DISARM)

    # -- faults ----------------------------------------------------------------------

    def fault(self, finding):
        """Latch a finding. The bleed stays engaged; see `_spare_bleed` for a welded contact."""
        self.finding = finding
        self.event(EV_FAULT)
        self._spare_bleed()

    def clear(self):
        """Leave a fault, through bleeding, which looks anew at what is wrong.

        Returns the finding that speaks against it, or None: a bleed must not be put across a live
        source again before half of its allowance is there, and a lid must be closed first.
        """
        if self.finding[0] == STOPPED and not self.hal.stop_loop_closed():
            return self.finding
        if self.finding[0] == WELDED and self.profile is not None:
            self._count_heat(self._capacitor_mv())
            half_mj = self.profile["bleed_mj"] // 2
            if self.heat.mj() > half_mj:
                return 10, self.heat.mj(), half_mj, interlocks.UNIT_MJ
        self.finding = NO_FINDING
        self.event(EV_CLEAR)
        return None

    def _spare_bleed(self):
        """A bleed across a live source burns: it is let go once it has taken up its allowance, and
        engaged again when the capacitor shows that the source is gone.
        """
        if self.finding[0] != WELDED:
            return
        now_mv = self._capacitor_mv()
        if self.bleed_engaged:
            if self.heat.spent(now_mv, LOOK_MS):
                self._live_mv = now_mv
                self._release_bleed()
        elif 4 * now_mv < 3 * self._live_mv and not self.heat.rest_ms(
            self.profile.stored_mj(now_mv)
        ):
            self.engage_bleed()
            self.heat.begin(self.hal.now_us(), now_mv)

    def _release_bleed(self):
        self.release_bleed()
        self._live_mv = self._live_mv or self._capacitor_mv()

    def _count_heat(self, capacitor_mv):
        self.heat.look(self.hal.now_us(), capacitor_mv, self.bleed_engaged)

    def rest_ms(self, source_mv):
        """Time until the bleed resistor has room for a sweep of this source."""
        return self.heat.rest_ms(self.profile.stored_mj(max(source_mv, 0)))

    # -- time ------------------------------------------------------------------------

    def tick(self):
        """What time alone brings: token expiry, the end of bleeding, a capacitor found charged."""
        if self.profile is None:
            return
        now = self.hal.now_us()
        self.feed()
        if self.state == ARMED:
            if now >= self.armed_until_us:
                self.disarm()
        elif self.state == BLEEDING:
            self._look_at_bleed(now)
        elif self.state == FAULT and now - self._looked_us >= 1000 * LOOK_MS:
            self._looked_us = now
            self._look_at_bleed(now)
            self._spare_bleed()
        elif self.state == SAFE and now - self._looked_us >= 1000 * LOOK_MS:
            self._looked_us = now
            capacitor_mv = self._capacitor_mv()
            self._count_heat(capacitor_mv)
            if capacitor_mv > 2 * self._limit_mv():
                self.event(EV_CHARGED)

    def feed(self):
        """Tell the watchdog, where it is on, that the firmware goes on."""
        if self.state != SAFE:
            self.hal.watchdog(WATCHDOG_MS)

    def pause(self):
        """Wait for the host as long as the next tick allows."""
        if self.state == BLEEDING:
            self.hal.bleed_wait(LOOK_MS // 10)
        else:
            self.hal.link_wait(LOOK_MS // 10)

    def _capacitor_mv(self):
        code_sum = self.hal.read(board.CAPACITOR, CONVERSIONS)
        self.residual = (code_sum, CONVERSIONS)
        return self.profile.millivolts("capacitor", code_sum, CONVERSIONS)

    def _source_mv(self):
        source = self.hal.read(board.VOLTAGE, CONVERSIONS)
        return self.profile.millivolts("voltage", source, CONVERSIONS)

    def _current_off(self):
        """Codes of 12 bits that the current channel stands above its zero."""
        profile = self.profile
        code_sum = self.hal.read(board.CURRENT, CONVERSIONS)
        return (code_sum // CONVERSIONS - profile["current_zero_x16"] // 16) // profile.finer

    def _limit_mv(self):
        limit_mv = interlocks.start_limit_mv(self.profile, self._source_mv())
        return min(limit_mv, self.profile["safe_mv"])

    def _start_bleed(self):
        self.make_safe()
        self._live_mv = 0
        self.residual = (0, 0)
        if self.profile is not None:
            from_mv = self._capacitor_mv()
            now_us = self.hal.now_us()
            self.heat.begin(now_us, from_mv)
            self.watch.begin(now_us, from_mv)

    def settle_bleed(self):
        """Wait until the bleed's contact has closed, and look: from here on the fall is timed."""
        now_us = self.hal.now_us()
        if self.watch.settled_us > now_us:
            self.hal.wait_us(self.watch.settled_us - now_us)
        self._look_at_bleed(self.hal.now_us())

    def _look_at_bleed(self, now):
        # An eighth below the limit that arming will ask for, so that noise does not refuse it.
        source_mv = self._source_mv()
        limit_mv = min(interlocks.start_limit_mv(self.profile, source_mv), self.profile["safe_mv"])
        capacitor_mv = self._capacitor_mv()
        code = self.residual[0] // CONVERSIONS
        finding = None
        if code >= interlocks.RAIL_CODES:
            # It may be any voltage; nothing is booked or let go for it.
            finding = 11, code, interlocks.RAIL_CODES, interlocks.UNIT_CODES
        else:
            self._count_heat(capacitor_mv)
        if self.bleed_engaged and finding is None:
            finding = self.watch.look(now, capacitor_mv, source_mv, self._current_off(), limit_mv)
        if finding is None:
            if capacitor_mv <= limit_mv * 7 // 8 and self.state == BLEEDING:
                self.event(EV_BLED)
            return
        # A contact may weld in the charge that ended in another fault.
        if self.finding[0] not in (WELDED, finding[0]):
            self.fault(finding)
