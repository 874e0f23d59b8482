"""Checks of resets, the watchdog, the quiet and the link."""

from bus import Fault
from checks_converter import CAPACITOR, capture, only_v_then_i
from checks_pulse import FUNCTION_SIO, is_low
from rp2040_model import PULSE, RELAY, RELEASE, STOP_LOOP
from watchdog_model import BoardReset

POWER_ON, PIN, WATCHDOG, SOFT = 1, 2, 3, 4
TIMER3 = 0x5000042C


def bites_within(board, ms):
    try:
        board.pass_us(1000 * ms)
    except BoardReset:
        return True
    return False


# -- a start with the board in any state ---------------------------------------------------


def _all_running(new, phase_us):
    board = new()
    board.chip.pins.drive_from_outside(STOP_LOOP, 1)
    board.hal.relay(True)
    board.hal.bleed(False)
    board.hal.capture_start()
    board.hal.supervise(4095, 4095, True)
    board.hal.pulse(19_000)
    board.pass_us(2000 + phase_us)
    return board


def _all_at_rest(board):
    for pin in (PULSE, RELAY, RELEASE):
        assert is_low(board, pin), f"GP{pin} is not low"
    assert board.chip.pins.function[PULSE] == FUNCTION_SIO
    made = board.chip.adc.conversions
    assert not any(machine.enabled for pio in board.chip.pios for machine in pio.machines)
    assert not any(channel.busy for channel in board.chip.dma.channels)
    assert not board.chip.clock.alarms, "the supervision of before goes on"
    last = board.chip.pins.edges[-1]
    board.pass_us(25_000)
    assert board.chip.adc.conversions == made, "the converter runs on"
    assert board.chip.pins.edges[-1] == last, "a pin moved by itself"
    assert board.hal.capture_written() == 0
    assert not capture(board, 500)
    only_v_then_i(board)


def start_after_a_soft_reset_is_safe(new):
    """A soft reset stops PIO where it is and leaves the pins driven and the converter running."""
    stuck = set()
    for phase_us in range(0, 39, 6):
        board = _all_running(new, phase_us)
        board.chip.soft_reset()
        stuck.add(board.chip.pins.driven(PULSE))
        assert board.chip.pins.driven(RELAY) == 1
        made = board.chip.adc.conversions
        board.pass_us(100)
        assert board.chip.adc.conversions > made
        board.start()
        _all_at_rest(board)
    assert stuck == {0, 1}, "this check must see the pulse stuck at both levels"


def second_object_takes_over(new):
    """PIO, DMA, converter and supervision of the first are still running."""
    for phase_us in range(0, 39, 13):
        board = _all_running(new, phase_us)
        board.hal = board.module("hal_rp2").Hal()
        _all_at_rest(board)


def second_object_stops_spi(new):
    board = new()
    board.hal.use_converters(2, 4, 20_000, 700)
    board.hal.capture_start()
    board.pass_us(100)
    assert board.chip.pios[1].machines[0].enabled
    board.hal = board.module("hal_rp2").Hal()
    _all_at_rest(board)


def reset_cause_is_told(new):
    board = new()
    assert board.hal.reset_cause() == POWER_ON
    board.soft_reset()
    assert board.hal.reset_cause() == SOFT
    board.chip.run_pin()
    board.start()
    assert board.hal.reset_cause() == PIN
    board.hal.watchdog(100)
    assert bites_within(board, 200)
    board.start()
    assert board.hal.reset_cause() == WATCHDOG, "the RUN pin's flag is still there, from before"
    board.soft_reset()
    assert board.hal.reset_cause() == SOFT, "the watchdog's reason is still there, from before"
    try:
        board.machine.reset()
        raise AssertionError("machine.reset() came back")
    except BoardReset:
        board.start()
    assert board.hal.reset_cause() == SOFT
    board.chip.power_on()
    board.start()
    assert board.hal.reset_cause() == POWER_ON
    assert board.chip.bus.load(TIMER3) != 0


