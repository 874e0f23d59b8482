"""An emulated Pico for tests: the real firmware files on the real MicroPython image.

    with Chip(files={"/tracer/app.py": "def main(): pass"}) as chip:
        print(chip.run("print(6 * 7)"))
        chip.edges()

Comes in: what the board's file system holds, and the plant's description. Goes out: the
prompt, the link, the recorded edges of the three outputs in emulated time. What the figures
mean on silicon is not known here: flash has no wait states, and nothing else uses the bus.

KNEEWISE_PICO_IMAGE and KNEEWISE_PICO_BOOTROM name a raw MicroPython image for the Pico and a
raw RP2040 boot ROM. Neither is part of this project.
"""

import fcntl
import json
import os
import shutil
import socket
import subprocess
import sys
import tempfile
import time
from collections.abc import Mapping
from pathlib import Path
from types import TracebackType
from typing import Any, NamedTuple

HERE = Path(__file__).resolve().parent
ROOT = HERE.parents[1]
BLOCK_BYTES = 4096
BLOCKS = 352  # MicroPython's file system on a 2 MiB flash
DISK_VERSION = 0x00020000
PATIENCE_S = 60.0


class Edge(NamedTuple):
    pin: int
    level: int | None  # None: not driven
    us: float


def missing() -> str | None:
    """What to set or install before an emulated chip can run, or None."""
    for name in ("KNEEWISE_PICO_IMAGE", "KNEEWISE_PICO_BOOTROM"):
        if not os.environ.get(name):
            return f"set {name} to a raw file (see the text of tests/chip/chip.py)"
        if not Path(os.environ[name]).is_file():
            return f"{name} names no file: {os.environ[name]}"
    for program in ("node", "npm"):
        if shutil.which(program) is None:
            return f"install Node.js 20 or later: {program} was not found"
    try:
        import littlefs  # noqa: F401
    except ImportError:
        return "pip install littlefs-python"
    return _node_modules()


def _node_modules() -> str | None:
    with (HERE / "package.json").open() as held:
        fcntl.flock(held, fcntl.LOCK_EX)  # two test processes may come here at once
        if (HERE / "node_modules/rp2040js").is_dir():
            return None
        run = subprocess.run(["npm", "ci"], cwd=HERE, capture_output=True, text=True, check=False)
    return None if run.returncode == 0 else f"npm ci in tests/chip failed: {run.stderr[-300:]}"


def firmware(folder: str = "") -> dict[str, bytes]:
    """The firmware's files by their path on the board, packages below `folder`."""
    held = {"/main.py": (ROOT / "device/main.py").read_bytes()}
    for source in (ROOT / "device/tracer", ROOT / "protocol/kneewire"):
        for file in sorted(source.glob("*.py")):
            held[f"{folder}/{source.name}/{file.name}"] = file.read_bytes()
    return held


def file_system(files: Mapping[str, bytes | str]) -> bytes:
    """A littlefs image."""
    from littlefs import LittleFS

    made = LittleFS(block_size=BLOCK_BYTES, block_count=BLOCKS, disk_version=DISK_VERSION)
    for path, content in files.items():
        made.makedirs(str(Path(path).parent), exist_ok=True)
        with made.open(path, "wb") as file:
            file.write(content.encode() if isinstance(content, str) else content)
    return bytes(made.context.buffer)


