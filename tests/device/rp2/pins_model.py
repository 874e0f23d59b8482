"""The RP2040's pins: SIO outputs, the function of each pin, pulls, and what is wired to them.

`edges` records what the pins of `watched` put out: (ns, pin, 1, 0 or None for not driven).

Sources: RP2040 datasheet 2.3.1 (SIO; no aliases), 2.19 (functions, pads; 2.19.6 registers). A
pin's output disable wins over its function's output enable (2.19.6.3).
"""

from bus import Block, Fault

COUNT = 30
ALL = (1 << COUNT) - 1
FUNCTION_SIO, FUNCTION_PIO0, FUNCTION_PIO1, FUNCTION_NULL = 5, 6, 7, 31
PAD_OD, PAD_IE, PAD_PULL_UP, PAD_PULL_DOWN = 0x80, 0x40, 8, 4
SYNC_CYCLES = 2  # from a pin to what SIO and PIO see of it


class Pins:
    def __init__(self, clock):
        self.clock = clock
        self.outside = [None] * COUNT  # levels that something else drives
        self.watched = (2, 3, 4, 7)  # the firmware's outputs, without those of SPI
        self.listeners = []  # called with (pin, level) as an output changes
        self.sio = Sio(self)
        self.functions = Functions(self)
        self.pads = Pads(self)
        self.reset()

    def reset(self):
        """As after power-on: nothing is driven."""
        self.out = self.oe = 0
        self.pio_out = [0, 0]
        self.pio_oe = [0, 0]
        self.function = [FUNCTION_NULL] * COUNT
        self.pad = [0x56] * COUNT
        self.edges = []
        self.chosen = []  # (ns, pin, function) of each choice of a function
        self._driven = [None] * COUNT
        self._seen = [(0, 0, 0)] * COUNT

    def driven(self, pin):
        """1, 0 or None: what this chip puts on the pin."""
        function = self.function[pin]
        if function == FUNCTION_SIO:
            out, oe = self.out, self.oe
        elif function in (FUNCTION_PIO0, FUNCTION_PIO1):
            out, oe = self.pio_out[function - 6], self.pio_oe[function - 6]
        else:
            return None
        return out >> pin & 1 if oe >> pin & 1 and not self.pad[pin] & PAD_OD else None

    def level(self, pin):
        driven = self.driven(pin)
        if driven is not None:
            return driven
        if self.outside[pin] is not None:
            return self.outside[pin]
        return 1 if self.pad[pin] & PAD_PULL_UP else 0

    def drive_from_outside(self, pin, level):
        self.outside[pin] = level
        self.refresh(1 << pin)

    def refresh(self, mask=ALL):
        """Something that drives these pins has changed."""
        now = self.clock.now_ns
        for pin in range(COUNT):
            if not mask >> pin & 1:
                continue
            level = self.level(pin)
            if level != self._seen[pin][1]:
                self._seen[pin] = (self._seen[pin][1], level, now)
            driven = self.driven(pin)
            if driven != self._driven[pin]:
                self._driven[pin] = driven
                if pin in self.watched:
                    self.edges.append((now, pin, driven))
                for listener in self.listeners:
                    listener(pin, driven)

    def inputs(self):
        """All pins as SIO and PIO see them, the synchroniser behind them included."""
        seen = 0
        late = self.clock.now_ns - SYNC_CYCLES * self.clock.cycle_ns
        for pin in range(COUNT):
            if self.pad[pin] & PAD_IE:
                before, level, changed = self._seen[pin]
                seen |= (before if changed > late else level) << pin
        return seen


class Sio(Block):
    def __init__(self, pins):
        super().__init__()
        self.pins = pins
        self.add(0x04, "GPIO_IN", shown=ALL)
        for base, name in ((0x10, "GPIO_OUT"), (0x20, "GPIO_OE")):
            self.add(base, name, stored=ALL)
            for place, suffix in enumerate(("SET", "CLR", "XOR")):
                self.add(base + 4 + 4 * place, name + "_" + suffix, acting=ALL)

    def get(self, name):
        if name == "GPIO_IN":
            return self.pins.inputs()
        if name.count("_") == 2:
            raise Fault(f"{name} can only be written")
        return self.pins.out if name == "GPIO_OUT" else self.pins.oe

    def put(self, name, value, ones):
        which = "out" if name.startswith("GPIO_OUT") else "oe"
        old = getattr(self.pins, which)
        new = value
        if name.endswith("SET"):
            new = old | ones
        elif name.endswith("CLR"):
            new = old & ~ones
        elif name.endswith("XOR"):
            new = old ^ ones
        setattr(self.pins, which, new)
        self.pins.refresh(old ^ new)


class Functions(Block):
    """IO_BANK0, as far as it chooses functions."""

    def __init__(self, pins):
        super().__init__()
        self.pins = pins
        for pin in range(COUNT):
            self.add(8 * pin + 4, pin, stored=0x3003331F)

    def get(self, name):
        return self.pins.function[name]

    def put(self, name, value, ones):
        if value & ~0x1F:
            raise Fault("overrides of a pin are not modelled")
        self.pins.function[name] = value
        self.pins.chosen.append((self.pins.clock.now_ns, name, value))
        self.pins.refresh(1 << name)


class Pads(Block):
    def __init__(self, pins):
        super().__init__()
        self.pins = pins
        for pin in range(COUNT):
            self.add(4 * pin + 4, pin, stored=0xFF)

    def get(self, name):
        return self.pins.pad[name]

    def put(self, name, value, ones):
        self.pins.pad[name] = value
        self.pins.refresh(1 << name)
