"""Checks of the clocks: the 64-bit one at its carry, the short one, when a capture began."""

CARRY = 1 << 32


def now_is_right_at_the_carry(new):
    """For every moment of the carry between the two reads; the time never goes back."""
    for early_ns in range(0, 1200, 24):
        board = new()
        board.chip.timer.set_us(CARRY - 1)
        board.chip.clock.advance(board.chip.clock.now_ns + 1000 - min(early_ns, 1000))
        before = board.chip.timer.us()
        for _ in range(4):
            now = board.hal.now_us()
            after = board.chip.timer.us()
            assert before <= now <= after, f"{now - CARRY} us from the carry, not {before - CARRY}"
            before = now


def _began(new, us, early_ns):
    """capture_began_us, and the time of the first conversion by the same clock."""
    board = new()
    board.chip.timer.set_us(us)
    board.chip.clock.advance(board.chip.clock.now_ns + 1000 - early_ns)
    board.chip.adc.starts = []
    board.hal.capture_start()
    board.pass_us(100)
    told = board.hal.capture_began_us()
    first_ns = board.chip.adc.starts[0][0]
    board.hal.capture_stop()
    assert board.hal.capture_began_us() == told
    return told, board.chip.timer.offset_us + first_ns / 1000


def began_is_the_first_conversion(new):
    for us in (CARRY - 3, CARRY - 2, CARRY - 1, 12_345, 3 * CARRY + 2_900_000_000):
        for early_ns in range(0, 1000, 40):
            told, true = _began(new, us, early_ns)
            assert -1.5 < told - true <= 0, f"began {told - true} us off"


def no_interrupt_between_time_and_start(new):
    """A visit that comes just then is done before or after, and takes its 10 us."""
    for early_ns in range(0, 4000, 50):
        board = new()
        board.hal.supervise(4095, 4095, False)
        board.chip.clock.sleep(1_000_000 - early_ns)
        board.chip.adc.starts = []
        board.hal.capture_start()
        assert board.chip.clock.interrupts_on
        board.pass_us(2000)
        assert board.hal.supervision_ticks() in (2, 3)
        told = board.hal.capture_began_us()
        first = board.chip.timer.offset_us + board.chip.adc.starts[0][0] / 1000
        assert -1.5 < told - first <= 0, f"began {told - first} us off"


def ticks_wrap(new):
    """ticks_us is the clock modulo 2**30."""
    board = new()
    for us in (0, (1 << 30) - 5, 1 << 30, (1 << 31) + 7, CARRY - 1, CARRY + 9):
        board.chip.timer.set_us(us)
        ticks = board.hal.ticks_us()
        assert 0 <= ticks < 1 << 30
        assert (ticks - us) & 0x3FFFFFFF <= 2
    at = board.us()
    board.hal.wait_us(250)
    assert abs(board.us() - at - 250) < 1
