"""Listening while charging: abort alone is honoured, all else is kept for afterwards.

The abort frame of a session is the same every time (its sequence is 0), so it is prepared at
arming and matched byte for byte, without decoding and without allocating.
"""

from array import array

import micropython
from micropython import const

KEEP = const(512)  # as much as the port's own input ring holds
PIECE = const(16)  # read in one call: 75 us each on a board, and no pulse is renewed before its end

# Words of the state.
S_LENGTH = const(0)  # of the abort frame, its delimiter included; 0 while none is expected
S_MATCHED = const(1)  # bytes of it so far; -1 until the next delimiter, where one differed
S_ABORTED = const(2)
S_KEPT = const(3)
S_DROPPED = const(4)
S_WORDS = const(5)


@micropython.viper
def take(state: ptr32, frame: ptr8, piece: ptr8, count: int, store: ptr8):
    """Match and keep `count` bytes of `piece`."""
    matched = int(state[S_MATCHED])
    kept = int(state[S_KEPT])
    length = int(state[S_LENGTH])
    place = 0
    while place < count:
        byte = int(piece[place])
        if byte == 0:
            if length > 0 and matched == length - 1:
                state[S_ABORTED] = 1
            matched = 0
        elif matched >= 0:
            # Frames begin after a delimiter; once a byte differs, wait for the next one.
            if matched < length and byte == int(frame[matched]):
                matched += 1
            else:
                matched = -1
        if kept < KEEP:
            store[kept] = byte
            kept += 1
        else:
            state[S_DROPPED] = int(state[S_DROPPED]) + 1
        place += 1
    state[S_MATCHED] = matched
    state[S_KEPT] = kept


class Ear:
    """Fixed buffers: `expect` prepares, `listen` looks, `kept` is what was heard meanwhile."""

    def __init__(self, hal):
        self.hal = hal
        self._frame = b"\0"
        self._piece = bytearray(PIECE)
        self._store = bytearray(KEEP)
        self._state = array("i", range(S_WORDS))
        self.expect(b"")

    def expect(self, frame, heard=b""):
        """Prepare for one charge. `frame`: the abort frame with its delimiter; `heard`: what
        came right behind the fire.
        """
        state = self._state
        for word in range(S_WORDS):
            state[word] = 0
        state[S_LENGTH] = len(frame)
        self._frame = frame or b"\0"
        if heard:
            take(state, self._frame, heard, len(heard), self._store)

    @property
    def aborted(self):
        return self._state[S_ABORTED] != 0

    @property
    def dropped(self):
        """Bytes that were heard and not kept."""
        return self._state[S_DROPPED]

    def listen(self):
        """Read PIECE bytes of what is there; True where the host was heard at all."""
        count = self.hal.link_read(self._piece)
        if count:
            take(self._state, self._frame, self._piece, count, self._store)
        return count > 0

    def listen_out(self):
        """Read all that is there, as far as the port's ring holds; before the contact closes."""
        for _ in range(KEEP // PIECE):
            if not self.listen():
                return

    def kept(self):
        """The bytes heard during the charge, as far as they fit."""
        return bytes(self._store[: self._state[S_KEPT]])
