"""The firmware's source text for the modelled chip, on CPython; with changes, where a check is to
be shown what it must catch.

What native code alone can do is replaced in the text: decorators of the native compiler are taken
off, and an argument that the compiler would take as a pointer is made one in the first line of
the function. `ptr32` and its like are functions (`pointers.py`). The RP2040's own instructions
(plane_thumb.py, coder_thumb.py) are stood in for by the plain functions.
"""

from __future__ import annotations

import builtins
import re
from functools import cache
from pathlib import Path
from types import CodeType, ModuleType
from typing import Any

from memory_model import Heap, buffers_on

from kneewise.emulator.firmware import device_folder

FILES = (
    *("hal", "hal_rp2", "ring_rp2", "adc_rp2", "spi_pair", "spi_timing", "pulse_pio"),
    *("usb_serial", "coder", "plane"),
)
STAND_INS = {
    "coder_thumb": "from tracer.coder import cobs_into\n",
    "plane_thumb": "from tracer.plane import errors\n",
}
NATIVE = re.compile(r"^@micropython\.(?:viper|native)\n(def \w+\(([^)]*)\)[^\n]*:\n)", re.MULTILINE)
Change = tuple[str, str, str]  # file, text in it, what stands there instead


def plain(text: str) -> str:
    """The source without what only MicroPython's native compiler understands."""

    def without(found: re.Match[str]) -> str:
        pointers = re.findall(r"(\w+): (ptr\d+)", found[2])
        return found[1] + "".join(f"    {name} = {kind}({name})\n" for name, kind in pointers)

    made = NATIVE.sub(without, text)
    assert "@micropython" not in made
    return made


def sources(changes: tuple[Change, ...] = ()) -> dict[str, str]:
    """Source text of each file; a change whose text is not there exactly once is an error."""
    folder = Path(device_folder()) / "tracer"
    texts = {name: (folder / f"{name}.py").read_text(encoding="utf-8") for name in FILES}
    for name, old, new in changes:
        assert texts[name].count(old) == 1, f"{name}.py has {texts[name].count(old)} of: {old}"
        texts[name] = texts[name].replace(old, new)
    return {name: plain(text) for name, text in texts.items()} | STAND_INS


@cache
def _code(name: str, text: str) -> CodeType:
    return compile(text, f"{name}.py", "exec")


class Loader:
    """Imports the given texts as `tracer`, beside the modules of a board."""

    def __init__(self, texts: dict[str, str]) -> None:
        self.texts = texts
        self._modules: dict[str, ModuleType] = {}
        self._fakes: dict[str, Any] = {}
        self._builtins: dict[str, Any] = {}

    def begin(self, fakes: dict[str, Any], pointers: dict[str, Any], heap: Heap | None) -> None:
        self._modules = {}
        self._fakes = fakes
        own = {"__import__": self._import, "bytearray": buffers_on(heap or Heap())}
        self._builtins = vars(builtins) | pointers | own

    def load(self, name: str) -> ModuleType:
        if name not in self._modules:
            module = ModuleType(f"tracer.{name}")
            self._modules[name] = module
            vars(module)["__builtins__"] = self._builtins
            exec(_code(name, self.texts[name]), vars(module))
        return self._modules[name]

    def _import(
        self, name: str, space: Any = None, more: Any = None, names: Any = (), level: int = 0
    ) -> Any:
        if name == "tracer":
            package = ModuleType("tracer")
            for wanted in names:
                setattr(package, wanted, self.load(wanted))
            return package
        if name.startswith("tracer."):
            return self.load(name.removeprefix("tracer."))
        return self._fakes[name]
