"""ptr8, ptr16, ptr32 and uint of MicroPython's native code, as functions.

A pointer from a number leads to registers or memory of the modelled chip, one from a buffer to
that buffer. Words are signed when read, as native code has them; halves and bytes are not. `uint`
is a plain number here: sums that would wrap at 2**32 do not. Source: MicroPython's documentation,
"Maximising MicroPython speed", and py/emitnative.c.
"""

from bus import MASK


class AtAddress:
    def __init__(self, bus, address, size):
        self.bus = bus
        self.address = address & MASK
        self.size = size

    def __getitem__(self, place):
        value = self.bus.read(self.address + self.size * place, self.size)
        return value - (1 << 32) if self.size == 4 and value >> 31 else value

    def __setitem__(self, place, value):
        mask = (1 << (8 * self.size)) - 1
        self.bus.write(self.address + self.size * place, value & mask, self.size)


class InWords:
    """An array of words."""

    def __init__(self, bus, words):
        self.bus = bus
        self.words = words

    def __getitem__(self, place):
        self.bus.watch()
        value = self.words[place]
        return value - (1 << 32) if value >> 31 else value

    def __setitem__(self, place, value):
        self.bus.watch()
        self.words[place] = value & MASK


def pointers(bus):
    def ptr(size):
        def made(given):
            if isinstance(given, int):
                return AtAddress(bus, given, size)
            return InWords(bus, given) if size == 4 and not isinstance(given, InWords) else given

        return made

    return {"ptr8": ptr(1), "ptr16": ptr(2), "ptr32": ptr(4), "uint": lambda value: value & MASK}
