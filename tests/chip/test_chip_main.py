"""main.py on an emulated RP2040: what it starts, and how every exit leaves the outputs."""

import json
from collections.abc import Iterator

import pytest
from chip import Chip, missing

pytestmark = pytest.mark.skipif(missing() is not None, reason=str(missing()))

PULSE, RELAY, RELEASE = 2, 3, 4

# A firmware that ends in mid-pulse in the way that /mode.txt asks for, once.
ENDING_APP = """
import os

def main():
    try:
        with open("/mode.txt") as file:
            mode = file.read()
    except OSError:
        return
    os.remove("/mode.txt")
    import machine
    import micropython
    from tracer.hal_rp2 import Hal
    hal = Hal()
    hal.bleed(False)
    hal.relay(True)
    hal.pulse(20000)
    hal.wait_us(1000)
    if mode == "raise":
        raise ValueError("mid-pulse")
    if mode == "exit":
        raise SystemExit
    if mode == "soft reset":
        machine.soft_reset()
    if mode == "memory":
        bytearray(1000000)
    print("HANGS")
    while True:
        pass
"""


def slot_app(name: str, more: str = "") -> str:
    return f"def main():\n    print('FROM {name}')\n{more}"


@pytest.fixture(scope="module")
def ending() -> Iterator[Chip]:
    with Chip(files={"/tracer/app.py": ENDING_APP}) as chip:
        yield chip


@pytest.fixture(scope="module")
def slots() -> Iterator[Chip]:
    held = {f"/{slot}/kneewire/__init__.py": "" for slot in "ab"}
    held |= {f"/{slot}/tracer/__init__.py": "" for slot in "ab"}
    with Chip(files=held) as chip:
        yield chip


def write(chip: Chip, files: dict[str, str | None]) -> None:
    script = (
        "import json, os\n"
        f"for path, text in json.loads({json.dumps(files)!r}).items():\n"
        "    try:\n        os.remove(path)\n    except OSError:\n        pass\n"
        "    if text is not None:\n"
        "        with open(path, 'w') as file:\n            file.write(text)\n"
    )
    chip.run(script)


def restart(chip: Chip) -> str:
    """A soft reset from the friendly prompt, so that main.py runs; what it printed."""
    chip.link.sendall(b"\x02\x04")
    chip.until(b"soft reboot\r\n")
    return chip.until(b">>> ").decode()


@pytest.mark.parametrize("mode", ["raise", "exit", "soft reset", "memory", "hang"])
def test_every_exit_in_mid_pulse_leaves_the_outputs_safe(ending: Chip, mode: str) -> None:
    write(ending, {"/mode.txt": mode})
    ending.edges()
    ending.link.sendall(b"\x02\x04")
    ending.until(b"soft reboot\r\n")
    if mode == "hang":
        ending.until(b"HANGS\r\n")
        ending.link.sendall(b"\x03")
    shown = ending.until(b">>> ").decode()
    edges = ending.edges()
    last = {edge.pin: edge.level for edge in edges}
    assert last == {PULSE: 0, RELAY: 0, RELEASE: 0}
    pulse = [edge for edge in edges if edge.pin == PULSE]
    highs = [edge.us for edge in pulse if edge.level == 1]
    assert highs[-1] - highs[0] < 20000
    ending.let_pass(30)
    assert ending.edges() == []
    if mode == "raise":
        assert "ValueError: mid-pulse" in shown
    if mode == "hang":
        assert "KeyboardInterrupt" in shown


def test_main_drives_the_outputs_low_before_anything_else(ending: Chip) -> None:
    # At the raw prompt somebody left all outputs high.
    ending.run("from machine import Pin\nfor n in (2, 3, 4): Pin(n, Pin.OUT, value=1)")
    ending.edges()
    ending.link.sendall(b"\x02\x04")
    ending.until(b"soft reboot\r\n")
    ending.until(b">>> ")
    edges = ending.edges()
    first_low = [edge.pin for edge in edges if edge.level == 0][:3]
    assert first_low == [PULSE, RELAY, RELEASE]
    assert not [edge for edge in edges if edge.level == 1]


def pointer(chip: Chip) -> str:
    return chip.run("print(open('/slot.txt').read())").strip()


