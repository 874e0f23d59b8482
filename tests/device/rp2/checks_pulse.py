"""Checks of the make-and-break output: it ends by itself, stops at once, and is left alone."""

from rp2040_model import PULSE, RELAY, RELEASE, ZERO_INPUT

PERIOD_US = 39
CTRL, CTRL_CLR, TXF0 = 0x50200000, 0x50203000, 0x50200010
MEMORY = 0x50200048
OUT_SET, OE_CLR = 0xD0000014, 0xD0000028
FUNCTION_SIO, FUNCTION_PIO0 = 5, 6


def edges(board, since_us=0):
    """(us, level) of the pulse pin."""
    found = [(ns / 1000, level) for ns, pin, level in board.chip.pins.edges if pin == PULSE]
    return [edge for edge in found if edge[0] >= since_us]


def is_low(board, pin=PULSE):
    """Driven, not only pulled."""
    return board.chip.pins.driven(pin) == 0


def ends_in_time(board, at_us, us):
    """Low for good, `us` after `at_us` at the latest."""
    last = edges(board)[-1]
    assert last[1] == 0
    assert is_low(board)
    assert last[0] <= at_us + us, f"the pulse ends {last[0] - at_us} us after it was asked for {us}"


def wave_is_of_its_period(new):
    board = new()
    at = board.us()
    board.hal.pulse(5000)
    board.pass_us(6000)
    rises = [us for us, level in edges(board, at) if level == 1]
    falls = [us for us, level in edges(board, at) if level == 0][-len(rises) :]
    assert len(rises) >= 5000 // PERIOD_US - 2
    for number, (rise, fall) in enumerate(zip(rises, falls)):  # noqa: B905
        assert abs(rise - rises[0] - PERIOD_US * number) < 0.01
        assert abs(fall - rise - 18) < 0.01
    ends_in_time(board, at, 5000)


