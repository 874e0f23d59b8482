"""The states of the tracer and the only ways between them.

    safe      contact open, bleed engaged, capacitor empty enough to start
    armed     as safe; a token waits for its fire
    charging  bleed released, contact closing, closed or opening
    bleeding  contact open, bleed engaged, capacitor falling
    fault     as bleeding, latched until it is cleared; bleed released where the contact welded

Comes in: events, and time through `tick`. Goes out: commands to the board. What a request
looks like on the wire is `service.py`'s business; the charge itself is `charge.py`'s.
"""

from micropython import const

from tracer import hal as board
from tracer import interlocks

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

TRANSITIONS = {
    (SAFE, EV_ARM): ARMED,
    (SAFE, EV_CHARGED): BLEEDING,
    (SAFE, EV_FAULT): FAULT,
    (ARMED, EV_DISARM): SAFE,
    (ARMED, EV_FIRE): CHARGING,
    (ARMED, EV_FAULT): FAULT,
    (CHARGING, EV_OPENED): BLEEDING,
    (CHARGING, EV_FAULT): FAULT,
    (BLEEDING, EV_BLED): SAFE,
    (BLEEDING, EV_FAULT): FAULT,
    (FAULT, EV_FAULT): FAULT,
    (FAULT, EV_CLEAR): BLEEDING,
    (SAFE, EV_RESUME): BLEEDING,
    (ARMED, EV_RESUME): BLEEDING,
    (CHARGING, EV_RESUME): BLEEDING,
    (BLEEDING, EV_RESUME): BLEEDING,
    (FAULT, EV_RESUME): FAULT,
}

CONVERSIONS = const(64)  # averaged in each reading
LOOK_MS = const(100)  # between looks at the capacitor while safe; ten times as often bleeding
WATCHDOG_MS = const(2000)
WELDED = const(2)  # the hazard
NO_FINDING = (0, 0, 0, 0)


class Sequencer:
    """Holds the state and keeps the board in what the state means."""

    def __init__(self, hal, profile):
        self.hal = hal
        self.profile = profile
        self.state = SAFE
        self.finding = NO_FINDING
        self.contact_closed = False
        self.bleed_engaged = True
        self.token = 0
        self.armed_until_us = 0
        self.residual = (0, 0)
        self._bleed_from_mv = 0
        self._bleed_start_us = 0
        self._looked_us = 0
        # Nothing is known of the capacitor yet, so the first state is bleeding; without a profile
        # it cannot be measured, and nothing can be armed either.
        self.make_safe()
        if profile is not None:
            self.state = BLEEDING
            self._start_bleed()

    def event(self, event):
        """Take the transition of `event`; ValueError where the table has none."""
        key = (self.state, event)
        if key not in TRANSITIONS:
            raise ValueError("no transition", key)
        self.state = TRANSITIONS[key]
        if self.state != ARMED:
            self.token = 0
        if self.state == BLEEDING:
            self._start_bleed()
        # On from arming until safe and bled; only then may the board stand still.
        self.hal.watchdog(0 if self.state == SAFE else WATCHDOG_MS)

    def resume(self):
        """Begin, or begin again after the prompt, where nothing was watched over."""
        self.make_safe()
        if self.profile is None:
            return
        self.event(EV_RESUME)
        if self.finding[0] == WELDED:
            self._release_bleed()

    def make_safe(self):
        """Contact open, bleed engaged, and the voltage measured at the source."""
        self.hal.safe()
        self.contact_closed = False
        self.bleed_engaged = True
        self.hal.zero_input(False)

    def readings(self, confirmed=False):
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
        return found

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

    def fault(self, finding):
        """Latch a finding. The bleed stays engaged, except where the contact has welded."""
        begins = self.state not in (BLEEDING, FAULT)
        self.finding = finding
        self.event(EV_FAULT)
        self.make_safe()
        if finding[0] == WELDED:
            self._release_bleed()
        elif begins:
            self._start_bleed()

    def _release_bleed(self):
        # A bleed across a live source would burn.
        self.hal.bleed(False)
        self.bleed_engaged = False

    def clear(self):
        """Leave a fault, through bleeding, which looks anew at what is wrong."""
        self.finding = NO_FINDING
        self.make_safe()
        self.event(EV_CLEAR)

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
        elif self.state == SAFE and now - self._looked_us >= 1000 * LOOK_MS:
            self._looked_us = now
            if self._capacitor_mv() > 2 * self._limit_mv():
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

    def _limit_mv(self):
        source = self.hal.read(board.VOLTAGE, CONVERSIONS)
        source_mv = self.profile.millivolts("voltage", source, CONVERSIONS)
        return min(interlocks.start_limit_mv(self.profile, source_mv), self.profile["safe_mv"])

    def _start_bleed(self):
        self.make_safe()
        self.residual = (0, 0)
        self._bleed_from_mv = self._capacitor_mv() if self.profile is not None else 0
        self._bleed_start_us = self.hal.now_us()

    def _look_at_bleed(self, now):
        # An eighth below the limit that arming will ask for, so that noise does not refuse it.
        limit_mv = self._limit_mv()
        capacitor_mv = self._capacitor_mv()
        if capacitor_mv <= limit_mv * 7 // 8:
            if self.state == BLEEDING:
                self.event(EV_BLED)
            return
        finding = interlocks.bleed_progress(
            self.profile,
            self._bleed_from_mv,
            capacitor_mv,
            (now - self._bleed_start_us) // 1000,
            limit_mv,
        )
        # A contact may weld in the charge that ended in another fault.
        if finding is not None and self.finding[0] not in (WELDED, finding[0]):
            self.fault(finding)
