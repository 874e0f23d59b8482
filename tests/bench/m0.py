"""One native function of the firmware on a Cortex-M0+, with its cycles counted.

    core = Core("coder_thumb", "cobs_into")
    ran = core.call(body, len(body), out)  # bytearrays and arrays are written back
    print(ran.result, ran.cycles)

Comes in: a file of device/tracer and the name of an `asm_thumb` or `viper` function in it. Goes
out: what it returns and the cycles it takes. mpy-cross compiles the file, the machine code is
taken out of the .mpy file, and unicorn runs it.

Cycles are those of the Cortex-M0+ Technical Reference Manual (ARM DDI 0484C, table 3-1), with a
multiplier of one cycle, as the RP2040 has. They hold where memory makes nobody wait: the code
in RAM, and no DMA on the same bank. Not counted: the interpreter's call, and what it does for a
viper function to turn objects into numbers and back. A division, which a viper function leaves to
the interpreter, counts as DIVISION_CYCLES.

Layout of a .mpy file: MicroPython's documentation, "MicroPython .mpy files", and for the places
of things in memory py/obj.h, py/bc.h and py/nativeglue.h of its version 1.29. The divider: RP2040
datasheet, "SIO", registers DIV_UDIVIDEND to DIV_REMAINDER.
"""

from __future__ import annotations

import ast
import struct
from array import array
from itertools import pairwise
from typing import NamedTuple

import unicorn
from unicorn import arm_const as arm

from kneewise.emulator.firmware import compiled, device_folder

VERSION = 6
FEATURES = 4 << 2 | 3  # ARMv6-M, and how native code of the third kind finds its things
BYTECODE, NATIVE, VIPER, ASM = range(4)
FUN_TABLE = 0  # kind of a constant: the interpreter's table of functions
PLAIN = range(5)  # kinds of constants without anything behind them
STR, BYTES, TUPLE = 5, 6, 10

CODE = 0x2000_0000
STACK = 0x2001_0000
RUNTIME = 0x2002_0000
ARGUMENTS = 0x2010_0000  # one region for each, and nothing between them
REGION_BYTES = 0x1_0000
STRIDE_BYTES = 0x2_0000
END = RUNTIME + 0x200  # where the function returns to
BX_LR = 0x4770
MOST_INSTRUCTIONS = 10_000_000

# Entries of the interpreter's table that a viper function without objects calls.
FROM_OBJECT = 3
TO_OBJECT = 4
FLOOR_DIVIDE = 46
MODULO = 47
ENTRIES = 50
DIVISION_CYCLES = 60  # assumed: the divider's 8, the rest for signs and for calls

SIO = 0xD000_0000
SIO_BYTES = 0x1000
UDIVIDEND, UDIVISOR, QUOTIENT, REMAINDER = 0x60, 0x64, 0x70, 0x74

Buffer = bytearray | array


class Code(NamedTuple):
    kind: int
    machine: bytes
    children: list[Code]


class Ran(NamedTuple):
    result: int
    cycles: int


class _Reader:
    def __init__(self, data: bytes) -> None:
        self.data = data
        self.at = 0

    def take(self, count: int) -> bytes:
        taken = self.data[self.at : self.at + count]
        if len(taken) < count:
            raise ValueError(f"the .mpy file ends at {len(self.data)}, within an entry")
        self.at += count
        return taken

    def number(self) -> int:
        """Seven bits a byte, the highest first; the top bit says that more follow."""
        value = 0
        while True:
            byte = self.take(1)[0]
            value = value << 7 | byte & 127
            if byte < 128:
                return value

    def name(self) -> None:
        length = self.number()
        if not length & 1:  # else it is one that every interpreter knows, told by its number
            self.take((length >> 1) + 1)

    def constant(self) -> int:
        """Pass over a constant; its kind."""
        kind = self.take(1)[0]
        if kind not in PLAIN:
            length = self.number()
            if kind == TUPLE:
                for _ in range(length):
                    self.constant()
            else:
                self.take(length + (kind in {STR, BYTES}))
        return kind

    def code(self) -> Code:
        head = self.number()
        kind = head & 3
        machine = self.take(head >> 3)
        # Behind it: where the prelude is, or flags, or flags with the count and types of arguments.
        for _ in range((0, 1, 1, 3)[kind]):
            self.number()
        children = [self.code() for _ in range(self.number())] if head & 4 else []
        return Code(kind, machine, children)


def read_mpy(data: bytes) -> tuple[Code, list[int]]:
    """The module's code and the kinds of its constants."""
    reader = _Reader(data)
    magic, version, features, _ = reader.take(4)
    if (magic, version, features) != (ord("M"), VERSION, FEATURES):
        raise ValueError(f"not a .mpy file of version {VERSION}.3 for ARMv6-M: {data[:4].hex()}")
    names, constants = reader.number(), reader.number()
    for _ in range(names):
        reader.name()
    kinds = [reader.constant() for _ in range(constants)]
    code = reader.code()
    if reader.at != len(data):
        raise ValueError(f"{len(data) - reader.at} bytes behind the module's code")
    return code, kinds


