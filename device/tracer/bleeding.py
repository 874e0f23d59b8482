"""Watching one bleed: does the capacitor fall as its R and C say, and if not, why not?

Comes in: the capacitor's voltage, the source's, and the current channel, every 10 ms. Goes out: a
finding that tells apart

    H1   the bleed is open, or too slow: hardly any fall, but as the permanent bleeder lets it
    H2   the source feeds the capacitor: current with the contact commanded open, or no fall at all
    H10  the bleed is shorted: a fall far faster than its resistance allows
    H11  a channel is stuck: no fall at all, far from the source's voltage and without current; or
         current, and a fall all the same

and the time constant. What follows from a finding is `sequencer.py`'s business.
"""

from micropython import const

from kneewire import guards
from tracer.interlocks import UNIT_CODES, UNIT_MOHM, UNIT_MV
from tracer.profile import ln_x1000

SETTLE_MS = const(2)  # after the slowest bleed contact has closed
LEAST_CODES = const(32)  # of the capacitor's channel: below it, no time constant is taken
SEEN_CODES = const(6)  # a fall of so many is more than noise
RISE_CODES = const(8)
MIN_ALLOWED_MS = const(100)


class Bleed:
    """`begin` when the bleed is commanded on, then `look` until the capacitor is empty.

    Times in us since boot, voltages in mV.
    """

    def __init__(self, profile):
        self.profile = profile
        self.code_uv = profile["capacitor_nv_per_code"] // 1000
        self.tau_us = 0
        self.capacitance_nf = 0  # as the sweep before has shown it; 0 where it is not known
        self.settled_us = 0
        self._from_mv = 0
        self._engaged_us = 0
        self._engaged_mv = -1
        self._live = 0

    def begin(self, now_us, from_mv):
        self.tau_us = 0
        self.capacitance_nf = 0
        self.settled_us = now_us + 1000 * (self.profile["bleed_release_ms"] + SETTLE_MS)
        self._from_mv = from_mv
        self._engaged_mv = -1
        self._live = 0

    def look(self, now_us, capacitor_mv, source_mv, current_off, limit_mv):
        """A finding, or None. `current_off`: codes of 12 bits that the current channel stands above
        its zero; `limit_mv`: the capacitor counts as empty below.
        """
        if now_us < self.settled_us:
            return None
        if self._engaged_mv < 0:
            self._engaged_us = now_us
            self._engaged_mv = max(capacitor_mv, 0)
            return self._shorted(now_us, capacitor_mv)
        self._live = self._live + 1 if current_off > guards.ZERO_CODES else 0
        if capacitor_mv <= limit_mv:
            return None
        rise_mv = capacitor_mv - max(self._from_mv, self._engaged_mv)
        if 1000 * rise_mv > RISE_CODES * self.code_uv:
            return 2, capacitor_mv, limit_mv, UNIT_MV
        passed_us = now_us - self._engaged_us
        if self._live >= guards.LIVE_LOOKS:
            # A source feeds it, unless it falls all the same: then the channel is stuck.
            tau_us = self._tau_us()
            fell = 2 * (self._engaged_mv - capacitor_mv) * tau_us
            slow = fell < self._engaged_mv * min(passed_us, tau_us)
            if slow or (passed_us > 2 * tau_us and 4 * capacitor_mv > self._engaged_mv):
                return 2, capacitor_mv, limit_mv, UNIT_MV
            return 11, current_off, guards.ZERO_CODES, UNIT_CODES
        if not self.tau_us and 10 * capacitor_mv <= 6 * self._engaged_mv:
            finding = self._measured(passed_us, capacitor_mv)
            if finding is not None:
                return finding
        return self._too_slow(passed_us, capacitor_mv, source_mv, limit_mv)

    def _shorted(self, now_us, capacitor_mv):
        """H10, at the first look: has the capacitor fallen far in so short a time?"""
        passed_us = now_us - self.settled_us + 1000 * (self.profile["bleed_release_ms"] + SETTLE_MS)
        half = self._from_mv // 2
        if 1000 * half < LEAST_CODES * self.code_uv or capacitor_mv > half:
            return None
        return self._resistance(passed_us, self._from_mv, capacitor_mv)

    def _measured(self, passed_us, capacitor_mv):
        """Take the time constant; H10 where the resistance that it gives is too low."""
        if 1000 * capacitor_mv < LEAST_CODES * self.code_uv:
            return None
        self.tau_us = 1000 * passed_us // ln_x1000(self._engaged_mv, capacitor_mv)
        return self._resistance(passed_us, self._engaged_mv, capacitor_mv)

    def _resistance(self, passed_us, from_mv, to_mv):
        tau_us = 1000 * passed_us // ln_x1000(from_mv, max(to_mv, 1))
        mohm = 1000000 * tau_us // (self.capacitance_nf or self.profile["capacitance_nf"])
        low = self.profile["bleed_mohm"] * guards.BLEED_LOW_PERCENT // 100
        return (10, mohm, low, UNIT_MOHM) if mohm < low else None

    def _tau_us(self):
        """Of the bleed as it should be, with the capacitance that is known."""
        profile = self.profile
        if self.capacitance_nf:
            return profile["bleed_mohm"] * self.capacitance_nf // 1000000
        return profile.bleed_tau_us()

    def _too_slow(self, passed_us, capacitor_mv, source_mv, limit_mv):
        profile = self.profile
        tau_us = self._tau_us()
        allowed_ms = tau_us * ln_x1000(self._engaged_mv, limit_mv) // 1000000
        allowed_ms = max(allowed_ms * profile["bleed_time_percent"] // 100, MIN_ALLOWED_MS)
        late = passed_us > 1000 * allowed_ms
        if 4 * capacitor_mv > 3 * self._engaged_mv:
            # By now it should be at 37 % or less. What the permanent bleeder alone would take:
            permanent_us = profile["permanent_bleeder_ohm"] * profile["capacitance_nf"] // 1000
            lone_uv = 1000 * self._engaged_mv * min(passed_us, permanent_us) // permanent_us
            fell_uv = 1000 * (self._engaged_mv - capacitor_mv)
            seen = lone_uv >= SEEN_CODES * self.code_uv
            if passed_us > tau_us and (seen or late):
                near = abs(source_mv - capacitor_mv) * 100
                near = near <= profile["rated_mv"] * guards.SENSORS_PERCENT
                if (seen and 2 * fell_uv >= lone_uv) or not (seen or near):
                    return 1, capacitor_mv, limit_mv, UNIT_MV
                # Held there by the source, or a channel that reads the same whatever comes.
                return (2 if near else 11), capacitor_mv, limit_mv, UNIT_MV
        return (1, capacitor_mv, limit_mv, UNIT_MV) if late else None
