"""Goes to the chip as /emulated_board.py: the board of hal_rp2.py, keeping figures of a charge.

`report()` gives them as a dict once the prompt is there. The firmware's files are untouched;
what is wrapped is wrapped here, outside any capture, and keeps its figures in words that are
there already, so that watching allocates nothing either.
"""

import gc
from array import array

import micropython
from micropython import const

from tracer import hal_rp2

W_STARTED = const(0)
W_STOPPED = const(1)
W_VISITED = const(2)  # when the reader came last
W_GAP = const(3)  # longest between two visits, us
W_WAITED = const(4)  # us
W_BEHIND = const(5)  # most pairs unread when a visit began
W_SPAN = const(6)  # most pairs between the oldest unread and the newest when a visit ended
W_VISITS = const(7)
W_STAMP = const(8)
W_LOCKED = const(9)
W_STEP = const(10)
W_PLACING = const(11)  # us spent in placing
WORDS = const(12)

words = array("i", bytes(4 * WORDS))
heap = {}


@micropython.viper
def stamp(into: ptr32, place: int):
    """Microseconds since boot, 30 bits of them."""
    into[place] = ptr32(0x40054028)[0] & 0x3FFFFFFF


def since(place):
    stamp(words, W_STAMP)
    return words[W_STAMP] - words[place] & 0x3FFFFFFF


def free():
    gc.collect()
    heap["used"] = max(heap.get("used", 0), gc.mem_alloc())
    return gc.mem_free()


def used():
    gc.collect()
    return gc.mem_alloc()


class Watched(hal_rp2.Hal):
    def __init__(self):
        super().__init__()
        self._counting = False
        self._wrapped = False

    def link_wait(self, ms):
        if "after_start" not in heap:
            heap["after_start"] = free()
        super().link_wait(ms)

    def watchdog(self, ms):
        if ms and not self._watchdog_ms and not self._counting:
            heap["armed"] = free()
        super().watchdog(ms)

    def quiet_begin(self):
        if not self._wrapped:
            wrap(self)
            self._wrapped = True
        super().quiet_begin()

    def capture_start(self):
        super().capture_start()
        for place in range(WORDS):
            words[place] = 0
        try:
            bytearray(64)
        except MemoryError:
            words[W_LOCKED] = 1
        stamp(words, W_STARTED)
        stamp(words, W_VISITED)
        self._counting = True

    def capture_stop(self):
        if self._counting:
            stamp(words, W_STOPPED)
        self._counting = False
        return super().capture_stop()

    def wait_us(self, us):
        if not self._counting:
            return super().wait_us(us)
        stamp(words, W_STAMP)
        began = words[W_STAMP]
        super().wait_us(us)
        stamp(words, W_STAMP)
        words[W_WAITED] += words[W_STAMP] - began & 0x3FFFFFFF


def wrap(hal):
    """Only now, with the firmware loaded as it would be without us."""
    from tracer import capture, held, knots

    drain = capture.Capture.drain
    step = knots.Placer.step
    keep = held.Held.keep

    def watched_drain(self, written):
        if not hal._counting:  # `finish` drains too, with the contact open
            return drain(self, written)
        words[W_VISITS] += 1
        gap = since(W_VISITED)
        stamp(words, W_VISITED)
        words[W_GAP] = max(words[W_GAP], gap)
        read = self.read
        words[W_BEHIND] = max(words[W_BEHIND], written - read & 0x3FFFFFFF)
        drain(self, written)
        span = hal.capture_written() - read & 0x3FFFFFFF
        words[W_SPAN] = max(words[W_SPAN], span)

    def timed_step(self):
        stamp(words, W_STEP)
        done = step(self)
        words[W_PLACING] += since(W_STEP)
        return done

    def timed_keep(*arguments):
        keep(*arguments)
        heap["ready_us"] = since(W_STOPPED)
        heap["used_held"] = used()

    capture.Capture.drain = watched_drain
    knots.Placer.step = timed_step
    held.Held.keep = timed_keep


def board():
    return Watched()


def report():
    charge_us = words[W_STOPPED] - words[W_STARTED] & 0x3FFFFFFF
    return {
        "charge_us": charge_us,
        "busy": 1 - words[W_WAITED] / charge_us,
        "visits": words[W_VISITS],
        "gap_us": words[W_GAP],
        "behind": words[W_BEHIND],
        "span": words[W_SPAN],
        "heap_locked": words[W_LOCKED] == 1,
        "free_after_start": heap["after_start"],
        "free_armed": heap["armed"],
        "placed_us": words[W_PLACING],
        "ready_us": heap["ready_us"],
        "used": max(heap["used"], heap["used_held"]),
    }
