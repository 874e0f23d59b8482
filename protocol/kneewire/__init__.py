"""The wire of Kneewise: frames, messages and their catalogue.

One source for both sides: it runs on CPython and, unchanged, on MicroPython. Bytes in,
frames and messages out; it knows no serial port and keeps no clock. `protocol/SPEC.md` says
in words what this package does in code.
"""

PROTOCOL = (0, 3)  # major, minor