class Chip:
    """One emulated board, from power on to `close`.

    `files` come on top of the firmware, or alone where `bare` is set; a value of None takes a
    file away. `link` is the open USB port, a socket.
    """

    def __init__(
        self,
        *,
        files: Mapping[str, bytes | str | None] | None = None,
        plant: Mapping[str, Any] | None = None,
        bare: bool = False,
        speed: float = 1.0,
        uptime_us: int = 0,
    ) -> None:
        self._folder = Path(tempfile.mkdtemp(prefix="kneewise-chip-"))
        self._children: list[subprocess.Popen[str]] = []
        self._link: socket.socket | None = None
        held: dict[str, bytes | str] = {} if bare else dict(firmware())
        for path, content in (files or {}).items():
            if content is None:
                held.pop(path, None)
            else:
                held[path] = content
        (self._folder / "files.img").write_bytes(file_system(held))
        (self._folder / "plant.json").write_text(json.dumps(plant or {}))
        self._log = (self._folder / "log.txt").open("w+")
        node = subprocess.Popen(
            [
                *("node", str(HERE / "run.mjs"), "--speed", str(speed)),
                *("--uptime-us", str(uptime_us)),
                *("--image", os.environ["KNEEWISE_PICO_IMAGE"]),
                *("--bootrom", os.environ["KNEEWISE_PICO_BOOTROM"]),
                *("--lfs", str(self._folder / "files.img")),
                *("--plant", str(self._folder / "plant.json")),
            ],
            stdout=subprocess.PIPE,
            stderr=self._log,
            text=True,
        )
        self._children.append(node)
        assert node.stdout is not None
        first = node.stdout.readline()
        if not first:
            raise RuntimeError(f"the emulated chip did not start: {self.log()}")
        self.ports: dict[str, int] = json.loads(first)
        self._control = socket.create_connection(("127.0.0.1", self.ports["control"]))
        self._answers = self._control.makefile("r")

    def __enter__(self) -> "Chip":
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    def close(self) -> None:
        self.unplug()
        self._answers.close()
        self._control.close()
        for child in reversed(self._children):
            child.terminate()
            child.wait()
            if child.stdout:
                child.stdout.close()
        self._children = []
        self._log.close()
        shutil.rmtree(self._folder, ignore_errors=True)

    def log(self) -> str:
        """What the emulator said beside its answers: resets, breakpoints."""
        self._log.flush()
        return (self._folder / "log.txt").read_text()

    # -- the world outside the chip ----------------------------------------------------

    def order(self, do: str, **fields: Any) -> dict[str, Any]:
        """One request on the control port; see the text of run.mjs."""
        self._control.sendall((json.dumps({"do": do, **fields}) + "\n").encode())
        answer: dict[str, Any] = json.loads(self._answers.readline())
        if "error" in answer:
            raise RuntimeError(answer["error"])
        return answer

    def edges(self) -> list[Edge]:
        """Changes of GP2, GP3 and GP4 since the last call."""
        answer = self.order("edges")
        assert not answer["dropped"]
        return [Edge(pin, level, ns / 1000) for pin, level, ns in answer["edges"]]

    def said(self) -> str:
        """The last of what the chip has sent over its link."""
        return str(self.order("said")["text"])

    def now_us(self) -> float:
        return float(self.order("time")["ns"]) / 1000

    def boots(self) -> int:
        return int(self.order("time")["boots"])

    def let_pass(self, ms: float) -> None:
        """Let emulated time pass."""
        until = self.now_us() + 1000 * ms
        while self.now_us() < until:
            time.sleep(0.002)

    # -- its USB port -------------------------------------------------------------------

    @property
    def link(self) -> socket.socket:
        if self._link is None:
            self._link = socket.create_connection(("127.0.0.1", self.ports["link"]))
            self._link.settimeout(PATIENCE_S)
        return self._link

    def unplug(self) -> None:
        if self._link is not None:
            self._link.close()
            self._link = None

    def serial_port(self) -> str:
        """The path of a pseudo-terminal that stands for the USB port."""
        self.unplug()
        path = self._folder / "usb"
        bridge = [sys.executable, str(HERE / "bridge.py"), str(path), str(self.ports["link"])]
        self._children.append(subprocess.Popen(bridge, text=True))
        while not path.is_symlink():
            time.sleep(0.01)
        return str(path)

    def until(self, ending: bytes) -> bytes:
        """What the chip sends, up to and with `ending`."""
        got = b""
        deadline = time.monotonic() + PATIENCE_S
        while not got.endswith(ending):
            if time.monotonic() > deadline:
                raise TimeoutError(f"no {ending!r} from the chip, only {got[-400:]!r}")
            byte = self.link.recv(1)
            if not byte:
                raise ConnectionError(f"the chip left after {got[-400:]!r}")
            got += byte
        return got

    # -- its prompt ---------------------------------------------------------------------

    def prompt(self) -> None:
        """From wherever it is to the raw prompt."""
        self.link.sendall(b"\r\x03\x03\x01")
        self.until(b"raw REPL; CTRL-B to exit\r\n>")

    def begin(self, script: str) -> None:
        """Start a script from the raw prompt, and come back at once."""
        self.link.sendall(script.encode() + b"\x04")
        self.until(b"OK")

    def finish(self) -> tuple[str, str]:
        """Output and traceback of the script that was begun."""
        output = self.until(b"\x04")[:-1]
        trace = self.until(b"\x04>")[:-2]
        return output.decode(), trace.decode()

    def run(self, script: str) -> str:
        """Run a script from the raw prompt; its output. A traceback raises RuntimeError."""
        self.prompt()
        self.begin(script)
        output, trace = self.finish()
        if trace:
            raise RuntimeError(trace)
        return output
