"""The large buffers, each taken once, before the rest of the firmware fragments the heap."""

from array import array

from micropython import const

BINS = const(1024)
BIN_WORDS = const(6)
CONTROL_WORDS = const(13)
UNIT_PAIRS = const(16)
SCRATCH_UNITS = const(48)
MAX_KNOTS = const(512)
MAX_FRAME = const(256)  # compared in held.py, as is the next
RECORD_BYTES = const(40)  # a knot record; compared with the catalogue in held.py


MAX_STRETCHES = const(320)


class Buffers:
    def __init__(self):
        # From a range, because its length is known: the memory is taken once, not grown.
        self.bins = array("I", range(BIN_WORDS * BINS))
        self.control = array("I", range(CONTROL_WORDS))
        self.scratch = array("I", range(BIN_WORDS * SCRATCH_UNITS))
        self.wrapped = array("I", range(UNIT_PAIRS))
        self.records = bytearray(MAX_KNOTS * RECORD_BYTES)
        self.body = bytearray(MAX_FRAME)
        self.coded = bytearray(MAX_FRAME + 3)  # two bytes of COBS, the delimiter
        # For placing the knots (`knots.py`).
        self.xs = array("i", range(BINS))
        self.ys = array("i", range(BINS))
        self.starts = array("i", range(MAX_STRETCHES + 1))
        self.px = array("i", range(MAX_STRETCHES))
        self.py = array("i", range(MAX_STRETCHES))
        self.turns = array("i", range(MAX_STRETCHES))
        self.lengths = array("i", range(MAX_STRETCHES))
        self.shares = array("i", range(MAX_STRETCHES))
        self.firsts = array("i", range(MAX_KNOTS + 1))
