"""The RP2040's SRAM, as far as buffers lie in it, and a heap that hands out addresses.

On CPython `Heap` gives each buffer an address as MicroPython's collector would: the first gap
that fits, in blocks of 16 bytes (MicroPython py/gc.c), given back when the last reference goes.
On MicroPython the buffers' own addresses are used, shortened to the SRAM's range.
"""

import sys

from bus import Fault

ON_MICROPYTHON = sys.implementation.name == "micropython"
if ON_MICROPYTHON:
    import uctypes
else:
    import weakref

SRAM = 0x20000000
SHORT = 0x3FFFF
BLOCK = 16


class Memory:
    """Bytes at the addresses that `place` has declared; any other access raises `Fault`."""

    def __init__(self):
        self.places = []  # (first, end, what gives the buffer or None), the latest last

    def place(self, address, length, buffer):
        self.places.append((address, address + length, buffer))

    def find(self, address, size):
        """(buffer, place in it)."""
        for first, end, given in reversed(self.places):
            buffer = given() if first <= address and address + size <= end else None
            if buffer is not None:
                return buffer, address - first
        raise Fault(f"no buffer is at {address:#x}")

    def _aligned(self, address, size):
        if address % size:
            raise Fault(f"{size} bytes at the odd place {address:#x}")
        return self.find(address, size)

    def load(self, address, size):
        buffer, at = self._aligned(address, size)
        return int.from_bytes(bytes(buffer[at : at + size]), "little")

    def store(self, address, value, size):
        buffer, at = self._aligned(address, size)
        for place in range(size):
            buffer[at + place] = value >> (8 * place) & 0xFF


class Heap:
    """First fit from `first` on; `taken` holds [address, end] in order."""

    def __init__(self, first=SRAM + 0x4130, end=SRAM + 0x3C000):
        self.first = first
        self.end = end
        self.taken = []

    def take(self, size):
        size = -(-max(size, 1) // BLOCK) * BLOCK
        at = self.first
        for place, (begin, end) in enumerate(self.taken):
            if at + size <= begin:
                self.taken.insert(place, (at, at + size))
                return at
            at = end
        if at + size > self.end:
            raise MemoryError(f"no {size} bytes in one piece")
        self.taken.append((at, at + size))
        return at

    def give_back(self, address):
        self.taken = [found for found in self.taken if found[0] != address]


def buffers_on(heap):
    """A `bytearray` whose objects have an `address` on that heap. CPython alone."""

    class HeapBytes(bytearray):
        def __init__(self, *given):
            super().__init__(*given)
            self.address = heap.take(len(self))

        def __del__(self):
            heap.give_back(self.address)

    return HeapBytes


class Uctypes:
    """The module `uctypes`, as far as the firmware uses it. A place never holds its object."""

    def __init__(self, memory):
        self.memory = memory
        self._views = []  # (view, address) of what bytearray_at gave

    def addressof(self, buffer):
        if ON_MICROPYTHON:
            real = uctypes.addressof(buffer)
            address = SRAM | real & SHORT
            view = uctypes.bytearray_at(real, len(buffer))
            self.memory.place(address, len(buffer), lambda: view)
            return address
        for view, address in self._views:
            if view is buffer:
                return address
        self.memory.place(buffer.address, len(buffer), weakref.ref(buffer))
        return buffer.address

    def bytearray_at(self, address, length):
        buffer, at = self.memory.find(address, length)
        view = memoryview(buffer)[at : at + length]
        self._views.append((view, address))
        return view
