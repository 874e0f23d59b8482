"""One PIO of the RP2040: its registers, and four state machines on one program memory.

Sources: RP2040 datasheet 3.7 (registers), 3.2.4 (FIFOs; a change of FJOIN flushes both), 2.5.3.1
(requests to DMA: 8 x PIO + 4 for each RX FIFO).
"""

from bus import MASK, Block, Fault
from pio_machine import FINE, RXUNDER, TXOVER, Machine

UNDEFINED = 0xDEADBEEF  # read from an empty FIFO


class Pio(Block):
    """`request(machine, level)` is called with the words that wait for DMA in an RX FIFO."""

    def __init__(self, clock, pins, number):
        super().__init__()
        self.clock = clock
        self.pins = pins
        self.number = number
        self.request = None
        self.reset()

    def reset(self):
        self.memory = [0] * 32
        self.machines = [Machine(self, number) for number in range(4)]
        self.fdebug = 0
        self.add(0x00, "CTRL", stored=0xF, acting=0xFF0)
        self.add(0x04, "FSTAT", shown=0x0F0F0F0F)
        self.add(0x08, "FDEBUG", acting=0x0F0F0F0F)
        self.add(0x0C, "FLEVEL", shown=MASK)
        for at in range(4):
            self.add(0x10 + 4 * at, ("TXF", at), acting=MASK)
            self.add(0x20 + 4 * at, ("RXF", at), shown=MASK)
        for at in range(32):
            self.add(0x48 + 4 * at, ("MEM", at), acting=0xFFFF)
        for at in range(4):
            base = 0xC8 + 0x18 * at
            self.add(base, ("CLKDIV", at), stored=0xFFFFFF00)
            self.add(base + 4, ("EXECCTRL", at), stored=0x7FFFFF9F, shown=0x80000000)
            self.add(base + 8, ("SHIFTCTRL", at), stored=0xFFFF0000)
            self.add(base + 12, ("ADDR", at), shown=0x1F)
            self.add(base + 16, ("INSTR", at), acting=0xFFFF)
            self.add(base + 20, ("PINCTRL", at), stored=MASK)

    # -- time ------------------------------------------------------------------------------

    @property
    def due_ns(self):
        due = None
        for machine in self.machines:
            if machine.due is not None and (due is None or machine.due < due):
                due = machine.due
        return None if due is None else -(-due // FINE)

    def happen(self):
        for machine in self.machines:
            if machine.due is not None and machine.due <= self.clock.now_ns * FINE:
                machine.step()

    def put_pins(self, base, count, value, directions):
        held = self.pins.pio_oe if directions else self.pins.pio_out
        changed = 0
        for place in range(count):
            pin = (base + place) & 31
            if (held[self.number] >> pin ^ value >> place) & 1:
                changed |= 1 << pin
        if changed:
            held[self.number] ^= changed
            self.pins.refresh(changed)

    def ask(self, machine):
        if self.request is not None:
            self.request(machine.number, len(machine.rx))

    # -- registers -------------------------------------------------------------------------

    def _fstat(self):
        bits = 0
        for machine in self.machines:
            flags = (
                (24, not machine.tx),
                (16, len(machine.tx) >= machine.tx_depth()),
                (8, not machine.rx),
                (0, len(machine.rx) >= machine.rx_depth()),
            )
            for place, holds in flags:
                bits |= holds << (place + machine.number)
        return bits

    def _pop(self, machine):
        if not machine.rx:
            self.fdebug |= 1 << (RXUNDER + machine.number)
            return UNDEFINED
        word = machine.rx.pop(0)
        machine.wake()
        self.ask(machine)
        return word

    def get(self, name):
        if name == "CTRL":
            return sum(machine.enabled << machine.number for machine in self.machines)
        if name == "FSTAT":
            return self._fstat()
        if name == "FDEBUG":
            return self.fdebug
        if name == "FLEVEL":
            levels = 0
            for machine in self.machines:
                level = len(machine.tx) | len(machine.rx) << 4
                levels |= level << (8 * machine.number)
            return levels
        kind, number = name
        if kind in ("MEM", "TXF"):
            raise Fault(f"{kind} can only be written")
        machine = self.machines[number]
        if kind == "RXF":
            return self._pop(machine)
        if kind == "ADDR":
            return machine.pc
        if kind == "INSTR":
            return self.memory[machine.pc]
        return getattr(machine, kind.lower())

    def put(self, name, value, ones):
        if name == "CTRL":
            for machine in self.machines:
                self._control(machine, value, ones)
        elif name == "FDEBUG":
            self.fdebug &= ~ones
        elif name[0] == "MEM":
            self.memory[name[1]] = ones
        else:
            self._put_machine(self.machines[name[1]], name[0], value, ones)

    def _control(self, machine, value, ones):
        if ones >> (4 + machine.number) & 1:
            machine.restart()
        if ones >> (8 + machine.number) & 1:
            machine.phase = self.clock.now_ns * FINE
            machine.schedule()
        enabled = bool(value >> machine.number & 1)
        if enabled != machine.enabled:
            machine.enabled = enabled
            machine.schedule()

    def _put_machine(self, machine, kind, value, ones):
        if kind == "TXF":
            if len(machine.tx) >= machine.tx_depth():
                self.fdebug |= 1 << (TXOVER + machine.number)
            else:
                machine.tx.append(ones)
                machine.wake()
        elif kind == "INSTR":
            machine.now(ones)
        elif kind == "SHIFTCTRL":
            machine.set_shiftctrl(value)
            self.ask(machine)
        else:
            setattr(machine, kind.lower(), value)
