"""When is a sweep complete?

Comes in: means of the newest pairs, in sixteenths of a code. Goes out: yes or no.
"""

from micropython import const

END_SLICES = const(3)


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
