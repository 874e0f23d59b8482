"""The large buffers, each taken once, before the rest of the firmware fragments the heap."""

from array import array

from micropython import const

BIN_WORDS = const(4088)  # a multiple of 8, for merging
CONTROL_WORDS = const(11)
PLACING_WORDS = const(55)
MAX_KNOTS = const(512)
MAX_FRAME = const(256)  # compared in held.py


class Buffers:
    def __init__(self):
        # From a range, because its length is known: the memory is taken once, not grown.
        self.bins = array("I", range(BIN_WORDS))
        self.control = array("I", range(CONTROL_WORDS))
        self.body = bytearray(MAX_FRAME)
        self.coded = bytearray(MAX_FRAME + 3)  # two bytes of COBS, the delimiter
        # First bins of the knots and their end, and a trial of the same (`knots.py`).
        self.cuts = array("H", range(MAX_KNOTS + 1))
        self.trial = array("H", range(MAX_KNOTS + 1))
        self.placing = array("I", range(PLACING_WORDS))
