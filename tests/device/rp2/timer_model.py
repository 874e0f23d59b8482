"""The RP2040's 64-bit count of microseconds.

TIMELR latches the high half for TIMEHR; the RAW registers do not, so a reader must notice the
carry between them itself. Source: RP2040 datasheet 4.6 (4.6.5 registers).
"""

from bus import MASK, Block


class Timer(Block):
    def __init__(self, clock):
        super().__init__()
        self.clock = clock
        self.offset_us = 0
        self._latched = 0
        self.add(0x08, "TIMEHR", shown=MASK)
        self.add(0x0C, "TIMELR", shown=MASK)
        self.add(0x24, "TIMERAWH", shown=MASK)
        self.add(0x28, "TIMERAWL", shown=MASK)

    def us(self):
        return self.clock.now_ns // 1000 + self.offset_us

    def set_us(self, us):
        """Let it be `us` at the beginning of a microsecond from now on."""
        self.clock.advance(-(-self.clock.now_ns // 1000) * 1000)
        self.offset_us = us - self.clock.now_ns // 1000

    def get(self, name):
        us = self.us()
        if name == "TIMELR":
            self._latched = us >> 32
        if name == "TIMEHR":
            return self._latched
        return us >> 32 if name == "TIMERAWH" else us
