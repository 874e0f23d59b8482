"""The modules `machine`, `time`, `gc` and `micropython` on the modelled chip.

Each does to the registers what MicroPython's own does, in its order. Sources, of MicroPython 1.28:
ports/rp2/machine_pin.c, machine_adc.c, machine_timer.c, machine_wdt.c, modmachine.c, mphalport.c,
extmod/machine_mem.c, py/modmicropython.c, shared/runtime/mpirq.c; pico-sdk 2.2
hardware_watchdog/watchdog.c, hardware_gpio/gpio.c.
"""

import gc

from bus import MASK, Fault
from memory_model import ON_MICROPYTHON
from pins_model import (
    FUNCTION_NULL,
    FUNCTION_SIO,
    PAD_IE,
    PAD_OD,
    PAD_PULL_DOWN,
    PAD_PULL_UP,
)
from rp2040_model import IO_BANK0, PADS_BANK0, SIO, WATCHDOG

CALL_NS = 1000  # of the interpreter, for a call, about
INTERRUPT_NS = 10_000  # of an interrupt until its callback runs, about
OUT_SET, OUT_CLR, OE_SET, OE_CLR = SIO + 0x14, SIO + 0x18, SIO + 0x24, SIO + 0x28
WATCHDOG_MAX_MS = 8388
NON_REBOOT_MAGIC = 0x6AB73121
ADC_EN = 1


def signed(value):
    return value - (1 << 32) if value >> 31 & 1 else value


def choose_function(chip, pin, function):
    """gpio_set_function: the pad's input on, its output not disabled, then the function."""
    pad = PADS_BANK0 + 4 + 4 * pin
    chip.bus.write(pad, chip.bus.read(pad) & ~PAD_OD | PAD_IE)
    chip.bus.write(IO_BANK0 + 4 + 8 * pin, function)


def set_pulls(chip, pin, up, down):
    pad = PADS_BANK0 + 4 + 4 * pin
    pulls = (PAD_PULL_UP if up else 0) | (PAD_PULL_DOWN if down else 0)
    chip.bus.write(pad, chip.bus.read(pad) & ~(PAD_PULL_UP | PAD_PULL_DOWN) | pulls)


def pin_class(chip):
    class Pin:
        IN, OUT, OPEN_DRAIN = 0, 1, 2
        PULL_UP, PULL_DOWN = 1, 2

        def __init__(self, number, mode=None, pull=None, value=None):
            self.number = number
            if mode is not None or pull is not None or value is not None:
                self.init(mode, pull, value)

        def init(self, mode=None, pull=None, value=None):
            chip.clock.spend(CALL_NS)
            if mode == self.OUT:
                if value is not None:
                    self.value(value)
                chip.bus.write(OE_SET, 1 << self.number)
                choose_function(chip, self.number, FUNCTION_SIO)
            elif mode == self.IN:
                chip.bus.write(OE_CLR, 1 << self.number)
                choose_function(chip, self.number, FUNCTION_SIO)
            elif mode is not None:
                raise Fault("this mode of a pin is not modelled")
            pulls = pull or 0
            set_pulls(chip, self.number, pulls & self.PULL_UP, pulls & self.PULL_DOWN)

        def value(self, level=None):
            chip.clock.spend(CALL_NS)
            if level is None:
                return chip.bus.read(SIO + 4) >> self.number & 1
            chip.bus.write(OUT_SET if level else OUT_CLR, 1 << self.number)
            return None

        def on(self):
            self.value(1)

        def off(self):
            self.value(0)

    return Pin


class Alarm:
    """A periodic alarm: the next time counts from the last, however late the callback was."""

    def __init__(self, chip, period_ns, callback):
        self.chip = chip
        self.period_ns = period_ns
        self.callback = callback
        self.due_ns = chip.clock.now_ns + period_ns
        chip.clock.alarms.append(self)

    def cancel(self):
        if self in self.chip.clock.alarms:
            self.chip.clock.alarms.remove(self)

    def interrupt(self):
        self.due_ns += self.period_ns
        self.chip.clock.spend(INTERRUPT_NS)
        try:
            self.callback()
        except (AttributeError, TypeError, ValueError) as error:
            # alarm_callback: printed, and never called again; nobody else is told.
            self.cancel()
            self.error = error


