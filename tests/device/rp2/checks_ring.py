"""Checks of the ring and its DMA: where it lies, what fills it, how much is told of it."""

from checks_converter import capture, only_v_then_i, pair, tagged
from memory_model import ON_MICROPYTHON, SRAM, Heap

RING_BYTES = 16384
CTRL_TRIG, GO = 12, 0x4004E000
W_RING = 9  # place of the ring's address among the words shared with the interrupt


def _channel(board):
    return board.chip.dma.channels[board.module("ring_rp2")._number]


def _with_holes(holes):
    """A heap with free places ahead, each too short for the ring and long enough for a filler."""
    heap = Heap(SRAM + 0x10)
    places = []
    for _ in range(holes):
        places.append(heap.take(0x1400))
        heap.take(16)
    for place in places:
        heap.give_back(place)
    heap.take((-heap.taken[-1][1] & (RING_BYTES - 1)) - 0x1000 & (RING_BYTES - 1))
    return heap


def ring_is_aligned(new):
    heaps = [Heap(SRAM + first) for first in (0x10, 0x3FF0, 0x4000, 0x4010, 0x7130)]
    heaps += [_with_holes(holes) for holes in (1, 4, 12)]
    for heap in heaps[:1] if ON_MICROPYTHON else heaps:
        board = new(heap=heap)
        ring = board.module("ring_rp2")
        address = ring.words[W_RING]
        assert address % RING_BYTES == 0, f"the ring is at {address:#x}"
        assert len(ring.ring) == RING_BYTES == 4 * board.hal.RING_PAIRS
        assert not capture(board, 17_000)
        only_v_then_i(board)


def ring_wraps(new):
    """After its last place comes its first, and nothing beside it is written."""
    board = new()
    board.chip.adc.source = tagged
    board.chip.adc.starts = []
    board.hal.capture_start()
    board.pass_us(4 * (4096 + 300) + 2)
    assert not board.hal.capture_stop()
    first = board.chip.adc.starts[0][0]
    written = board.hal.capture_written()
    assert abs(written - 4396) <= 2
    for number in range(written - 4096, written):
        at = first + 4000 * number
        assert pair(board, number) == (tagged(0, at, 0), tagged(1, at + 2000, 0)), number


def count_goes_on_across_the_wrap(new):
    board = new()
    before = board.chip.adc.conversions
    board.hal.capture_start()
    for _ in range(6):
        board.pass_us(4 * 1500)
        made = (board.chip.adc.conversions - before) // 2
        assert made - 1 <= board.hal.capture_written() <= made
    assert not board.hal.capture_stop()
    kept = board.hal.capture_written()
    assert kept == (board.chip.adc.conversions - before) // 2
    board.pass_us(1000)
    assert board.hal.capture_written() == kept, "the count of a capture that has ended moves"
    assert not capture(board, 400)
    assert abs(board.hal.capture_written() - 100) <= 2
    assert board.hal.capture_stop() is False, "a second stop"
    assert abs(board.hal.capture_written() - 100) <= 2


def long_captures_are_counted(new):
    """Transfers are counted down from 2**31, more than an hour of pairs."""
    board = new()
    board.hal.capture_start()
    board.pass_us(100)
    assert _channel(board).reload == 1 << 31
    _channel(board).count = (1 << 31) - 2 * 0x12345678
    assert board.hal.capture_written() == 0x12345678
    _channel(board).count = 6
    assert board.hal.capture_written() == 0x3FFFFFFD


def requests_of_before_are_forgotten(new):
    """DMA could not keep up, and its channel still counts codes that were thrown away."""
    board = new()
    board.hal.capture_start()
    board.pass_us(50)
    usual, board.chip.dma.grant_ns = board.chip.dma.grant_ns, 1_000_000
    board.pass_us(50)
    board.hal.capture_stop()
    board.chip.dma.grant_ns = usual
    assert _channel(board).credits > 0, "this check has nothing to show"
    assert not capture(board, 200)
    only_v_then_i(board)


def dma_waits_before_the_converters_start(new):
    board = new()
    board.chip.bus.writes = []
    board.hal.capture_start()
    trigger = 0x50000000 + 64 * board.module("ring_rp2")._number + CTRL_TRIG
    order = [address for _, address, _ in board.chip.bus.writes if address in (trigger, GO)]
    assert order == [trigger, GO]
    board.hal.capture_stop()


def halt_leaves_nothing_in_flight(new):
    """Whenever DMA is stopped while codes keep coming, nothing is written afterwards."""
    for phase_ns in range(0, 2000, 40):
        board = new()
        ring = board.module("ring_rp2")
        board.chip.dma.flight_ns = 48
        board.hal.capture_start()
        board.chip.clock.advance(board.chip.clock.now_ns + 20_000 + phase_ns)
        ring.halt(ring.words)
        at = _channel(board).write
        board.pass_us(20)
        assert board.chip.dma.stray == 0, "a word was written by a channel that had been stopped"
        assert _channel(board).write == at
        assert not _channel(board).busy


def abort_is_waited_for(new):
    """A word is long in flight when DMA is stopped and started anew at once."""
    for phase_ns in range(0, 4000, 500):
        board = new()
        ring = board.module("ring_rp2")
        board.hal.capture_start()
        board.chip.dma.flight_ns = 1500
        board.chip.clock.advance(board.chip.clock.now_ns + 20_000 + phase_ns)
        ring.halt(ring.words)
        ring.arm(ring.words)
        board.chip.dma.flight_ns = 24
        board.hal.capture_stop()
        assert not capture(board, 200)
        only_v_then_i(board)
