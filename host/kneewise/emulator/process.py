"""The MicroPython rung: the firmware in a real MicroPython process, its serial port a pty.

Two threads serve it. One answers the board file's requests from the emulated board. The other
carries bytes between the process's terminal and the pty that hosts open, as the cable does:
with no host there, the newest output is kept and the rest is lost.
"""

from __future__ import annotations

import contextlib
import importlib.util
import os
import pty
import select
import shutil
import socket
import struct
import subprocess
import sys
import tempfile
import termios
import threading
import time
import tty
from pathlib import Path

from kneewise.emulator.board import Board, PowerLost, WatchdogBite
from kneewise.emulator.bus import dispatch
from kneewise.emulator.converters import Scaling
from kneewise.emulator.firmware import boot_seed, lay_out
from kneewise.emulator.mishaps import Value
from kneewise.emulator.scenario import Scenario

# The new session takes the pty as its own terminal, so that 0x03 reaches it as Ctrl-C.
_RUN = """
import fcntl, termios
fcntl.ioctl(0, termios.TIOCSCTTY, 0)
from micropython_unix import main
main()
"""
_POWER_ON = Path(__file__).parent / "onboard" / "power_on.py"
HEAP = "240k"  # its objects are twice as large as those of an RP2040, which has about as much
KEPT_UNREAD = 256  # bytes of output that wait for a host that is not there, as on the RP2 port
IDLE_S = 0.005
CTRL_C = b"\x03"
_REQUEST = struct.Struct("<BBqq")


def available() -> bool:
    """True where a MicroPython wheel exists for this platform and is installed."""
    return os.name == "posix" and importlib.util.find_spec("micropython_unix") is not None


