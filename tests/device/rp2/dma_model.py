"""The RP2040's DMA: twelve channels, rings, chains, requests counted as credits.

A peripheral asks once for each word that waits. The channel counts what was asked for, and moves
a word for each as long as it is busy and enabled. What it has counted survives an abort, and the
FIFO being emptied by the processor: writing DBG_CTDREQ forgets it, and the asking begins anew.

Sources: RP2040 datasheet 2.5 (2.5.1.1 addresses and rings, 2.5.2 triggers and chains, 2.5.3.1
requests, 2.5.5 pacing timers and abort, 2.5.7 registers); erratum RP2040-E13 as pico-sdk
hardware_dma/dma.h tells it at `dma_channel_abort`. That an abort keeps the credits is the worse
case, assumed.
"""

from bus import MASK, Block, Fault

CHANNELS = 12
EN = 1
TIMERS = 0x3B  # TREQ_SEL of the first pacing timer
PERMANENT = 0x3F
STORED = 0xFFFFFF
# CHx_READ_ADDR to CHx_AL3_READ_ADDR_TRIG, in the order of their addresses.
PLACES = (
    ("READ", "WRITE", "COUNT", "CTRL_TRIG"),
    ("CTRL", "READ", "WRITE", "COUNT_TRIG"),
    ("CTRL", "COUNT", "READ", "WRITE_TRIG"),
    ("CTRL", "WRITE", "COUNT", "READ_TRIG"),
)


class Channel:
    def __init__(self):
        self.read = self.write = self.reload = self.count = self.ctrl = 0
        self.busy = False
        self.credits = self.asked = 0
        self.due_ns = None
        self.word = None  # read, and not yet written
        self.aborting = False

    def field(self, lsb, bits):
        return self.ctrl >> lsb & ((1 << bits) - 1)

    def size(self):
        if self.field(2, 2) == 3:
            raise Fault("DATA_SIZE 3 is reserved")
        return 1 << self.field(2, 2)

    def moved(self, address, is_write):
        """The address after one transfer."""
        if not self.field(5 if is_write else 4, 1):
            return address
        beyond = (address + self.size()) & MASK
        ring = self.field(6, 4)
        if ring and self.field(10, 1) == is_write:
            low = (1 << ring) - 1
            return address & ~low | beyond & low
        return beyond


