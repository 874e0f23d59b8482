"""The in-process rung: the firmware on CPython, host and device on one virtual clock.

The firmware runs in a thread of its own, but never at the same time as the host: the host's
`read` hands over, and the firmware hands back when it has written something or when virtual
time has reached the host's deadline. So the same seed gives the same bytes, always.
"""

from __future__ import annotations

import math
import shutil
import tempfile
import threading
import weakref
from pathlib import Path
from typing import Any

from kneewire.profile_record import seal
from kneewise.emulator.board import SOFT_RESET, Board, PowerLost, WatchdogBite
from kneewise.emulator.bus import OPS, dispatch
from kneewise.emulator.converters import Scaling
from kneewise.emulator.firmware import boot_seed, firmware_module
from kneewise.emulator.mishaps import Value
from kneewise.emulator.prompt import RESET, Prompt
from kneewise.emulator.scenario import Scenario
from kneewise.errors import LinkError

CTRL_C = b"\x03"
PROMPT_POLL_MS = 10
INPUT_RING = 512  # bytes, as on the RP2 port; more than that is lost


INTERRUPT = (
    b"Traceback (most recent call last):\r\n"
    b'  File "main.py", line 1, in <module>\r\n'
    b"KeyboardInterrupt: \r\n"
)


class _DirectBus:
    def __init__(self, board: Board) -> None:
        self._board = board

    def call(self, name: str, a: int, b: int) -> bytes:
        return dispatch(self._board, OPS[name], a, b)


class InProcessTracer:
    """An emulated tracer in this process; `connect` gives a port to it.

    `board` is the emulated board. `unplug` takes power and link away, `plug` gives them back;
    `cut_link` takes the link alone. `change` and `after_closing` let something go wrong.
    """

    rung = "in-process"

    def __init__(
        self, scenario: Scenario, scaling: Scaling, record: bytes, device_id: bytes
    ) -> None:
        self.scenario = scenario
        self.board = Board(scenario, scaling=scaling, clock=lambda: 0.0, cut_link=self.cut_link)
        self.crash: BaseException | None = None
        """What ended the firmware, if anything did."""
        self._device_id = device_id
        self._flash = Path(tempfile.mkdtemp(prefix="kneewise-"))
        weakref.finalize(self, shutil.rmtree, self._flash, ignore_errors=True)
        (self._flash / "profile.bin").write_bytes(seal(record))
        self._boots = 0
        self._to_device = bytearray()
        self._to_host = bytearray()
        self._thread: threading.Thread | None = None
        self._host_until_us = 0
        self._sleeping = False
        self._stopping = False
        self._interrupted = False
        self._prompt: Prompt | None = None
        self._cable: Cable | None = None
        self.firmware: Any = None
        self.plug()

    # -- the host's side ---------------------------------------------------------------

    def connect(self) -> Cable:
        """A port; one that was given before is dead from now on. LinkError without power."""
        if self._thread is None:
            raise no_power(self.crash)
        self.cut_link()
        self._cable = Cable(self)
        return self._cable

    def cut_link(self) -> None:
        """Take the link away; what the tracer says meanwhile is lost."""
        if self._cable is not None:
            self._cable.open = False
            self._cable = None
        self._to_host.clear()

    def exchange(self, seconds: float) -> bytes:
        """Give the firmware its turn, if it has said nothing yet; what it says."""
        if not self._to_host:
            self._device_until(seconds)
            if self.crash is not None and not self._to_host:
                raise no_power(self.crash)
        data = bytes(self._to_host)
        self._to_host.clear()
        return data

    def sleep(self, seconds: float) -> None:
        """Give the firmware its turn for so long, and keep what it says."""
        self._sleeping = True
        try:
            self._device_until(seconds)
        finally:
            self._sleeping = False

    def put_input(self, data: bytes) -> None:
        """Bytes from the host; what its ring does not hold is lost.

        As on the RP2 port, Ctrl-C empties the ring and interrupts what runs.
        """
        if self._prompt is None and CTRL_C in data:
            self._to_device.clear()
            self._interrupted = True
            data = data[data.rindex(CTRL_C) + 1 :]
        self._to_device += data[: INPUT_RING - len(self._to_device)]

    def _device_until(self, seconds: float) -> None:
        if self._thread is None:
            raise no_power(self.crash)
        if self.crash is None:
            # Up, not to nothing: a wait that lets no time pass would be waited for ever.
            self._host_until_us = self.board.virtual_us + max(math.ceil(seconds * 1e6), 0)
            self._device_turn.release()
            self._host_turn.acquire()

    # -- power -------------------------------------------------------------------------

    def plug(self) -> None:
        """Give power: the firmware boots."""
        if self._thread is not None:
            return
        self._stopping = False
        # A firmware that ended by itself, and one that was ended, leave turns that nobody took.
        self._device_turn = threading.Semaphore(0)
        self._host_turn = threading.Semaphore(0)
        self._interrupted = False
        self._prompt = None
        self.crash = None
        self._to_device.clear()
        self._to_host.clear()
        # An unplugging leaves them out of step.
        self._device_turn = threading.Semaphore(0)
        self._host_turn = threading.Semaphore(0)
        self.board.power(True)
        self._boots += 1
        self._thread = threading.Thread(target=self._run, daemon=True, name="emulated tracer")
        self._thread.start()

    def unplug(self) -> None:
        """Take power away at once; every pin is undriven from here on."""
        if self._thread is None:
            return
        self.cut_link()
        # Power first: what the firmware's own clean-up still commands reaches no pin.
        self.board.power(False)
        self._stopping = True
        self._device_turn.release()
        self._thread.join()
        self._thread = None

    def close(self) -> None:
        """Unplug; twice is harmless."""
        self.unplug()

    # -- what goes wrong ---------------------------------------------------------------

    def after_closing(self, delay_us: int, what: str, value: Value = 1) -> None:
        """Let something of `mishaps.py` happen `delay_us` after the source next conducts."""
        self.board.after_closing(delay_us, what, value)

    def change(self, what: str, value: Value = 1) -> None:
        """Let it happen now, as far as the virtual time has come."""
        if what != "power_off":
            self.board.change(what, value)
        elif value:
            self.unplug()
        else:
            self.plug()

    # -- the device's side -------------------------------------------------------------

    def _run(self) -> None:
        self._device_turn.acquire()
        try:
            if self._stopping:
                return
            while True:
                self.firmware = self._boot()
                try:
                    while self._serve() != RESET:
                        pass
                    self.board.reset_cause = SOFT_RESET
                except WatchdogBite:
                    # The bus goes away with the chip, and comes back.
                    self.cut_link()
                    self._to_device.clear()
                self._boots += 1
        except BaseException as error:  # what ends the firmware is told to the host
            self.crash = error
        finally:
            self._host_turn.release()

    def _boot(self) -> Any:
        hal = firmware_module("hal_emulated").EmulatedHal(
            _DirectBus(self.board),
            _Link(self),
            self._device_id,
            boot_seed(self.scenario.seed, self._boots),
        )
        buffers = firmware_module("tracer.memory").Buffers()
        loop = firmware_module("tracer.loop").Loop
        return loop(
            hal, buffers, str(self._flash / "profile.bin"), str(self._flash / "logbook.bin")
        )

    def _serve(self) -> str:
        """Run the firmware, then the prompt that it leaves to; what the prompt was told."""
        try:
            self.firmware.run()
        except KeyboardInterrupt:
            self.put_output(INTERRUPT)
        self._prompt = Prompt()
        link = _Link(self)
        buffer = bytearray(64)
        while True:
            self.put_output(self._prompt.said)
            self._prompt.said = b""
            link.wait(PROMPT_POLL_MS)
            done, rest = self._prompt.feed(bytes(buffer[: link.read(buffer)]))
            if done:
                self.put_output(self._prompt.said)
                self._to_device[:0] = rest
                self._prompt = None
                return done

    def interruption(self) -> None:
        """Raise KeyboardInterrupt where Ctrl-C has come."""
        if self._interrupted:
            self._interrupted = False
            raise KeyboardInterrupt

    def hand_over(self) -> None:
        """Called by the firmware's thread: let the host go on, wait for the next turn."""
        # Without power nobody hands back: what the firmware's clean-up still waits for ends too.
        answered = self._to_host and not self._sleeping
        due = answered or self.board.virtual_us >= self._host_until_us
        if due and not self._stopping:
            self._host_turn.release()
            self._device_turn.acquire()
        if self._stopping:
            raise PowerLost("unplugged")

    def take_input(self, count: int) -> bytes:
        data = bytes(self._to_device[:count])
        del self._to_device[:count]
        return data

    def put_output(self, data: bytes) -> None:
        self._to_host += data

    def host_left_us(self) -> int:
        """Virtual time until the host wants its turn back."""
        return max(self._host_until_us - self.board.virtual_us, 0)

    @property
    def input_waiting(self) -> bool:
        return bool(self._to_device)