# -- the watchdog --------------------------------------------------------------------------


def watchdog_bites_unfed(new):
    for ms in (100, 2000):
        board = new()
        board.hal.watchdog(ms)
        assert not bites_within(board, ms - 2)
        assert bites_within(board, 4)


def watchdog_is_fed(new):
    board = new()
    for _ in range(50):
        board.hal.watchdog(100)
        assert not bites_within(board, 90)
    board.hal.watchdog(1000)
    assert not bites_within(board, 900), "a longer time was not taken over"
    board.hal.watchdog(50)
    assert bites_within(board, 60), "a shorter time was not taken over"


def watchdog_can_be_stopped(new):
    board = new()
    for _ in range(2):
        board.hal.watchdog(500)
        board.pass_us(1000)
        board.hal.watchdog(0)
        assert not bites_within(board, 20_000), "the watchdog was told to stop"
    assert board.chip.bus.load(0x40058000) >> 30 & 1 == 0
    board.hal.watchdog(500)
    assert bites_within(board, 600), "and could not be started again"


def watchdog_takes_any_time(new):
    """8388 ms is the most that the chip counts."""
    board = new()
    board.hal.watchdog(120_000)
    assert not bites_within(board, 8380)
    assert bites_within(board, 20)


def watchdog_outlives_a_soft_reset(new):
    board = new()
    board.hal.watchdog(1000)
    board.soft_reset()
    assert bites_within(board, 1001)
    board.start()
    board.hal.watchdog(1000)
    board.soft_reset()
    board.hal.watchdog(0)
    assert not bites_within(board, 20_000)


# -- the quiet -----------------------------------------------------------------------------


def lock_is_balanced(new):
    board = new()
    hal, heap = board.hal, board.micropython
    hal.quiet_end()
    assert heap.depth == 0
    for _ in range(3):
        hal.quiet_begin()
        assert heap.depth == 1
        hal.quiet_begin()
        assert heap.depth == 1, "locked twice: one end does not unlock"
        hal.quiet_end()
        assert heap.depth == 0
        hal.quiet_end()
        assert heap.depth == 0


def heap_is_collected_before_the_lock(new):
    board = new()
    board.gc.collected = []
    board.hal.quiet_begin()
    assert board.gc.collected == [0]
    board.hal.quiet_end()


def emergency_buffer_is_there(new):
    assert new().micropython.emergency_bytes >= 64


# -- the link ------------------------------------------------------------------------------


def bytes_are_read_one_by_one(new):
    """stdin blocks for all that it is asked for."""
    board = new()
    buffer = bytearray(10)
    assert board.hal.link_read(buffer) == 0
    board.serial.incoming = bytearray(b"abc")
    assert board.hal.link_read(buffer) == 3
    assert bytes(buffer[:3]) == b"abc"
    board.serial.incoming = bytearray(range(15))
    assert board.hal.link_read(buffer) == 10
    assert bytes(board.serial.incoming) == bytes(range(10, 15))
    assert max(board.serial.asked) == 1
    board.serial.polls_ms = []
    at = board.us()
    board.serial.incoming = bytearray()
    board.hal.link_read(buffer)
    assert board.us() - at < 1000, "reading waited"
    board.hal.link_wait(7)
    assert 7000 <= board.us() - at < 8000


def short_write_is_told(new):
    board = new()
    assert board.hal.link_write(b"abcdef") == 6
    board.serial.room = 4
    assert board.hal.link_write(b"abcdef") == 4
    assert board.hal.link_write(b"abcdef") == 0
    assert bytes(board.serial.sent) == b"abcdefabcd"


def unknown_converters_are_refused(new):
    board = new()
    for asked in ((1, 5, 0, 0), (3, 4, 0, 0), (2, 4, 20_000, 60_000)):
        try:
            board.hal.use_converters(*asked)
            raise Fault(f"converters {asked} were accepted")
        except ValueError:
            pass
    assert board.hal.read(CAPACITOR, 1) == 3000
