"""Runs in the MicroPython process: the emulated board behind a byte pipe.

The firmware's `app.py` finds this file only on an emulator's file system.
"""

import os
import select
import struct
import sys
import time

from bus_requests import DEVICE_ID, REQUESTS
from hal_emulated import EmulatedHal


class PipeBus:
    """Numbered requests to the emulated board over an inherited file descriptor."""

    def __init__(self, number):
        self._pipe = open(number, "r+b")
        self._number = 0
        self._heard = b""

    def call(self, name, a, b):
        # Ctrl-C may come in the middle: what was heard stays, and the reply to the call that it
        # ended is told by its number from the reply to this one.
        self._number = (self._number + 1) & 255
        self._pipe.write(struct.pack("<BBqq", self._number, REQUESTS[name], a, b))
        while True:
            self._hear(3)
            size = 3 + int.from_bytes(self._heard[:2], "little")
            self._hear(size)
            reply = self._heard
            self._heard = reply[size:]
            if reply[2] == self._number:
                return reply[3:size]

    def _hear(self, count):
        while len(self._heard) < count:
            piece = self._pipe.read(count - len(self._heard))
            if not piece:
                # The emulator has gone: so has this board's power.
                raise SystemExit
            self._heard += piece


class StandardLink:
    """The host's bytes on stdin and stdout, as on the RP2 port."""

    def __init__(self):
        self._poll = select.poll()
        self._poll.register(sys.stdin, select.POLLIN)

    def wait(self, ms):
        return bool(self._poll.poll(ms))

    def read(self, buffer):
        count = 0
        while count < len(buffer) and self._poll.poll(0):
            byte = sys.stdin.buffer.read(1)
            if not byte:
                break
            buffer[count] = byte[0]
            count += 1
        return count

    def write(self, data):
        return sys.stdout.buffer.write(data)

    def pace(self, us):
        if us:
            time.sleep_us(us)


bus = PipeBus(int(os.getenv("KNEEWISE_BUS")))


def board():
    return EmulatedHal(bus, StandardLink(), DEVICE_ID, int(os.getenv("KNEEWISE_SEED")))
