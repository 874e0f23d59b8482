"""One state machine of the RP2040's PIO: every instruction, side-set, delay, wrap, stalls.

Sources: RP2040 datasheet 3.2.1 to 3.2.5 (state machine, stalls, FIFOs), 3.4 (instructions), 3.5
(side-set, wrap, autopush and autopull), 3.7 (registers).
"""

from bus import MASK, Fault

FINE = 256  # parts of a ns, so that fractional dividers add up
TXSTALL, TXOVER, RXUNDER, RXSTALL = 24, 16, 8, 0  # places in FDEBUG
FJOIN_RX, FJOIN_TX = 1 << 31, 1 << 30


def reversed_bits(value):
    turned = 0
    for _ in range(32):
        turned = turned << 1 | value & 1
        value >>= 1
    return turned


class Machine:
    def __init__(self, pio, number):
        self.pio = pio
        self.number = number
        self.clkdiv = 0x00010000
        self.execctrl = 0x0001F000
        self.shiftctrl = 0x000C0000
        self.pinctrl = 0x14000000
        self.enabled = False
        self.pc = self.x = self.y = self.osr = self.isr = 0
        self.isr_count, self.osr_count = 0, 32
        self.tx, self.rx = [], []
        self.forced = None  # an instruction that goes before the program's next
        self.waits = False  # stalled, until a FIFO changes
        self.due = None  # of the next step, in FINE parts of a ns
        self.phase = 0  # when the clock divider last began
        self.steps = 0
        first = (self._jmp, self._wait, self._in, self._out)
        self.kinds = first + (self._fifo, self._mov, self._irq, self._set)  # noqa: RUF005

    # -- its clock -------------------------------------------------------------------------

    def period(self):
        whole = self.clkdiv >> 16 or 65536
        return self.pio.clock.cycle_ns * (whole * FINE + (self.clkdiv >> 8 & 0xFF))

    def schedule(self):
        """The next step comes with the divider's next beat."""
        self.due = None
        if self.enabled and not self.waits:
            period = self.period()
            beats = (self.pio.clock.now_ns * FINE - self.phase) // period + 1
            self.due = self.phase + beats * period

    def wake(self):
        if self.waits:
            self.waits = False
            self.schedule()

    def restart(self):
        """SM_RESTART: shift counters, ISR, delay and stalled instruction; no more than that."""
        self.isr = self.isr_count = 0
        self.osr_count = 32
        self.forced = None
        self.waits = False
        self.schedule()

    # -- FIFOs -----------------------------------------------------------------------------

    def depth(self, joined, other):
        return 8 if self.shiftctrl & joined else 0 if self.shiftctrl & other else 4

    def tx_depth(self):
        return self.depth(FJOIN_TX, FJOIN_RX)

    def rx_depth(self):
        return self.depth(FJOIN_RX, FJOIN_TX)

    def set_shiftctrl(self, value):
        if (value ^ self.shiftctrl) & (FJOIN_RX | FJOIN_TX):
            self.tx, self.rx = [], []
            self.wake()
        self.shiftctrl = value

    def threshold(self, lsb):
        return self.shiftctrl >> lsb & 31 or 32

    def _flag(self, place):
        self.pio.fdebug |= 1 << (place + self.number)

    def _push(self, block):
        if len(self.rx) >= self.rx_depth():
            self._flag(RXSTALL)
            if block:
                return False
        else:
            self.rx.append(self.isr)
            self.pio.ask(self)
        self.isr = self.isr_count = 0
        return True

    def _pull(self, block):
        if not self.tx:
            if block:
                self._flag(TXSTALL)
                return False
            self.osr = self.x
        else:
            self.osr = self.tx.pop(0)
            self.pio.ask(self)
        self.osr_count = 0
        return True

    # -- steps -----------------------------------------------------------------------------

    def step(self):
        """What is due now; then the next is scheduled."""
        began = self.due
        forced = self.forced
        self.forced = None
        word = self.pio.memory[self.pc] if forced is None else forced
        at = self.pc
        done, delay = self.execute(word)
        if not done:
            self.forced = forced
            if self.waits:
                self.due = None
                return
            delay = 0
        elif forced is None and self.pc == at and not self._jumped:
            wraps = at == self.execctrl >> 12 & 31
            self.pc = self.execctrl >> 7 & 31 if wraps else (at + 1) & 31
        self.steps += 1
        self.due = began + (1 + delay) * self.period()

    def now(self, word):
        """An instruction written to SMx_INSTR."""
        done, delay = self.execute(word)
        if not done:
            self.forced = word
        elif self.waits:
            self.waits = False
        if self.enabled:
            self.schedule()
            if self.due is not None:
                self.due += delay * self.period()

    def execute(self, word):
        """(whether it is done, cycles of delay after it)."""
        self._jumped = False
        self.waits = False
        done = self.kinds[word >> 13](word >> 5 & 7, word & 31)
        bits = self.pinctrl >> 29
        field = word >> 8 & 31
        delay = field & ((1 << (5 - bits)) - 1)
        if bits:
            level = field >> (5 - bits)
            if self.execctrl >> 30 & 1:  # the highest bit tells whether there is a side-set
                bits -= 1
                if not level >> bits:
                    bits = 0
                level &= (1 << bits) - 1
            if bits:
                directions = self.execctrl >> 29 & 1
                self.pio.put_pins(self.pinctrl >> 10 & 31, bits, level, directions)
        return done, delay

    def _jump(self, target):
        self._jumped = True
        self.pc = target

    def _jmp(self, condition, target):
        holds = True
        if condition in (1, 2):
            holds = (self.x == 0) == (condition == 1)
            if condition == 2:
                self.x = (self.x - 1) & MASK
        elif condition in (3, 4):
            holds = (self.y == 0) == (condition == 3)
            if condition == 4:
                self.y = (self.y - 1) & MASK
        elif condition == 5:
            holds = self.x != self.y
        elif condition == 6:
            holds = bool(self.pio.pins.inputs() >> (self.execctrl >> 24 & 31) & 1)
        elif condition == 7:
            holds = self.osr_count < self.threshold(25)
        if holds:
            self._jump(target)
        return True

    def _wait(self, how, index):
        source = how & 3
        if source > 1:
            raise Fault("WAIT for an interrupt flag is not modelled")
        pin = index if source == 0 else (index + (self.pinctrl >> 15 & 31)) & 31
        return (self.pio.pins.inputs() >> pin & 1) == how >> 2

    def _source(self, number):
        if number == 0:
            pins = self.pio.pins.inputs()
            base = self.pinctrl >> 15 & 31
            return (pins >> base | pins << (32 - base)) & MASK
        if number == 5:
            level = len(self.rx if self.execctrl >> 4 & 1 else self.tx)
            return MASK if level < (self.execctrl & 15) else 0
        found = (0, self.x, self.y, 0, None, 0, self.isr, self.osr)[number]
        if found is None:
            raise Fault("reserved source in a PIO instruction")
        return found

    def _in(self, source, bits):
        bits = bits or 32
        full = self.shiftctrl >> 16 & 1 and self.isr_count + bits >= self.threshold(20)
        if full and len(self.rx) >= self.rx_depth():
            self._flag(RXSTALL)
            self.waits = True
            return False
        value = self._source(source) & ((1 << bits) - 1)
        if self.shiftctrl >> 18 & 1:
            self.isr = (self.isr >> bits | value << (32 - bits)) & MASK
        else:
            self.isr = (self.isr << bits | value) & MASK
        self.isr_count = min(self.isr_count + bits, 32)
        return self._push(True) if full else True

    def _out(self, to, bits):
        bits = bits or 32
        empty = self.shiftctrl >> 17 & 1 and self.osr_count >= self.threshold(25)
        if empty and not self._pull(True):
            self.waits = True
            return False
        if self.shiftctrl >> 19 & 1:
            value = self.osr & ((1 << bits) - 1)
            self.osr >>= bits
        else:
            value = self.osr >> (32 - bits)
            self.osr = self.osr << bits & MASK
        self.osr_count = min(self.osr_count + bits, 32)
        if to == 6:
            self.isr, self.isr_count = value, bits
        elif to == 7:
            self.forced = value
        elif to == 4:
            self._put_out(value, True)
        else:
            self._to(to, value)
        return True

    def _put_out(self, value, directions):
        self.pio.put_pins(self.pinctrl & 31, self.pinctrl >> 20 & 63, value, directions)

    def _to(self, to, value):
        """Destinations that OUT and MOV have in common."""
        if to == 0:
            self._put_out(value, False)
        elif to == 1:
            self.x = value
        elif to == 2:
            self.y = value
        elif to == 5:
            self._jump(value & 31)
        elif to != 3:
            raise Fault("reserved destination in a PIO instruction")

    def _fifo(self, how, index):
        block = bool(how & 1)
        if how & 4:
            if how & 2 and self.osr_count < self.threshold(25):
                return True
            done = self._pull(block)
        else:
            if how & 2 and self.isr_count < self.threshold(20):
                return True
            done = self._push(block)
        self.waits = not done
        return done

    def _mov(self, to, how):
        value = self._source(how & 7)
        if how >> 3 == 1:
            value ^= MASK
        elif how >> 3 == 2:
            value = reversed_bits(value)
        if to == 6:
            self.isr, self.isr_count = value, 0
        elif to == 7:
            self.osr, self.osr_count = value, 0
        elif to == 4:
            self.forced = value & 0xFFFF
        else:
            self._to(to, value)
        return True

    def _irq(self, how, index):
        raise Fault("PIO interrupt flags are not modelled")

    def _set(self, to, value):
        if to in (0, 4):
            self.pio.put_pins(self.pinctrl >> 5 & 31, self.pinctrl >> 26 & 7, value, to == 4)
        elif to in (1, 2):
            self._to(to, value)
        else:
            raise Fault("reserved destination in a PIO instruction")
        return True
