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

    def call(self, name, a, b):
        self._pipe.write(struct.pack("<Bqq", REQUESTS[name], a, b))
        length = int.from_bytes(self._exactly(2), "little")
        return self._exactly(length)

    def _exactly(self, count):
        data = b""
        while len(data) < count:
            piece = self._pipe.read(count - len(data))
            if not piece:
                # The emulator has gone: so has this board's power.
                raise SystemExit
            data += piece
        return data


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