def timer_class(chip):
    class Timer:
        ONE_SHOT, PERIODIC = 0, 1

        def __init__(self, number=-1):
            if number != -1:
                raise ValueError("Timer doesn't exist")
            self.alarm = None
            self.hard = None
            chip.finalisers.append(self.deinit)

        def init(self, mode=PERIODIC, period=MASK, callback=None, hard=False):
            self.deinit()
            if mode != self.PERIODIC:
                raise Fault("one-shot timers are not modelled")
            self.hard = hard
            self.alarm = Alarm(chip, 1_000_000 * period, lambda: callback(self))

        def deinit(self):
            if self.alarm is not None:
                self.alarm.cancel()
                self.alarm = None

    return Timer


def wdt_class(chip):
    clear, put = WATCHDOG + 0x3000, WATCHDOG + 0x2000

    class WDT:
        def __init__(self, timeout=5000):
            if timeout > WATCHDOG_MAX_MS:
                raise ValueError("timeout exceeds 8388")
            chip.bus.write(WATCHDOG + 0x1C, NON_REBOOT_MAGIC)
            chip.bus.write(clear, 1 << 30)
            chip.bus.write(clear, 0x07000000)
            self.load = 2000 * timeout
            self.feed()
            chip.bus.write(put, 1 << 30)

        def feed(self):
            chip.bus.write(WATCHDOG + 4, self.load)

    return WDT


class Mem32:
    """machine.mem32: a signed number comes back, as from the board's 32 bits."""

    def __init__(self, bus):
        self.bus = bus

    def __getitem__(self, address):
        return signed(self.bus.read(address))

    def __setitem__(self, address, value):
        self.bus.write(address, value)


class FakeMachine:
    def __init__(self, chip):
        self.chip = chip
        self.mem32 = Mem32(chip.bus)
        self.Pin = pin_class(chip)
        self.Timer = timer_class(chip)
        self.WDT = wdt_class(chip)

    def ADC(self, pin):
        if not self.chip.bus.read(0x4004C000) & ADC_EN:
            self.chip.adc.reset()
            self.chip.bus.write(0x4004C000, ADC_EN)
        choose_function(self.chip, pin, FUNCTION_NULL)
        set_pulls(self.chip, pin, False, False)
        pad = PADS_BANK0 + 4 + 4 * pin
        self.chip.bus.write(pad, self.chip.bus.read(pad) & ~PAD_IE)

    def freq(self):
        return self.chip.freq_hz

    def unique_id(self):
        return self.chip.flash_id

    def disable_irq(self):
        self.chip.bus.watch()
        before = self.chip.clock.interrupts_on
        self.chip.clock.interrupts_on = False
        return before

    def enable_irq(self, state):
        self.chip.clock.interrupts_on = state
        self.chip.clock.spend(0)
        self.chip.bus.watch()

    def reset(self):
        self.chip.bus.write(WATCHDOG + 0x2000, 1 << 31)


class FakeTime:
    def __init__(self, chip):
        self.chip = chip

    def ticks_us(self):
        self.chip.clock.spend(CALL_NS)
        return self.chip.timer.us() & 0x3FFFFFFF

    def sleep_us(self, us):
        self.chip.clock.sleep(1000 * us)


class FakeGc:
    def __init__(self, heap):
        self.heap = heap
        self.collected = []  # depth of the heap's lock at each collection

    def collect(self):
        self.collected.append(self.heap.depth)
        if ON_MICROPYTHON:
            gc.collect()


class FakeMicropython:
    """Locks of the heap are counted: each needs its own unlock, and one too many wraps around."""

    def __init__(self):
        self.depth = 0
        self.emergency_bytes = 0

    def const(self, value):
        return value

    def alloc_emergency_exception_buf(self, size):
        self.emergency_bytes = size

    def heap_lock(self):
        self.depth += 1

    def heap_unlock(self):
        if self.depth == 0:
            raise Fault("the heap was unlocked once too often: locked for good")
        self.depth -= 1
