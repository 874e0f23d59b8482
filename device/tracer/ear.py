"""Listening while charging: abort alone is honoured, all else is kept for afterwards.

The abort frame of a session is the same every time (its sequence is 0), so it is prepared at
arming and matched byte for byte, without decoding and without allocating.
"""

KEEP = 512  # as much as the port's own input ring holds


class Ear:
    """Fixed buffers: `expect` prepares, `listen` looks, `kept` is what was heard meanwhile."""

    def __init__(self, hal):
        self.hal = hal
        self.aborted = False
        self.dropped = 0
        self._frame = b""
        self._matched = 0
        self._piece = bytearray(64)
        self._store = bytearray(KEEP)
        self._count = 0

    def expect(self, frame, heard=b""):
        """Prepare for one charge. `frame`: the abort frame with its delimiter; `heard`: what
        came right behind the fire.
        """
        self.aborted = False
        self._frame = frame
        self._matched = 0
        self._count = 0
        for byte in heard:
            self._take(byte)

    def listen(self):
        """Read what is there; True where the host was heard at all."""
        heard = False
        while True:
            count = self.hal.link_read(self._piece)
            if count == 0:
                return heard
            heard = True
            for place in range(count):
                self._take(self._piece[place])

    def _take(self, byte):
        frame = self._frame
        if byte == 0:
            if frame and self._matched == len(frame) - 1:
                self.aborted = True
            self._matched = 0
        elif self._matched >= 0:
            # Frames begin after a delimiter; once a byte differs, wait for the next one.
            if self._matched < len(frame) and byte == frame[self._matched]:
                self._matched += 1
            else:
                self._matched = -1
        if self._count < KEEP:
            self._store[self._count] = byte
            self._count += 1
        else:
            self.dropped += 1

    def kept(self):
        """The bytes heard during the charge, as far as they fit."""
        return bytes(self._store[: self._count])