class ProcessTracer:
    """An emulated tracer whose firmware runs in MicroPython; hosts open `port_name`.

    `board` is the emulated board. `unplug` takes power and cable away, `plug` gives them back
    under the same name. `cut_link` takes away the cable alone, `join_link` gives it back.
    `change` and `after_closing` let something go wrong.
    """

    rung = "micropython"

    def __init__(
        self,
        scenario: Scenario,
        scaling: Scaling,
        record: bytes,
        device_id: bytes,
        *,
        program: str | None = None,
    ) -> None:
        self.scenario = scenario
        self.board = Board(scenario, scaling=scaling, cut_link=self.cut_link)
        self._lock = threading.RLock()
        self._folder = Path(tempfile.mkdtemp(prefix="kneewise-"))
        self._flash = self._folder / "flash"
        self._flash.mkdir()
        self.port_name = str(self._folder / "tty")
        lay_out(self._flash, record, device_id)
        if program is not None:
            (self._flash / "main.py").write_text(program, encoding="utf-8")
        self._boots = 0
        self._process: subprocess.Popen[bytes] | None = None
        self._cable: int | None = None
        self._bridge_stop = threading.Event()
        self._threads: list[threading.Thread] = []
        self._bus: socket.socket | None = None
        self._terminal: int | None = None
        self.plug()

    @property
    def running(self) -> bool:
        """True while the board has power and its process lives."""
        return self._process is not None and self._process.poll() is None

    # -- power and cable ---------------------------------------------------------------

    def plug(self) -> None:
        """Give power and cable: the firmware boots."""
        if self._process is not None:
            return
        with self._lock:
            self.board.power(True)
        self._boots += 1
        ours, theirs = socket.socketpair()
        master, slave = pty.openpty()
        _as_usb_serial(slave)
        environment = {
            **os.environ,
            "KNEEWISE_BUS": str(theirs.fileno()),
            "KNEEWISE_FLASH": str(self._flash),
            "KNEEWISE_SEED": str(boot_seed(self.scenario.seed, self._boots)),
        }
        environment.pop("MICROPYPATH", None)
        self._process = subprocess.Popen(
            [sys.executable, "-c", _RUN, "-i", "-X", f"heapsize={HEAP}", str(_POWER_ON)],
            stdin=slave,
            stdout=slave,
            stderr=slave,
            env=environment,
            pass_fds=(theirs.fileno(),),
            start_new_session=True,
        )
        os.close(slave)
        theirs.close()
        self._bus = ours
        self._terminal = master
        self.join_link()
        self._bridge_stop = threading.Event()
        self._threads = [
            threading.Thread(target=self._serve_bus, args=(ours,), daemon=True),
            threading.Thread(target=self._carry, args=(master, self._bridge_stop), daemon=True),
        ]
        for thread in self._threads:
            thread.start()

    def unplug(self) -> None:
        """Take power and cable away at once; every pin is undriven from here on."""
        if self._process is None:
            return
        with self._lock:
            self.board.power(False)
        self._end_process()

    def _restart(self) -> None:
        """A reset that leaves the power on: the bus goes away with the process, and comes back."""
        self._end_process()
        self.plug()

    def _end_process(self) -> None:
        process = self._process
        assert process is not None
        self.cut_link()
        process.kill()
        process.wait()
        self._bridge_stop.set()
        assert self._bus is not None
        assert self._terminal is not None
        with contextlib.suppress(OSError):
            self._bus.shutdown(socket.SHUT_RDWR)
        for thread in self._threads:
            if thread is not threading.current_thread():
                thread.join()
        self._bus.close()
        os.close(self._terminal)
        self._process = None

    def cut_link(self) -> None:
        """Pull the cable's data away: a host that has the port open sees it go."""
        cable, self._cable = self._cable, None
        if cable is not None:
            os.close(cable)
            Path(self.port_name).unlink(missing_ok=True)

    def join_link(self) -> None:
        """Give the cable back, under the same name."""
        if self._cable is not None:
            return
        master, slave = pty.openpty()
        tty.setraw(slave)
        name = os.ttyname(slave)
        os.close(slave)
        link = Path(self.port_name)
        link.unlink(missing_ok=True)
        link.symlink_to(name)
        self._cable = master

    def after_closing(self, delay_us: int, what: str, value: Value = 1) -> None:
        """Let something of `mishaps.py` happen `delay_us` after the source next conducts."""
        with self._lock:
            self.board.after_closing(delay_us, what, value)

    def change(self, what: str, value: Value = 1) -> None:
        """Let it happen now."""
        if what == "power_off":
            if value:
                self.unplug()
            else:
                self.plug()
            return
        with self._lock:
            self.board.change(what, value)

    def wait_power_lost(self, timeout_s: float = 10.0) -> None:
        """Return once the board's own loss of power has ended the process. TimeoutError."""
        end = time.monotonic() + timeout_s
        while self._process is not None:
            if time.monotonic() > end:
                raise TimeoutError("the board did not lose power")
            time.sleep(IDLE_S)

    def close(self) -> None:
        """Unplug and remove the emulated flash; twice is harmless."""
        self.unplug()
        shutil.rmtree(self._folder, ignore_errors=True)

    # -- threads -----------------------------------------------------------------------

    def _serve_bus(self, bus: socket.socket) -> None:
        reader = bus.makefile("rb")
        while True:
            try:
                request = reader.read(_REQUEST.size)
                if len(request) < _REQUEST.size:
                    return
                number, *call = _REQUEST.unpack(request)
                with self._lock:
                    reply = dispatch(self.board, *call)
                bus.sendall(len(reply).to_bytes(2, "little") + bytes([number]) + reply)
            except WatchdogBite:
                # A reset takes the process, and another begins.
                self._restart()
                return
            except PowerLost:
                # The board is without power from that very moment; only the process is left.
                self.unplug()
                return
            except OSError:
                return

    def _carry(self, terminal: int, stop: threading.Event) -> None:
        kept = b""
        while not stop.is_set():
            cable = self._cable
            there = cable is not None and _has_host(cable)
            watched = [terminal] + ([cable] if there and cable is not None else [])
            try:
                readable, _, _ = select.select(watched, [], [], IDLE_S if there else 4 * IDLE_S)
                if kept and there and cable is not None:
                    os.write(cable, kept)
                    kept = b""
                if terminal in readable:
                    data = os.read(terminal, 4096)
                    if there and cable is not None:
                        os.write(cable, data)
                    else:
                        kept = (kept + data)[-KEPT_UNREAD:]
                if cable is not None and cable in readable:
                    os.write(terminal, os.read(cable, 256))
            except (OSError, ValueError):
                # The cable was cut, or the process has ended, between the look and the move.
                if stop.wait(IDLE_S):
                    return


def _as_usb_serial(slave: int) -> None:
    """The process's terminal behaves as the RP2 port's USB serial: raw, but 0x03 interrupts."""
    tty.setraw(slave)
    attributes = termios.tcgetattr(slave)
    attributes[3] |= termios.ISIG
    controls = attributes[6]
    for number in (termios.VQUIT, termios.VSUSP):
        controls[number] = os.fpathconf(slave, "PC_VDISABLE").to_bytes(1, "little")
    controls[termios.VINTR] = CTRL_C
    termios.tcsetattr(slave, termios.TCSANOW, attributes)


def _has_host(cable: int) -> bool:
    poll = select.poll()
    poll.register(cable, select.POLLIN)
    return not any(event & select.POLLHUP for _, event in poll.poll(0))
