"""Goes to the chip as /emulated_board.py: the board of hal_rp2.py, with one fault in mid-charge.

/fault.txt holds the fault's name, the level of the pulse pin at which it strikes, and how often
the pulse is renewed before. GP15 goes high as it strikes. After a reset nothing strikes again.
"""

import os

import machine
import micropython
from machine import Pin
from micropython import const

from tracer import hal_rp2, ring_rp2

_PULSE = const(2)


@micropython.viper
def wait_for_level(level: int):
    while (ptr32(0xD0000004)[0] >> _PULSE) & 1 != level:
        pass


@micropython.viper
def native_loop():
    while True:
        pass


@micropython.viper
def break_supervision(timer):
    ptr32(ring_rp2.words)[0] = int(timer.no_such_thing)


def loop():
    while True:
        pass


def fail():
    raise ValueError("injected")


def exit_system():
    raise SystemExit


def interrupt():
    raise KeyboardInterrupt


def allocate():
    bytearray(64)


def starve_watchdog():
    machine.WDT(timeout=2)
    while True:
        pass


def stop_timer():
    ring_rp2.timer.deinit()


def break_timer():
    ring_rp2.timer.deinit()
    ring_rp2.timer.init(
        period=1, mode=machine.Timer.PERIODIC, callback=break_supervision, hard=True
    )


FAULTS = {
    "loop": loop,
    "native loop": native_loop,
    "timer stopped": stop_timer,
    "timer callback fails": break_timer,
    "exception": fail,
    "allocation": allocate,
    "SystemExit": exit_system,
    "Ctrl-C": interrupt,
    "soft reset": machine.soft_reset,
    "reset": machine.reset,
    "watchdog": starve_watchdog,
}


class Faulty(hal_rp2.Hal):
    def __init__(self):
        super().__init__()
        self._mark = Pin(15, Pin.OUT, value=0)
        self._renewals = -1
        try:
            with open("/fault.txt") as file:
                name, level, renewals = file.read().split(",")
            os.remove("/fault.txt")
            self._fault = FAULTS[name]
            self._level = int(level)
            self._renewals = int(renewals)
        except OSError:
            pass

    def pulse(self, us):
        super().pulse(us)
        if us and self._renewals >= 0:
            self._renewals -= 1
            if self._renewals < 0:
                wait_for_level(self._level)
                self._mark.on()
                self._fault()


def board():
    return Faulty()