def never_longer_than_asked(new):
    board = new()
    for us in (0, 1, 39, 77, 78, 79, 117, 500, 5000, 19_000):
        at = board.us()
        board.hal.pulse(us)
        board.pass_us(us + 200)
        ends_in_time(board, at, us)
        rises = [edge for edge in edges(board, at) if edge[1] == 1]
        assert len(rises) == max(us // PERIOD_US - 1, 0), us


def bounded_whatever_the_word(new):
    """No number, and no garbled word, keeps the contact closed for longer than 511 periods."""
    bound_us = 512 * PERIOD_US
    board = new()
    at = board.us()
    board.hal.pulse(10_000_000)
    board.pass_us(bound_us + 1000)
    ends_in_time(board, at, bound_us)
    board.hal.pulse(5000)
    for word in (0xFFFFFFFF, 0x3FF, 0x80000400 | 0x1FF):
        at = board.us()
        board.chip.bus.write(TXF0, word)
        board.pass_us(2 * bound_us)
        ends_in_time(board, at, bound_us + PERIOD_US)


def renewal_replaces(new):
    """At any moment of a period: what was left before does not count."""
    for phase_us in range(0, 2 * PERIOD_US, 3):
        board = new()
        board.hal.pulse(15_000)
        board.pass_us(500 + phase_us)
        at = board.us()
        board.hal.pulse(1000)
        board.pass_us(16_000)
        ends_in_time(board, at, 1000)


def queued_words_do_not_extend(new):
    """Many renewals within one period: the last one holds."""
    board = new()
    board.hal.pulse(15_000)
    board.pass_us(300)
    for _ in range(6):
        board.hal.pulse(19_000)
    at = board.us()
    board.hal.pulse(800)
    board.pass_us(20_000)
    ends_in_time(board, at, 800)


def _stops_low(new, stop):
    for phase_us in range(0, PERIOD_US, 2):
        board = new()
        board.hal.pulse(15_000)
        board.pass_us(1000 + phase_us)
        # Whatever SIO held for this pin before.
        board.chip.bus.write(OUT_SET, 1 << PULSE)
        board.chip.bus.write(OE_CLR, 1 << PULSE)
        board.chip.bus.writes = []
        stop(board)
        assert is_low(board), "the pin is not driven low"
        assert board.chip.pins.function[PULSE] == FUNCTION_SIO
        (halted,) = [ns for ns, address, _ in board.chip.bus.writes if address == CTRL_CLR]
        assert edges(board)[-1][0] * 1000 <= halted, (
            "the machine stood still before the pin was low"
        )
        board.pass_us(20_000)
        assert edges(board)[-1][0] * 1000 <= halted, "the pin moved after the stop"
        assert not board.chip.pios[0].machines[0].enabled
        at = board.us()
        board.hal.pulse(1000)
        board.pass_us(2000)
        ends_in_time(board, at, 1000)


def stop_is_low_first(new):
    _stops_low(new, lambda board: board.hal.pulse(0))


def safe_stops_the_pulse(new):
    _stops_low(new, lambda board: board.hal.safe())


def pin_is_low_as_pio_takes_it(new):
    """Also where the wave had stopped while it was high."""
    for phase_us in range(0, PERIOD_US, 2):
        board = new()
        board.hal.pulse(15_000)
        board.pass_us(1000 + phase_us)
        board.hal.pulse(0)
        board.chip.bus.writes = []
        at = board.us()
        board.hal.pulse(1000)
        board.pass_us(100)
        enabled = [
            ns
            for ns, address, bits in board.chip.bus.writes
            if address == CTRL + 0x2000 and bits == 1
        ]
        assert len(enabled) == 1
        rises = [us for us, level in edges(board, at) if level == 1]
        assert rises[0] * 1000 > enabled[0] + 3000, "high before the program said so"


def contact_is_changed_at_rest(new):
    """The wave of before is low and its machine stands still before its program goes."""
    for phase_us in range(0, PERIOD_US, 3):
        for bare in (False, True):
            board = new()
            board.hal.pulse(15_000)
            board.pass_us(1000 + phase_us)
            board.chip.bus.writes = []
            at = board.us()
            board.hal.use_contact(bare)
            writes = board.chip.bus.writes
            halted = [ns for ns, address, _ in writes if address == CTRL_CLR]
            loaded = [ns for ns, address, _ in writes if MEMORY <= address < MEMORY + 128]
            assert len(loaded) >= 5
            assert halted[0] < loaded[0], "the program went while it ran"
            assert [level for _, level in edges(board, at)][1:] == []
            assert is_low(board)
            assert board.chip.pins.function[PULSE] == FUNCTION_SIO
            board.pass_us(20_000)
            assert edges(board)[-1][0] * 1000 <= halted[0], "the pin moved after the stop"


def contact_can_be_changed_again(new):
    """The old program makes room, and each has its own bound."""
    board = new()
    for bare in (True, False, True, True, False, False, True, False):
        board.hal.use_contact(bare)
        at = board.us()
        board.hal.pulse(30_000)
        board.pass_us(40_000)
        rises = [edge for edge in edges(board, at) if edge[1] == 1]
        assert len(rises) == (30_000 // PERIOD_US - 1 if bare else 511)
        ends_in_time(board, at, 30_000 if bare else 512 * PERIOD_US)


def outputs_do_as_told(new):
    board = new()
    hal = board.hal
    for pin, act in ((RELAY, hal.relay), (ZERO_INPUT, hal.zero_input)):
        for on in (True, False):
            act(on)
            assert board.chip.pins.driven(pin) == on
    hal.bleed(False)
    assert board.chip.pins.driven(RELEASE) == 1
    hal.bleed(True)
    assert board.chip.pins.driven(RELEASE) == 0
    hal.relay(True)
    hal.bleed(False)
    hal.pulse(5000)
    hal.safe()
    for pin in (PULSE, RELAY, RELEASE):
        assert is_low(board, pin), pin


def nothing_else_takes_the_pin(new):
    """All that a sweep does beside the pulse leaves its pin alone."""
    board = new()
    hal = board.hal
    hal.pulse(15_000)
    hal.relay(True)
    hal.bleed(False)
    hal.zero_input(True)
    hal.capture_start()
    hal.supervise(4095, 4095, False)
    hal.watchdog(1000)
    hal.quiet_begin()
    board.pass_us(3000)
    hal.quiet_end()
    hal.capture_stop()
    hal.supervise_end()
    hal.read(2, 16)
    hal.bleed(True)
    hal.relay(False)
    hal.watchdog(0)
    taken = [function for _, pin, function in board.chip.pins.chosen if pin == PULSE]
    assert taken == [FUNCTION_SIO, FUNCTION_PIO0, FUNCTION_SIO, FUNCTION_PIO0]
    assert board.chip.pins.function[PULSE] == FUNCTION_PIO0
    board.pass_us(20_000)
    assert is_low(board)
