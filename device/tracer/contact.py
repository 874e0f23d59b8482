"""How the contact closes and opens, for the two kinds that a build may have.

    relay+switch  the relay closes and opens dry; a switch in series makes and breaks, driven by the
                  bounded pulse, which is short and must be earned anew by every slice. It may open
                  at any time.
    relay         the bounded pulse drives the relay's coil itself, for the predicted time of the
                  charge and a margin, and twice more where current flows still: three times the
                  prediction in all. A closed contact on a capacitor limits itself, an opening under
                  load draws an arc: what asks for an early end is noted, and the charge runs out,
                  unless the profile says that the contact is rated to break.

Called within the board's quiet: nothing is allocated. Numbers are below 2**30.
"""

from micropython import const

from tracer import hal as board

BARE_WATCHDOG_MS = const(7500)  # longer than the longest pulse of a bare relay
WATCHDOG_MS = const(2000)
READ_CONVERSIONS = const(16)
SHORTED_POLLS = const(2500)  # of 2 ms, for a charge that a shorted switch has begun
LEAST_US = const(10000)  # a pulse that the reader can renew in time, however busy
MARGIN_X100 = const(208)  # 1.6 C Voc / Isc to 99.9 % of Voc, and 30 % more


class Contact:
    """`outputs` is the sequencer, which is told what is commanded."""

    def __init__(self, hal, profile):
        self.hal = hal
        self.profile = profile
        self.bare = profile.bare()
        self.may_break = not self.bare or profile["breaks_dc"] == 1
        self.watchdog_ms = BARE_WATCHDOG_MS if self.bare else WATCHDOG_MS
        self.shorted_sum = 0
        self._micro_farad = (profile["capacitance_nf"] + 999) // 1000
        self._micro_volt = profile["voltage_nv_per_code"] // 1000  # of a code
        self._micro_ampere = profile["current_na_per_code"] // 1000

    def prepare(self, outputs, relay_closes, full_sum, near_zero_sum):
        """Release the bleed; with a switch close the relay, while the switch is off.

        False where the capacitor fills all the same (`shorted_sum` says how far): its codes come
        above `full_sum`. The relay then stays closed until the current is below `near_zero_sum`.
        Both are sums of READ_CONVERSIONS codes.
        """
        hal = self.hal
        profile = self.profile
        outputs.release_bleed()
        hal.wait_us(1000 * (profile["bleed_operate_ms"] + profile["dead_time_ms"]))
        outputs.close_contact()
        if self.bare or not relay_closes:
            return True
        hal.relay(True)
        hal.wait_us(1000 * 2 * profile["relay_operate_ms"])
        self.shorted_sum = hal.read(board.CAPACITOR, READ_CONVERSIONS)
        if self.shorted_sum <= full_sum:
            return True
        for _ in range(SHORTED_POLLS):
            if hal.read(board.CURRENT, READ_CONVERSIONS) <= near_zero_sum:
                break
            hal.watchdog(self.watchdog_ms)
            hal.wait_us(2000)
        self.shorted_sum = hal.read(board.CAPACITOR, READ_CONVERSIONS)
        return False

    def pulse_us(self, limit_ms):
        """Of the first pulse."""
        return 1000 * limit_ms if self.bare else self.profile["pulse_us"]

    def predicted_us(self, open_x16, peak_x16, passed_us, most_us):
        """Time that is left of the charge, with the margin; codes are above their zeros."""
        volts = (open_x16 >> 4) * self._micro_volt // 1000000 + 1
        milli_ampere = (peak_x16 >> 4) * self._micro_ampere // 1000
        micro_coulomb = min(self._micro_farad * volts, 16000000)
        # In 64ths of a millisecond, so that neither factor is lost to rounding or too large.
        units = micro_coulomb * 64 // max(milli_ampere, 1)
        if units > most_us // 1000 * 64:
            return most_us
        left_us = units * MARGIN_X100 // 100 * 1000 // 64 - passed_us
        return min(max(left_us, LEAST_US), most_us)

    def open(self):
        """The pulse has ended; a relay in series with a switch opens once that has broken."""
        self.hal.wait_us(self.profile["switch_release_us"] + 950)
        self.hal.relay(False)

    def release_us(self):
        """From `open` until the contact is open for certain, and time more before the bleed."""
        profile = self.profile
        return 1000 * max(profile["relay_release_ms"] + profile["dead_time_ms"], 0)