class Dma(Block):
    """`grant_ns`: a request waits so long for the bus; `flight_ns`: from reading to writing."""

    def __init__(self, clock, bus):
        super().__init__()
        self.clock = clock
        self.bus = bus
        self.grant_ns = 2 * clock.cycle_ns
        self.flight_ns = 3 * clock.cycle_ns
        self.reset()

    def reset(self):
        self.channels = [Channel() for _ in range(CHANNELS)]
        self.live = []  # those that were ever started
        self.stray = 0  # words written by a channel that had been aborted
        for number in range(CHANNELS):
            base = 64 * number
            for row, names in enumerate(PLACES):
                for column, name in enumerate(names):
                    at = base + 16 * row + 4 * column
                    if name.startswith("CTRL"):  # error flags, then AHB_ERROR and BUSY
                        self.add(at, (number, name), 0, STORED, 0x60000000, 0x81000000)
                    else:
                        self.add(at, (number, name), stored=MASK)
            self.add(0x800 + base, (number, "CTDREQ"), acting=MASK)
            self.add(0x804 + base, (number, "TCR"), shown=MASK)
        for place, name in ((0x400, "INTR"), (0x430, "MULTI_CHAN_TRIGGER"), (0x444, "CHAN_ABORT")):
            self.add(place, name, acting=0xFFFF)
        for place, name in ((0x404, "INTE0"), (0x414, "INTE1")):
            self.add(place, name, stored=0xFFFF)
        for timer in range(4):
            self.add(0x420 + 4 * timer, f"TIMER{timer}", stored=MASK)
        self.add(0x448, "N_CHANNELS", reset=CHANNELS, shown=0x1F)

    # -- time ------------------------------------------------------------------------------

    @property
    def due_ns(self):
        due = None
        for channel in self.live:
            if channel.due_ns is not None and (due is None or channel.due_ns < due):
                due = channel.due_ns
        return due

    def happen(self):
        for channel in self.live:
            if channel.due_ns is not None and channel.due_ns <= self.clock.now_ns:
                self._move(channel)
                return

    def _move(self, channel):
        channel.due_ns = None
        size = channel.size()
        if channel.word is None:
            if channel.field(15, 6) != PERMANENT:
                channel.credits -= 1
                channel.asked = max(channel.asked - 1, 0)
            channel.word = self.bus.load(channel.read, size)
            channel.read = channel.moved(channel.read, 0)
            channel.due_ns = self.clock.now_ns + self.flight_ns
            return
        self.bus.store(channel.write, channel.word, size)
        channel.write = channel.moved(channel.write, 1)
        channel.word = None
        channel.count = (channel.count - 1) & MASK
        if not channel.busy:
            self.stray += not channel.aborting
            channel.aborting = False
            self.held["INTR"] |= 1 << self.channels.index(channel)
        elif channel.count == 0:
            self._complete(channel)
        self._pace(channel)

    def _complete(self, channel):
        channel.busy = False
        number = self.channels.index(channel)
        if not channel.field(21, 1):
            self.held["INTR"] |= 1 << number
        follower = channel.field(11, 4)
        if follower != number:
            self._trigger(self.channels[follower])

    def _pace(self, channel):
        """Let the next word move when it may."""
        request = channel.field(15, 6)
        if channel.due_ns is not None or not channel.busy or not channel.ctrl & EN:
            return
        if TIMERS <= request < PERMANENT:
            rate = self.held[f"TIMER{request - TIMERS}"]
            if rate >> 16 and rate & 0xFFFF:
                cycles = max(-(-(rate & 0xFFFF) // (rate >> 16)), 1)
                channel.credits = 1
                channel.due_ns = self.clock.now_ns + cycles * self.clock.cycle_ns
        elif request == PERMANENT or channel.credits:
            channel.due_ns = self.clock.now_ns + self.grant_ns

    def request(self, number, level):
        """The peripheral of request `number` holds so many words for DMA."""
        for channel in self.channels:
            if channel.field(15, 6) == number:
                channel.credits = min(channel.credits + max(level - channel.asked, 0), 63)
                channel.asked = level
                self._pace(channel)

    # -- registers -------------------------------------------------------------------------

    def _trigger(self, channel):
        if channel.aborting:
            raise Fault("a channel was started while its abort was under way")
        if channel.ctrl & EN and not channel.busy:
            if channel not in self.live:
                self.live.append(channel)
            channel.count = channel.reload
            channel.busy = channel.count > 0
            self._pace(channel)

    def _abort(self, number):
        channel = self.channels[number]
        if channel.word is None:
            channel.due_ns = None
        else:  # E13: with EN set the bit clears before the word has been written
            channel.aborting = not channel.ctrl & EN
        channel.busy = False

    def get(self, name):
        if name == "CHAN_ABORT":
            return sum(1 << n for n, channel in enumerate(self.channels) if channel.aborting)
        if not isinstance(name, tuple):
            return self.held[name]
        channel = self.channels[name[0]]
        if name[1].startswith("CTRL"):
            return channel.ctrl | (1 << 24 if channel.busy or channel.word is not None else 0)
        found = {"CTDREQ": channel.credits, "TCR": channel.reload, "READ": channel.read}
        found["WRITE"], found["COUNT"] = channel.write, channel.count
        return found[name[1].split("_")[0]]

    def put(self, name, value, ones):
        if name == "CHAN_ABORT":
            for number in range(CHANNELS):
                if ones >> number & 1:
                    self._abort(number)
        elif name == "MULTI_CHAN_TRIGGER":
            for number in range(CHANNELS):
                if ones >> number & 1:
                    self._trigger(self.channels[number])
        elif name == "INTR":
            self.held[name] &= ~ones
        elif not isinstance(name, tuple):
            self.held[name] = value
        else:
            self._put_channel(self.channels[name[0]], name[1], value)

    def _put_channel(self, channel, name, value):
        what = name.split("_")[0]
        if what == "CTDREQ":
            channel.credits = channel.asked = 0
            self.renew(channel.field(15, 6))
            return
        if what == "READ":
            channel.read = value
        elif what == "WRITE":
            channel.write = value
        elif what == "COUNT":
            channel.reload = value
        else:
            channel.ctrl = value
            if not value & EN and channel.word is None:
                channel.due_ns = None
        if name.endswith("_TRIG") and value:
            self._trigger(channel)
        self._pace(channel)

    def renew(self, number):
        """Set by the chip: the peripheral of that request asks anew."""
