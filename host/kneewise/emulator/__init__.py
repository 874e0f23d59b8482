"""The emulated tracer: an analogue world, a board on it, and rungs that run the firmware.

It sits beside the instrument: the instrument talks to it through a port, as to any tracer.
"""
