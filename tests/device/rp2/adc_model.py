"""The RP2040's converter: one result in 96 cycles of 48 MHz, a FIFO of four, round robin.

Sources: RP2040 datasheet 4.9 (4.9.2 for FIFO and DMA, 4.9.6 for the registers).
"""

from bus import Block

CONVERSION_NS = 2000  # 96 cycles of 48 MHz
DEPTH = 4
EMPTY_READS = 0xAAA  # undefined in the datasheet; no code that the tests use

EN, START_ONCE, START_MANY, READY = 1, 4, 8, 0x100
FCS_EN, FCS_SHIFT, FCS_DREQ_EN = 1, 2, 8
FCS_EMPTY, FCS_FULL, FCS_UNDER, FCS_OVER = 0x100, 0x200, 0x400, 0x800


class Adc(Block):
    """`source(channel, ns, before)` gives the code at the end of a conversion that began at `ns`;
    `before` is the channel of the conversion before it.
    """

    def __init__(self, clock):
        super().__init__()
        self.clock = clock
        self.request = None  # called with the number of codes that wait for DMA
        self.source = lambda channel, ns, before: 1000 * (channel + 1)
        self.reset()

    def reset(self):
        self.add(0x00, "CS", stored=0x1F700B, acting=0x404, shown=0x300)
        self.add(0x04, "RESULT", shown=0xFFF)
        self.add(0x08, "FCS", stored=0x0F00000F, acting=0xC00, shown=0x0F0300)
        self.add(0x0C, "FIFO", shown=0x8FFF)
        self.add(0x10, "DIV", stored=0xFFFFFF)
        self.fifo = []
        self.flags = 0
        self.due_ns = None
        self.conversions = 0  # of all time
        self.starts = []  # (ns, channel) of each conversion
        self._running = False
        self._channel = 0
        self._before = 0
        self._began_ns = 0

    def _ainsel(self):
        return self.held["CS"] >> 12 & 7

    def _begin(self, at_ns):
        """A conversion begins at `at_ns`; until then the converter is ready."""
        self._began_ns = at_ns
        self.due_ns = at_ns + CONVERSION_NS
        self._running = True
        self._channel = self._ainsel()
        self.starts.append((at_ns, self._channel))

    def happen(self):
        code = self.source(self._channel, self._began_ns, self._before) & 0xFFF
        self._before = self._channel
        self.conversions += 1
        self.held["RESULT"] = code
        if self.held["FCS"] & FCS_EN:
            if len(self.fifo) == DEPTH:
                self.flags |= FCS_OVER
            else:
                self.fifo.append(code >> 4 if self.held["FCS"] & FCS_SHIFT else code)
        robin = self.held["CS"] >> 16 & 0x1F
        if robin:
            channel = (self._ainsel() + 1) % 5
            while not robin >> channel & 1:
                channel = (channel + 1) % 5
            self.held["CS"] = self.held["CS"] & ~0x7000 | channel << 12
        self.due_ns = None
        self._running = False
        if self.held["CS"] & START_MANY:
            div = self.held["DIV"]
            period_ns = (256 + div) * 1000 // (256 * 48)
            self._begin(max(self.clock.now_ns, self._began_ns + period_ns if div else 0))
        self.ask()

    def ask(self):
        if self.request is not None:
            level = len(self.fifo)
            threshold = self.held["FCS"] >> 24 & 0xF
            asks = self.held["FCS"] & FCS_DREQ_EN and level >= threshold
            self.request(level if asks else 0)

    def get(self, name):
        if name == "CS":
            ready = self.held["CS"] & EN and not self._running
            return self.held["CS"] | (READY if ready else 0)
        if name == "FCS":
            level = len(self.fifo)
            state = (FCS_EMPTY if not level else 0) | (FCS_FULL if level == DEPTH else 0)
            return self.held["FCS"] | self.flags | state | level << 16
        if name == "FIFO":
            if not self.fifo:
                self.flags |= FCS_UNDER
                return EMPTY_READS
            code = self.fifo.pop(0)
            self.ask()
            return code
        return self.held[name]

    def put(self, name, value, ones):
        self.held[name] = value
        if name == "FCS":
            self.flags &= ~ones
            self.ask()
        elif name == "CS":
            if not value & EN:
                self.due_ns = None
                self._running = False
            elif self.due_ns is None and (value & START_MANY or ones & START_ONCE):
                self._begin(self.clock.now_ns)
