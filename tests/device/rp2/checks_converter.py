"""Checks of the RP2040's own converter: what comes into the ring, in which order, and what is told.

A check takes `new`, which makes a `Board`. It passes with the firmware as it is, and fails with
each of the changes that `rules.py` names beside it.
"""

VOLTAGE, CURRENT, CAPACITOR = 0, 1, 2
CODES = (1000, 2000, 3000)
CS, FCS = 0x4004C000, 0x4004C008


def tagged(channel, ns, before):
    """A code that tells its channel and when its conversion began."""
    return 1024 * channel + ns // 2000 % 1000


def pair(board, number):
    ring = board.hal.ring
    at = 4 * (number % 4096)
    return ring[at] | ring[at + 1] << 8, ring[at + 2] | ring[at + 3] << 8


def pairs(board):
    """All pairs of the last capture that are in the ring still."""
    written = board.hal.capture_written()
    return [pair(board, number) for number in range(max(written - 4096, 0), written)]


def only_v_then_i(board):
    found = pairs(board)
    assert len(found) > 10, "hardly any pairs came"
    for number, codes in enumerate(found):
        assert codes == (1000, 2000), f"pair {number} is {codes}"


def sum_cut_short(chip):
    """As Ctrl-C in the middle of a sum leaves the converter: running, its FIFO full of another
    channel.
    """
    chip.bus.write(FCS, 0xC01)
    chip.bus.write(CS, 1 | CAPACITOR << 12)
    chip.bus.write(CS + 0x2000, 8)
    chip.clock.advance(chip.clock.now_ns + 101_300)


def capture(board, us):
    board.hal.capture_start()
    board.pass_us(us)
    return board.hal.capture_stop()


def fifo_is_drained(new):
    board = new()
    sum_cut_short(board.chip)
    assert not capture(board, 500)
    only_v_then_i(board)


def conversion_under_way_is_waited_for(new):
    """However far a conversion of another channel has come, none of it gets into the capture."""
    for phase_ns in range(0, 2000, 125):
        board = new()
        sum_cut_short(board.chip)
        board.chip.clock.advance(board.chip.clock.now_ns + phase_ns)
        assert not capture(board, 100)
        only_v_then_i(board)


def voltage_comes_first(new):
    """Also after a capture that ended between V and I."""
    board = new()
    for us in range(101, 109):
        assert not capture(board, us)
        only_v_then_i(board)


def dropped_conversion_is_told_once(new):
    board = new()
    board.hal.capture_start()
    board.pass_us(100)
    usual, board.chip.dma.grant_ns = board.chip.dma.grant_ns, 30_000
    board.pass_us(100)
    board.chip.dma.grant_ns = usual
    board.pass_us(100)
    assert board.hal.capture_stop() is True, "a conversion was dropped and nothing said so"
    assert capture(board, 100) is False, "a drop was told again of a capture without one"
    only_v_then_i(board)


def last_codes_arrive(new):
    """The bus makes DMA wait nearly a whole conversion."""
    for us in range(50, 56):
        board = new()
        before = board.chip.adc.conversions
        board.chip.dma.grant_ns = 1800
        assert not capture(board, us)
        made = board.chip.adc.conversions - before
        assert board.hal.capture_written() == made // 2, "the last codes are missing"


def pace_and_skew(new):
    """A pair every 4 us, I 2 us after V, 96 cycles of 48 MHz each."""
    board = new()
    board.chip.adc.source = tagged
    board.chip.adc.starts = []
    assert not capture(board, 2000)
    first = board.chip.adc.starts[0][0]
    for number, (ns, channel) in enumerate(board.chip.adc.starts):
        assert (ns, channel) == (first + 2000 * number, number % 2)
    for number, (v, i) in enumerate(pairs(board)):
        assert v == tagged(VOLTAGE, first + 4000 * number, 0)
        assert i == tagged(CURRENT, first + 4000 * number + 2000, 0)
    assert board.hal.PAIR_US == 4
    assert board.hal.SKEW_NS == 2000
    assert abs(board.hal.capture_written() - 500) <= 2


def sums_are_of_their_channel_alone(new):
    """Right after a change of channel the converter holds charge of the one before."""
    board = new()
    board.chip.adc.source = lambda channel, ns, before: CODES[channel] + 500 * (before != channel)
    for channel in (CAPACITOR, VOLTAGE, CURRENT, CAPACITOR):
        assert board.hal.read(channel, 16) == 16 * CODES[channel]
        made = board.chip.adc.conversions
        board.pass_us(100)
        assert board.chip.adc.conversions == made, "the converter goes on after a sum"
        assert not board.chip.adc.fifo


def analogue_pins_have_no_digital_side(new):
    board = new()
    for pin in (26, 27, 28):
        assert board.chip.pins.function[pin] == 31
        assert board.chip.pins.pad[pin] & 0x4C == 0, "pulls or the digital input are on"