def native_function(file: str, name: str) -> tuple[Code, int]:
    """A function of device/tracer/`file`.py and the place of the function table in the constants.

    A .mpy file does not name native code; functions and classes stand in the source's order.
    """
    source = (device_folder() / "tracer" / f"{file}.py").read_text(encoding="utf-8")
    scopes = [
        node.name
        for node in ast.parse(source).body
        if isinstance(node, ast.FunctionDef | ast.ClassDef)
    ]
    module, kinds = read_mpy((compiled("armv6m") / "tracer" / f"{file}.mpy").read_bytes())
    if len(module.children) != len(scopes):
        raise ValueError(f"{file}.py has {len(scopes)} scopes, compiled {len(module.children)}")
    found = module.children[scopes.index(name)]
    if found.kind not in {VIPER, ASM}:
        raise ValueError(f"{name} in {file}.py is neither asm_thumb nor viper")
    return found, kinds.index(FUN_TABLE) if found.kind == VIPER else 0


def instruction_cycles(half: int, *, taken: bool) -> int:
    """Cycles of an instruction by its first halfword; `taken`: it went elsewhere than on."""
    low_registers = bin(half & 0xFF).count("1")
    extra_register = half >> 8 & 1
    match half >> 12:
        case 0 | 1 | 2 | 3 | 10:  # shift, add, subtract, move, compare; address from PC or SP
            return 1
        case 4 if half >> 11 == 9:  # load from PC
            return 2
        case 4 if half >> 8 == 0x47:  # BX, BLX
            return 2
        case 4:  # data processing; add, compare, move of high registers
            return 2 if taken else 1
        case 5 | 6 | 7 | 8 | 9:  # load, store
            return 2
        case 11 if half & 0xFE00 == 0xB400:  # PUSH
            return 1 + low_registers + extra_register
        case 11 if half & 0xFE00 == 0xBC00:  # POP; a PC counts among the registers
            return (3 if extra_register else 1) + low_registers + extra_register
        case 11 if half == 0xBF00 or half >> 8 in {0xB0, 0xB2, 0xBA}:
            return 1  # NOP; SP moved, byte or half extended, bytes reversed
        case 12:  # LDM, STM
            return 1 + low_registers
        case 13 if half < 0xDE00:  # B<cc>
            return 2 if taken else 1
        case 14 if half < 0xE800:  # B
            return 2
        case 15 if half < 0xF800:  # BL, MRS, MSR, barriers
            return 3
    raise ValueError(f"no cycles known for 0x{half:04x}")


def signed(word: int) -> int:
    return word - (1 << 32) if word >> 31 else word


class Divider:
    """The RP2040's divider, unsigned. Nothing here waits: `soonest` says whether a core may."""

    def __init__(self, machine: unicorn.Uc) -> None:
        self._operands = {UDIVIDEND: 0, UDIVISOR: 1}
        self.divisions = 0
        machine.mmio_map(SIO, SIO_BYTES, self._read, None, self._write, None)

    def _write(self, machine: unicorn.Uc, place: int, size: int, value: int, data: object) -> None:
        if place not in self._operands or size != 4:
            raise ValueError(f"{size} bytes written to SIO 0x{place:x}")
        self._operands[place] = value
        self.divisions += place == UDIVISOR

    def _read(self, machine: unicorn.Uc, place: int, size: int, data: object) -> int:
        quotient, remainder = divmod(self._operands[UDIVIDEND], self._operands[UDIVISOR])
        return {QUOTIENT: quotient, REMAINDER: remainder}[place]


