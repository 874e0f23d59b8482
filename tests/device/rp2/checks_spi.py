"""Checks of two SPI converters on PIO1: every pair whole, in its place, in its time."""

SELECT, CLOCK, DATA_V, DATA_I = 10, 11, 12, 13
SPI16 = 2
GO = (0x50302000, 0x101)
FAST, SLOW = (SPI16, 4, 20_000, 700), (SPI16, 100, 400, 50_000)


def words(number):
    """(v, i) of a sampling; no bit pattern is its neighbour's."""
    return (number * 40503 + 12345) & 0xFFFF, (number * 30011 + 54321) & 0xFFFF


class Converters:
    """Both sample as select rises and show the next bit at its fall and at each clock's fall."""

    def __init__(self, chip):
        self.pins = chip.pins
        self.clock = chip.clock
        self.rises_ns = []
        self.bit = -1
        self.select = 0
        chip.pins.listeners.append(self.changed)

    def changed(self, pin, level):
        if pin == SELECT and level == 1 and not self.select:
            self.rises_ns.append(self.clock.now_ns)
            self.bit = 16
        elif (pin == SELECT and level == 0 and self.select) or (
            pin == CLOCK and level == 0 and not self.select
        ):
            self.bit = max(self.bit - 1, -1)
            self.show()
        if pin == SELECT:
            self.select = level

    def show(self):
        codes = words(len(self.rises_ns) - 1)
        for pin, code in ((DATA_V, codes[0]), (DATA_I, codes[1])):
            level = code >> self.bit & 1 if self.bit >= 0 else None
            self.pins.drive_from_outside(pin, level)


def wired(new, setting=FAST):
    board = new()
    parts = Converters(board.chip)
    board.hal.use_converters(*setting)
    return board, parts


def word(board, number):
    ring = board.hal.ring
    at = 4 * (number % 4096)
    return ring[at] | ring[at + 1] << 8, ring[at + 2] | ring[at + 3] << 8


def since_the_start(board, parts):
    """(samplings before the converters were last set going, ns of those since)."""
    go_ns = max(ns for ns, address, bits in board.chip.bus.writes if (address, bits) == GO)
    rises = [ns for ns in parts.rises_ns if ns >= go_ns]
    return len(parts.rises_ns) - len(rises), rises


def capture_is_right(board, parts, us):
    board.hal.capture_start()
    board.pass_us(us)
    assert board.hal.capture_stop() is False
    count = board.hal.capture_written()
    first, rises = since_the_start(board, parts)
    assert count > 5
    assert len(rises) - 2 <= count <= len(rises)
    for number in range(count):
        assert word(board, number) == words(first + number), f"pair {number}"


def pairs_arrive_whole(new):
    """Also from the second capture on, which began in the middle of a pair of the first."""
    for setting, us in ((FAST, 101), (SLOW, 1510)):
        board, parts = wired(new, setting)
        for more_us in range(6):
            capture_is_right(board, parts, us + more_us)


def pace_is_exact(new):
    for setting in (FAST, SLOW):
        board, parts = wired(new, setting)
        board.hal.capture_start()
        at = board.hal.capture_began_us() + board.chip.timer.offset_us
        board.pass_us(12 * setting[1])
        board.hal.capture_stop()
        pair_us = board.hal.PAIR_US
        assert pair_us == setting[1]
        assert board.hal.SKEW_NS == 0
        assert board.hal.CODE_BITS == 16
        _, rises = since_the_start(board, parts)
        assert len(rises) >= 12
        first = rises[0]
        for number, rise in enumerate(rises):
            assert rise == first + 1000 * setting[1] * number
        assert 0 <= first / 1000 - at < 2


def words_of_before_are_thrown_away(new):
    """A sum was cut short by Ctrl-C: the machine runs and its FIFO is full."""
    board, parts = wired(new)
    board.chip.bus.write(0x50302000, 0x101)
    board.pass_us(60)
    assert len(board.chip.pios[1].machines[0].rx) == 8
    capture_is_right(board, parts, 100)


def dropped_pair_is_told_once(new):
    board, parts = wired(new)
    board.hal.capture_start()
    board.pass_us(50)
    usual, board.chip.dma.grant_ns = board.chip.dma.grant_ns, 60_000
    board.pass_us(200)
    board.chip.dma.grant_ns = usual
    board.pass_us(100)
    assert board.hal.capture_stop() is True
    capture_is_right(board, parts, 100)


def last_pairs_arrive(new):
    """DMA is kept waiting, for less than a pair: all that the PIO made is in the ring."""
    for us in range(100, 104):
        board, parts = wired(new)
        board.chip.dma.grant_ns = 3500
        capture_is_right(board, parts, us)
        assert not board.chip.pios[1].machines[0].rx


def sums_are_of_their_channel(new):
    board, parts = wired(new)
    for channel in (0, 1):
        first = len(parts.rises_ns) + 1  # one sampling goes before those that count
        total = board.hal.read(channel, 8)
        assert total == sum(words(first + number)[channel] for number in range(8))
        rises = len(parts.rises_ns)
        board.pass_us(100)
        assert len(parts.rises_ns) == rises, "the converters are driven on after a sum"
    assert board.hal.read(2, 8) == 8 * 3000, "the capacitor stays on the RP2040's own converter"


def converters_can_be_chosen_again(new):
    board, parts = wired(new)
    capture_is_right(board, parts, 100)
    for setting in (SLOW, FAST, FAST):
        board.hal.use_converters(*setting)
        capture_is_right(board, parts, 14 * setting[1])
    board.hal.use_converters(1, 4, 0, 0)
    board.hal.capture_start()
    board.pass_us(100)
    assert board.hal.capture_stop() is False
    assert word(board, 0) == (1000, 2000)


def missing_converter_reads_full_scale(new):
    board = new()
    board.hal.use_converters(*FAST)
    assert board.hal.read(0, 4) == 4 * 65535
    assert board.hal.read(1, 4) == 4 * 65535


def codes_trip_in_words(new):
    """16-bit codes in the ring's words, seen by the supervision."""
    for channel, bit in ((0, 2), (1, 4)):
        board = new()
        board.chip.pins.drive_from_outside(5, 1)
        board.hal.use_converters(*FAST)
        board.chip.pins.drive_from_outside(DATA_V, 0)
        board.chip.pins.drive_from_outside(DATA_I, 0)
        board.hal.supervise(60_000, 60_000, False)
        board.hal.capture_start()
        board.pass_us(1500)
        assert board.hal.trips() == 0
        board.chip.pins.drive_from_outside((DATA_V, DATA_I)[channel], 1)
        board.pass_us(1100)
        assert board.hal.trips() == bit
        board.hal.capture_stop()
