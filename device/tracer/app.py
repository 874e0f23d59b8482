"""Starts the firmware: the board, the large buffers, then all the rest."""

import gc

from tracer.memory import Buffers

GC_THRESHOLD = 8192

loop = None  # the one tracer of this board, with the sweep that it holds


def board():
    """The board that this firmware runs on: an emulator brings its own file."""
    try:
        from emulated_board import board as emulated
    except ImportError:
        from tracer.hal_rp2 import Hal

        return Hal()
    return emulated()


def main():
    """Serve until the host asks for the prompt.

    `main.py` calls this, and a host that finds the prompt does so again: what was held is still
    held, and the session goes on.
    """
    global loop
    if loop is None:
        # Collecting often keeps what lives long together; the heap is small and must not splinter.
        gc.threshold(GC_THRESHOLD)
        hal = board()
        buffers = Buffers()
        # Only now: what is compiled and loaded here would leave no room in one piece for these.
        from tracer.loop import Loop

        gc.collect()
        loop = Loop(hal, buffers)
    loop.run()
