"""What the bleed resistor has taken up: an account of its heat, since nothing measures it.

Comes in: the capacitor's voltage, and time. Goes out: millijoules. The account is taken as full
after a reset, when nobody knows; it falls at the power that the resistor stands for ever, but not
while more than that goes in.
"""


class Heat:
    """Times in us since boot, voltages in mV."""

    def __init__(self, profile, now_us):
        self.profile = profile
        self._since_us = now_us
        self._from_mv = 0
        self.fill()

    def fill(self):
        """Nobody knows what it has taken up."""
        self._uj = 1000 * self.profile["bleed_mj"]

    def mj(self):
        return self._uj // 1000

    def begin(self, now_us, capacitor_mv):
        """A capacitor with this voltage lies across the bleed from now on."""
        self.look(now_us, 0, False)
        self._from_mv = max(capacitor_mv, 0)

    def look(self, now_us, capacitor_mv, engaged):
        """Count what has gone in and out since the last look."""
        profile = self.profile
        passed_us = now_us - self._since_us
        self._since_us = now_us
        before_mv, self._from_mv = self._from_mv, max(capacitor_mv, 0)
        power_mw = 0
        if engaged:
            power_mw = self._from_mv * self._from_mv // profile["bleed_mohm"]
            # What left the capacitor, or what a source that holds it there has sent: the greater.
            gave_uj = profile.stored_uj(before_mv) - profile.stored_uj(self._from_mv)
            self._uj += max(gave_uj, power_mw * passed_us // 1000)
            self._uj = min(self._uj, 1000 * profile["bleed_mj"])  # full is full
        if power_mw <= profile["bleed_mw"]:
            self._uj = max(self._uj - profile["bleed_mw"] * passed_us // 1000, 0)

    def spent(self, capacitor_mv=0, ms=0):
        """True where it has taken up all that it may, or will have in `ms` more at that voltage."""
        more_uj = capacitor_mv * capacitor_mv // self.profile["bleed_mohm"] * ms
        return self._uj + more_uj >= 1000 * self.profile["bleed_mj"]

    def rest_ms(self, mj):
        """Time until there is room for `mj` more."""
        over_mj = self.mj() + mj - self.profile["bleed_mj"]
        return 0 if over_mj <= 0 else over_mj * 1000 // self.profile["bleed_mw"] + 1