class Cable:
    """The host's end of the link: a port on the shared virtual clock."""

    name = "emulator (in-process)"

    def __init__(self, tracer: InProcessTracer) -> None:
        self.open = True
        self._tracer = tracer

    def clock(self) -> float:
        return self._tracer.board.virtual_us / 1e6

    def sleep(self, seconds: float) -> None:
        self._tracer.sleep(seconds)

    def read(self, timeout_s: float) -> bytes:
        self._check()
        return self._tracer.exchange(timeout_s)

    def write(self, data: bytes) -> None:
        self._check()
        self._tracer.put_input(data)

    def close(self) -> None:
        if self.open:
            self._tracer.cut_link()

    def _check(self) -> None:
        if not self.open:
            raise no_power(None)


def no_power(crash: BaseException | None) -> LinkError:
    """What a host sees of a tracer whose firmware does not run or whose cable is cut."""
    return LinkError(
        f"talking to {Cable.name}",
        found=f"the firmware has ended ({crash!r})" if crash is not None else "the link is cut",
        expected="a running tracer",
        next_step="plug it in again",
    )


class _Link:
    """What the firmware's emulated board file calls its link."""

    def __init__(self, owner: InProcessTracer) -> None:
        self._owner = owner

    def wait(self, ms: int) -> bool:
        owner = self._owner
        if owner.input_waiting:
            return True
        if ms:
            owner.hand_over()
            if not owner.input_waiting:
                owner.board.wait(min(1000 * ms, owner.host_left_us()))
        return owner.input_waiting

    def read(self, buffer: bytearray) -> int:
        self._owner.interruption()
        data = self._owner.take_input(len(buffer))
        buffer[: len(data)] = data
        return len(data)

    def write(self, data: bytes) -> int:
        self._owner.put_output(bytes(data))
        return len(data)

    def pace(self, us: int) -> None:
        self._owner.hand_over()
        self._owner.interruption()
