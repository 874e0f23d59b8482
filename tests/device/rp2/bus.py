"""The RP2040's address space and its clock, for the firmware's register files to run against.

These files run on CPython and on MicroPython alike. They follow the RP2040 datasheet, not the
firmware: an address that no block knows, a reserved bit written as 1, a write to what can only
be read, or a wait that never ends raises `Fault`.

Time is virtual, in ns. The processor spends some with each access; what happens by itself (a
conversion, a transfer, a PIO step, an interrupt) happens in its turn meanwhile.

Sources: RP2040 datasheet 2.1.2 (aliases for XOR, SET and CLR), 2.2 (address map).
"""

MASK = 0xFFFFFFFF
NORMAL, XOR, SET, CLEAR = range(4)
SIO = 0xD0000000
SRAM_END = 0x20042000
ACCESS_NS = 64  # a loop of native code around one access, about
SRAM_NS = 16
NEVER_ENDS = 20000  # reads of one register that never changes


class Fault(Exception):
    """The firmware did what the chip leaves undefined, or waits for what never comes."""


class Clock:
    """`sources` happen by themselves at their `due_ns`; `alarms` interrupt the processor."""

    def __init__(self, cycle_ns=8):
        self.cycle_ns = cycle_ns
        self.now_ns = 0
        self.sources = []
        self.alarms = []
        self.interrupts_on = True
        self.in_interrupt = False

    def advance(self, to_ns):
        """The world goes on to `to_ns`; the processor does nothing."""
        while True:
            first = None
            for source in self.sources:
                due = source.due_ns
                if due is not None and due <= to_ns and (first is None or due < first.due_ns):
                    first = source
            if first is None:
                break
            self.now_ns = max(self.now_ns, first.due_ns)
            first.happen()
        self.now_ns = max(self.now_ns, to_ns)

    def _interrupt_by(self, end_ns):
        if not self.interrupts_on or self.in_interrupt:
            return None
        first = None
        for alarm in self.alarms:
            if alarm.due_ns <= end_ns and (first is None or alarm.due_ns < first.due_ns):
                first = alarm
        return first

    def _interrupt(self, alarm):
        self.advance(alarm.due_ns)
        self.in_interrupt = True
        try:
            alarm.interrupt()
        finally:
            self.in_interrupt = False

    def spend(self, ns):
        """The processor works for `ns`, and longer by the interrupts that come in between."""
        end = self.now_ns + ns
        alarm = self._interrupt_by(end)
        while alarm is not None:
            self.advance(alarm.due_ns)
            began = self.now_ns
            self._interrupt(alarm)
            end += self.now_ns - began
            alarm = self._interrupt_by(end)
        self.advance(end)

    def sleep(self, ns):
        """The processor waits until `ns` from now; interrupts do not make that later."""
        end = self.now_ns + ns
        alarm = self._interrupt_by(end)
        while alarm is not None:
            self._interrupt(alarm)
            alarm = self._interrupt_by(end)
        self.advance(end)


class Block:
    """A peripheral's registers.

    `add` declares one: the bits that are stored, those on which a written 1 acts (write 1 to
    clear, self-clearing), those that can only be read. All others are reserved. Stored bits are
    in `held`; a peripheral overrides `get` and `put` where more happens.
    """

    def __init__(self):
        self.registers = {}
        self.held = {}

    def add(self, offset, name, reset=0, stored=0, acting=0, shown=0):
        self.registers[offset] = (name, stored, acting, shown)
        self.held[name] = reset

    def _at(self, offset):
        if offset not in self.registers:
            raise Fault(f"{type(self).__name__} has no register at +{offset:#x}")
        return self.registers[offset]

    def load(self, offset):
        return self.get(self._at(offset)[0]) & MASK

    def store(self, offset, value, alias):
        name, stored, acting, shown = self._at(offset)
        if not stored | acting:
            raise Fault(f"{name} can only be read")
        if value & ~(stored | acting | shown):
            raise Fault(f"{name}: reserved bits in {value:#x}")
        bits = value & stored
        if alias == NORMAL:
            self.put(name, bits, value & acting)
            return
        old = self.get(name) & stored if stored else 0
        new = (old ^ bits, old | bits, old & ~bits)[alias - 1]
        self.put(name, new, 0 if alias == CLEAR else value & acting)

    def get(self, name):
        return self.held[name]

    def put(self, name, value, ones):
        self.held[name] = value


class Bus:
    """`read` and `write` as the processor has them, with their time; `load` and `store` without."""

    def __init__(self, clock, memory):
        self.clock = clock
        self.memory = memory
        self.blocks = {}
        self.writes = []  # (ns, address, value) of the processor's writes to registers
        # Called before each access to registers, and to words (`pointers.py`), and where interrupts
        # are about to be turned off or have been turned on.
        self.watcher = None
        self._last = (0, 0)
        self._repeats = 0

    def attach(self, base, block):
        self.blocks[base] = block

    def _block(self, address):
        block = self.blocks.get(address & ~0x3FFF)
        alias = (address >> 12) & 3
        if block is None or address & 3 or (alias and address >= SIO):
            raise Fault(f"nothing is at {address:#x}")
        return block, address & 0xFFF, alias

    def load(self, address, size=4):
        if address < SRAM_END:
            return self.memory.load(address, size)
        block, offset, alias = self._block(address)
        if alias:
            raise Fault(f"read of the alias {address:#x}")
        return block.load(offset) & ((1 << (8 * size)) - 1)

    def store(self, address, value, size=4):
        if address < SRAM_END:
            self.memory.store(address, value, size)
            return
        if size != 4:
            raise Fault(f"narrow write to the register {address:#x}")
        block, offset, alias = self._block(address)
        block.store(offset, value & MASK, alias)

    def watch(self):
        if self.watcher is not None:
            self.watcher()

    def read(self, address, size=4):
        address &= MASK
        if address < SRAM_END:
            self.clock.spend(SRAM_NS)
            return self.load(address, size)
        self.watch()
        self.clock.spend(ACCESS_NS)
        value = self.load(address, size)
        self._repeats = self._repeats + 1 if (address, value) == self._last else 0
        self._last = (address, value)
        if self._repeats > NEVER_ENDS:
            raise Fault(f"waits for ever at {address:#x}, which reads {value:#x}")
        return value

    def write(self, address, value, size=4):
        address &= MASK
        if address < SRAM_END:
            self.clock.spend(SRAM_NS)
        else:
            self._repeats = 0
            self.watch()
            self.clock.spend(ACCESS_NS)
            self.writes.append((self.clock.now_ns, address, value & MASK))
        self.store(address, value & MASK, size)
