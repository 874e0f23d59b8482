"""The link's bytes: USB serial by way of stdin and stdout.

Comes in: a buffer to fill, bytes to send. Goes out: counts, short where the other side is
slow. Frames and their meaning live elsewhere.
"""

import select
import sys


class UsbSerial:
    """`wait`, `read` and `write`; `read` and `wait` do not allocate after the first call."""

    def __init__(self):
        self._in = sys.stdin.buffer
        self._out = sys.stdout.buffer
        self._byte = bytearray(1)
        self._poll = select.poll()
        self._poll.register(sys.stdin, select.POLLIN)
        self._poll.ipoll(0)

    def wait(self, ms):
        """Return when a byte can be read, or after `ms`."""
        self._poll.ipoll(ms)

    def read(self, buffer):
        """Read what is there into `buffer`; the count read.

        `readinto` blocks for as many bytes as it was asked for, so it is asked for one at a
        time, and only where the poll says that there is one.
        """
        end = len(buffer)
        byte = self._byte
        count = 0
        while count < end:
            for _ in self._poll.ipoll(0):
                break
            else:
                break
            self._in.readinto(byte)
            buffer[count] = byte[0]
            count += 1
        return count

    def write(self, data):
        """Write; the count written. It is short after 500 ms without progress."""
        return self._out.write(data) or 0