def test_the_confirmed_slot_starts(slots: Chip) -> None:
    write(
        slots,
        {
            "/slot.txt": "b confirmed\n",
            "/a/tracer/app.py": slot_app("a"),
            "/b/tracer/app.py": slot_app("b"),
        },
    )
    assert "FROM b" in restart(slots)
    assert pointer(slots) == "b confirmed"


def test_a_trial_is_counted_down_before_the_slot_runs(slots: Chip) -> None:
    show = "    print(open('/slot.txt').read())\n"
    write(slots, {"/slot.txt": "a 2\n", "/a/tracer/app.py": slot_app("a", show)})
    assert "FROM a\r\na 1" in restart(slots)
    assert "FROM a\r\na 0" in restart(slots)


def test_a_spent_trial_picks_the_other_slot_for_good(slots: Chip) -> None:
    write(
        slots,
        {
            "/slot.txt": "a 0\n",
            "/a/tracer/app.py": slot_app("a"),
            "/b/tracer/app.py": slot_app("b"),
        },
    )
    shown = restart(slots)
    assert "FROM b" in shown
    assert "FROM a" not in shown
    assert pointer(slots) == "b confirmed"


@pytest.mark.parametrize("broken", ["raise OSError\n", "def main(:\n", "import no_such_thing\n"])
def test_a_slot_that_fails_gives_way_to_the_other(slots: Chip, broken: str) -> None:
    write(
        slots,
        {
            "/slot.txt": "a 3\n",
            "/a/tracer/app.py": broken,
            "/b/tracer/app.py": slot_app("b"),
        },
    )
    shown = restart(slots)
    assert "the firmware in /a stopped" in shown
    assert "FROM b" in shown


def test_two_bad_slots_end_at_the_prompt(slots: Chip) -> None:
    write(
        slots,
        {
            "/slot.txt": "a confirmed\n",
            "/a/tracer/app.py": "raise ValueError('first')\n",
            "/b/tracer/app.py": "raise ValueError('second')\n",
        },
    )
    shown = restart(slots)
    assert "ValueError: first" in shown
    assert "ValueError: second" in shown


@pytest.mark.parametrize("text", ["", "c confirmed\n", "a soon\n", "a\n", None])
def test_an_unreadable_pointer_ends_at_the_prompt(slots: Chip, text: str | None) -> None:
    write(slots, {"/slot.txt": text, "/a/tracer/app.py": slot_app("a")})
    shown = restart(slots)
    assert "which slot to start cannot be read" in shown
    assert "FROM" not in shown


def test_a_slot_with_a_package_missing_does_not_borrow_the_roots(slots: Chip) -> None:
    write(
        slots,
        {
            "/slot.txt": "a confirmed\n",
            "/a/tracer/app.py": slot_app("a"),
            "/b/tracer/app.py": slot_app("b"),
        },
    )
    slots.run("import os\nos.rename('/a/kneewire', '/a/elsewhere')")
    try:
        assert "FROM b" in restart(slots)
    finally:
        slots.run("import os\nos.rename('/a/elsewhere', '/a/kneewire')")


def test_a_slot_that_dies_while_dma_runs_leaves_the_other_a_sound_heap(slots: Chip) -> None:
    dies = (
        "def main():\n"
        "    from tracer.hal_rp2 import Hal\n    hal = Hal()\n    hal.capture_start()\n"
        "    raise ValueError('mid-capture')\n"
    )
    fills = "    x = [bytes(64) for _ in range(1000)]\n    print(all(b == bytes(64) for b in x))\n"
    write(
        slots,
        {
            "/slot.txt": "a confirmed\n",
            "/a/tracer/app.py": dies,
            "/b/tracer/app.py": slot_app("b", fills),
        },
    )
    copy = (
        "for name in ('adc_rp2', 'coder_thumb', 'plane_thumb', 'hal', 'hal_rp2', 'pulse_pio',\n"
        "             'ring_rp2', 'usb_serial'):\n"
        "    data = open('/tracer/' + name + '.py').read()\n"
        "    open('/a/tracer/' + name + '.py', 'w').write(data)\n"
    )
    slots.run(copy)
    shown = restart(slots)
    assert "ValueError: mid-capture" in shown
    assert "FROM b\r\nTrue" in shown