class Core:
    """A Cortex-M0+ that holds one function.

    `counted` False: quicker, and the cycles are 0.
    """

    def __init__(self, file: str, name: str, *, counted: bool = True) -> None:
        self._code, table_place = native_function(file, name)
        self._machine = unicorn.Uc(unicorn.UC_ARCH_ARM, unicorn.UC_MODE_THUMB)
        self._machine.ctl_set_cpu_model(arm.UC_CPU_ARM_CORTEX_M0)
        self._regions = 0
        self._trace: list[tuple[int, int]] = []  # runs of instructions: address, bytes
        self._costs: dict[tuple[int, int], tuple[int, int]] = {}
        self._divisions = 0
        for start in (CODE, STACK, RUNTIME):
            self._machine.mem_map(start, REGION_BYTES)
        self._machine.mem_write(CODE, self._code.machine)
        self.divider = Divider(self._machine)
        self._lay_runtime(table_place)
        first, last = CODE, CODE + len(self._code.machine) - 1
        if counted:
            self._machine.hook_add(unicorn.UC_HOOK_BLOCK, self._executed, None, first, last)

    def _lay_runtime(self, table_place: int) -> None:
        """What a viper function finds by the function object it is given.

        Objects are the numbers themselves here, so both conversions hand back what they get. A
        call of any other entry is a jump to 0, which fails.
        """
        same, table, constants, context = (RUNTIME + place for place in (0, 0x800, 0x1000, 0x1800))
        self._fun, self._arguments = RUNTIME + 0x2000, RUNTIME + 0x2800
        words = [0] * ENTRIES
        words[FROM_OBJECT] = words[TO_OBJECT] = same | 1
        self._write(same, BX_LR)
        for entry in (FLOOR_DIVIDE, MODULO):
            here = RUNTIME + 0x3000 + 16 * entry
            words[entry] = here | 1
            self._write(here, BX_LR)
            self._machine.hook_add(unicorn.UC_HOOK_CODE, self._divided, entry, here, here + 1)
        self._write(table, *words)
        self._write(constants, *[0] * table_place, table)
        self._write(context, 0, 0, 0, constants)  # type, globals, names, constants
        self._write(self._fun, 0, context, 0, CODE)  # type, context, children, code

    def _write(self, address: int, *words: int) -> None:
        self._machine.mem_write(address, struct.pack(f"<{len(words)}I", *words))

    def _executed(self, machine: unicorn.Uc, address: int, size: int, data: object) -> None:
        self._trace.append((address, size))

    def _divided(self, machine: unicorn.Uc, address: int, size: int, entry: int) -> None:
        left, right = (
            signed(machine.reg_read(register))
            for register in (arm.UC_ARM_REG_R0, arm.UC_ARM_REG_R1)
        )
        value = left // right if entry == FLOOR_DIVIDE else left % right
        machine.reg_write(arm.UC_ARM_REG_R0, value & 0xFFFF_FFFF)
        self._divisions += 1

    def call(self, *arguments: Buffer | int) -> Ran:
        """Run it. A buffer goes in as its address and is what the function left in it.

        It lies at the end of its region, so that an access behind it raises `unicorn.UcError`.
        """
        values = [self._placed(place, what) for place, what in enumerate(arguments)]
        registers = values
        if self._code.kind == VIPER:
            self._write(self._arguments, *values)
            registers = [self._fun, len(values), 0, self._arguments]
        for number, value in enumerate(registers):
            self._machine.reg_write(arm.UC_ARM_REG_R0 + number, value)
        self._machine.reg_write(arm.UC_ARM_REG_SP, STACK + REGION_BYTES)
        self._machine.reg_write(arm.UC_ARM_REG_LR, END | 1)
        self._trace.clear()
        self._divisions = 0
        self._machine.emu_start(CODE | 1, END, count=MOST_INSTRUCTIONS)
        if self._machine.reg_read(arm.UC_ARM_REG_PC) != END:
            raise RuntimeError(f"no return within {MOST_INSTRUCTIONS} instructions")
        for value, what in zip(values, arguments, strict=True):
            if not isinstance(what, int):
                memory = memoryview(what).cast("B")
                memory[:] = self._machine.mem_read(value, len(memory))
        return Ran(signed(self._machine.reg_read(arm.UC_ARM_REG_R0)), self._cycles())

    def _placed(self, place: int, what: Buffer | int) -> int:
        if isinstance(what, int):
            return what & 0xFFFF_FFFF
        data = bytes(memoryview(what).cast("B"))
        if len(data) > REGION_BYTES:
            raise ValueError(f"a buffer of {len(data)} bytes, {REGION_BYTES} at most")
        start = ARGUMENTS + place * STRIDE_BYTES
        if not self._regions >> place & 1:
            self._machine.mem_map(start, REGION_BYTES)
            self._regions |= 1 << place
        address = start + REGION_BYTES - len(data)
        self._machine.mem_write(address, data)
        return address

    def _cycles(self) -> int:
        cycles = DIVISION_CYCLES * self._divisions
        for run, (after, _) in pairwise([*self._trace, (END, 0)]):
            if run not in self._costs:
                self._costs[run] = self._costs_of(*run)
            cycles += self._costs[run][after != sum(run)]
        return cycles

    def _costs_of(self, start: int, size: int) -> tuple[int, int]:
        """Cycles of instructions that follow each other: on from there, and to elsewhere."""
        halves = struct.unpack_from(f"<{size // 2}H", self._code.machine, start - CODE)
        # The second half of a long instruction is part of its first.
        long = [number + 1 for number, half in enumerate(halves) if 0xF000 <= half < 0xF800]
        steps = [half for number, half in enumerate(halves) if number not in long]
        before = sum(instruction_cycles(half, taken=False) for half in steps[:-1])
        on, elsewhere = (instruction_cycles(steps[-1], taken=taken) for taken in (False, True))
        return before + on, before + elsewhere
