"""The RP2040's watchdog, and where a chip keeps why it was reset.

LOAD counts down by two each us (erratum RP2040-E1) while CTRL.ENABLE is set. At zero the chip is
reset: `BoardReset` is raised in whatever the processor was doing.

Sources: RP2040 datasheet 4.7 (4.7.6 registers), 2.12.8 (CHIP_RESET; only a reset of the chip as a
whole changes its flags), erratum RP2040-E1.
"""

from bus import MASK, Block, Fault

ENABLE, TRIGGER = 1 << 30, 1 << 31
PAUSES = 0x07000000
REASON_TIMER, REASON_FORCE = 1, 2
HAD_POR, HAD_RUN = 0x100, 0x10000


class BoardReset(Exception):
    """The watchdog has reset the chip."""


class Watchdog(Block):
    def __init__(self, clock, bite):
        super().__init__()
        self.clock = clock
        self.bite = bite  # called with the reason
        self.due_ns = None
        self.reason = 0
        self.scratch = [0] * 8
        self.reset()

    def reset(self):
        """What any reset of the chip does; REASON and SCRATCH tell of it afterwards."""
        self.add(0x00, "CTRL", reset=PAUSES, stored=ENABLE | PAUSES, acting=TRIGGER, shown=0xFFFFFF)
        self.add(0x04, "LOAD", stored=0xFFFFFF)
        self.add(0x08, "REASON", shown=3)
        for place in range(8):
            self.add(0x0C + 4 * place, place, stored=MASK)
        self.add(0x2C, "TICK", reset=0x200, stored=0x3FF, shown=0xFFC00)
        self.due_ns = None
        self._left = 0  # where the count stands while it is stopped

    def happen(self):
        self.bite(REASON_TIMER)

    def _count(self):
        if self.due_ns is None:
            return self._left
        return (self.due_ns - self.clock.now_ns) * 2 // 1000

    def get(self, name):
        if name == "CTRL":
            return self.held["CTRL"] | self._count()
        if name == "LOAD":
            raise Fault("LOAD can only be written")
        if name == "REASON":
            return self.reason
        return self.scratch[name] if isinstance(name, int) else self.held[name]

    def put(self, name, value, ones):
        if isinstance(name, int):
            self.scratch[name] = value
            return
        if name == "LOAD":
            self._left = value
            running = self.due_ns is not None
        else:
            self._left = self._count()
            self.held[name] = value
            running = self.held["CTRL"] & ENABLE
        self.due_ns = self.clock.now_ns + self._left * 1000 // 2 if running else None
        if ones & TRIGGER:
            self.bite(REASON_FORCE)


class ChipReset(Block):
    """VREG_AND_CHIP_RESET: why the chip as a whole was reset."""

    def __init__(self):
        super().__init__()
        self.add(0x08, "CHIP_RESET", reset=HAD_POR, acting=0x01000000, shown=0x00110100)
