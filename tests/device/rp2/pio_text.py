"""An assembler for PIO programs as they stand in the firmware: what `rp2.asm_pio` makes of them.

Written from the encodings of RP2040 datasheet 3.4 and from MicroPython's documentation of
`rp2.asm_pio` (side-set is optional where some instruction has none; then it takes one bit more).
"""

from bus import Fault

NAMES = {
    "pins": 0,
    "x": 1,
    "y": 2,
    "null": 3,
    "pindirs": 4,
    "pc": 5,
    "status": 5,
    "isr": 6,
    "osr": 7,
    "exec": 8,
    "gpio": 0,
    "not_x": 1,
    "x_dec": 2,
    "not_y": 3,
    "y_dec": 4,
    "x_not_y": 5,
    "pin": 6,
    "not_osre": 7,
    "noblock": 1,
    "block": 0x20,
    "iffull": 0x40,
    "ifempty": 0x40,
    "clear": 0x40,
}


class Step:
    """One instruction, its label not yet known."""

    def __init__(self, word, label=None):
        self.word = word
        self.label = label
        self.level = None
        self.wait = 0

    def side(self, level):
        self.level = level
        return self

    def delay(self, cycles):
        self.wait = cycles
        return self

    def __getitem__(self, cycles):
        return self.delay(cycles)


def _count(bits):
    if not 1 <= bits <= 32:
        raise Fault(f"a shift of {bits} bits")
    return bits & 31


class Program:
    """`words` with labels counted from the program's first; the rest as asm_pio was told."""

    def __init__(self, function, how):
        self.how = how
        self.steps = []
        self.labels = {}
        self.wrap_target = 0
        self.wrap = None
        self.offset = [None, None]  # where it lies in the memory of each PIO
        space = function.__globals__
        before = {name: space[name] for name in space}
        space.update(self._scope())
        try:
            function()
        finally:
            space.clear()
            space.update(before)
        if self.wrap is None:
            self.wrap = len(self.steps) - 1
        self._encode()

    def _step(self, word, label=None):
        self.steps.append(Step(word, label))
        return self.steps[-1]

    def _scope(self):
        def jmp(condition, label=None):
            if label is None:
                return self._step(0, condition)
            return self._step(condition << 5, label)

        def blocking(word):
            def made(first=0x20, second=0):
                flags = first | second
                return self._step(word | flags & 0x40 | (0 if flags & 1 else 0x20))

            return made

        def place(name):
            self.labels[name] = len(self.steps)

        def target():
            self.wrap_target = len(self.steps)

        def wrap():
            self.wrap = len(self.steps) - 1

        made = dict(NAMES)
        made.update(
            {
                "label": place,
                "wrap_target": target,
                "wrap": wrap,
                "jmp": jmp,
                "nop": lambda: self._step(0xA042),
                "in_": lambda source, bits: self._step(0x4000 | source << 5 | _count(bits)),
                "out": lambda to, bits: self._step(0x6000 | min(to, 7) << 5 | _count(bits)),
                "push": blocking(0x8000),
                "pull": blocking(0x8080),
                "mov": lambda to, source: self._step(0xA000 | (4 if to == 8 else to) << 5 | source),
                "set": lambda to, value: self._step(0xE000 | to << 5 | value & 31),
                "invert": lambda source: source | 8,
                "reverse": lambda source: source | 16,
            }
        )
        return made

    def _encode(self):
        given = self.how.get("sideset_init")
        pins = 0 if given is None else len(given) if isinstance(given, (tuple, list)) else 1
        self.optional = pins > 0 and any(step.level is None for step in self.steps)
        self.side_bits = pins + self.optional
        self.words = []
        for step in self.steps:
            word = step.word | (0 if step.label is None else self.labels[step.label])
            if step.wait >> (5 - self.side_bits):
                raise Fault(f"no room for a delay of {step.wait}")
            if step.level is not None:
                if step.level >> pins:
                    raise Fault(f"no side-set pins for {step.level}")
                word |= (self.optional << 12) | step.level << (13 - self.side_bits)
            self.words.append(word | step.wait << 8)
        if len(self.words) > 32:
            raise Fault(f"a program of {len(self.words)} instructions")


def asm_pio(**how):
    return lambda function: Program(function, how)
