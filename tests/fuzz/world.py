"""The firmware on a board of plain numbers, driven from the board's side.

The firmware's own loop runs as it does on a board. Whenever it has nothing left to do it waits
for the host, and there `turn` is called: it lets bytes arrive, changes the world, lets time
pass, or ends the run by raising `Done`. An interruption (0x03) empties the input ring and strikes
at any later call of the board, as it may on the RP2 port.
"""

from __future__ import annotations

import atexit
import shutil
import sys
import tempfile
from array import array
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from functools import cache
from pathlib import Path
from typing import Any

from cobs import cobs

from kneewire.catalogue import STATES
from kneewire.profile_record import seal
from kneewise.emulator.firmware import firmware_module

from .oracle import Oracle, watch

sys.path.insert(0, str(Path(__file__).parents[1] / "device"))

from fake_board import PAIR_US, V_PER_CODE, Buffers, FakeBoard, record

service_module = firmware_module("tracer.service")
loop_module = firmware_module("tracer.loop")
plane = firmware_module("tracer.plane")
RELAY_OPEN = firmware_module("tracer.interlocks").RELAY_OPEN
TRIP_OVER_CURRENT = firmware_module("tracer.hal").TRIP_OVER_CURRENT

RING_BYTES = 512  # the port's input ring
# Sweeps of a few milliseconds, so that there can be thousands; a lost host is noticed in a second.
CAPACITANCE_F = 10e-6
# The bleed resistor is cool again at once: how it cools has tests of its own.
PROFILE = {"heartbeat_lost_ms": 1000, "capacitance_nf": 10_000, "bleed_mw": 1_000_000}


class Done(BaseException):
    """Raised by a turn: the run is over."""


class FuzzBoard(FakeBoard):
    """Keeps no record of calls; the rest as said above."""

    def __init__(self) -> None:
        super().__init__(capacitance_f=CAPACITANCE_F)
        self.turn: Callable[[int], None] = lambda ms: self.pass_us(1000 * ms)
        self.listening: Callable[[], None] = lambda: None
        self.closing: Callable[[], None] = lambda: None
        self.relay_left_open: Callable[[], bool] = lambda: False
        self.interruptions = 0
        self.heard = 0
        """Bytes that came in this charge."""
        self._strikes: list[int] = []
        self._pulsed = False

    def _note(self, name: str, *values: Any) -> None:
        if self._strikes:
            self._strikes[0] -= 1
            if self._strikes[0] <= 0:
                self.strike()

    # -- the port --------------------------------------------------------------------------

    def arrive(self, data: bytes, *strikes: int) -> None:
        """Bytes from the host. A 0x03 strikes after so many calls of the board, and again."""
        if b"\x03" in data:
            self.incoming.clear()
            data = data[data.rindex(b"\x03") + 1 :]
            self._strikes = list(strikes or (1,))
        self.incoming += data[: RING_BYTES - len(self.incoming)]

    def interrupt_after(self, calls: int) -> None:
        """A 0x03 comes when the firmware has called the board so many times more."""
        self._strikes.append(calls)

    def calm(self) -> None:
        """No 0x03 is on its way."""
        self._strikes = []

    def strike(self) -> None:
        """Ctrl-C reaches the interpreter."""
        self._strikes = self._strikes[1:]
        self.incoming.clear()
        self.interruptions += 1
        raise KeyboardInterrupt

    def link_read(self, buffer: bytearray) -> int:
        if not self.quiet:
            return super().link_read(buffer)
        if self.pairs is not None:
            self.listening()
        count = super().link_read(buffer)
        self.heard += count
        return count

    def quiet_begin(self) -> None:
        super().quiet_begin()
        self.heard = 0
        self._pulsed = False

    def link_write(self, data: bytes) -> int:
        self._note("link_write")
        return super().link_write(data)

    def link_wait(self, ms: int) -> None:
        self.turn(ms)

    def bleed_wait(self, ms: int) -> None:
        self.turn(ms)

    def _convert(self, us: int, start: float, toward: float, tau_us: float) -> None:
        """As its base does, but a curve that has come to its end is written in one piece."""
        settled = not self.conducting or abs(toward - start) < V_PER_CODE / 4
        many = us // PAIR_US
        place = (self.pairs or 0) % self.RING_PAIRS
        if not settled or many < 2 or place + many > self.RING_PAIRS or self.pairs_stop_at:
            super()._convert(us, start, toward, tau_us)
            return
        super()._convert(PAIR_US, start, toward, tau_us)
        self.ring[place + 1 : place + many] = array("I", [self.ring[place]]) * (many - 1)
        self.pairs += many - 1

    # -- the contact -----------------------------------------------------------------------

    def relay(self, closed: bool) -> None:
        if closed:
            self.closing()
        super().relay(closed)

    def pulse(self, us: int) -> None:
        if us and not self.relay_closed:
            assert self.relay_left_open(), "a pulse without a closed relay"
            if not self._pulsed:
                self.closing()
            self._pulsed = True
        super().pulse(us)

    def hang(self) -> None:
        """Goes on: what becomes of a firmware that hangs has tests of its own."""

    @staticmethod
    def errors(bins: Any, work: Any, cuts: Any, k: Any) -> None:
        """All alike, for speed: where knots stand closes no contact, and has tests of its own."""
        for number in range(k[plane.K_COUNT]):
            work[k[plane.K_OUT] + number] = 1

    @staticmethod
    def cobs_into(body: bytearray, count: int, out: bytearray) -> int:
        """In C, for speed; coder.py has tests of its own."""
        coded = cobs.encode(bytes(body[:count])) + b"\0"
        out[: len(coded)] = coded
        return len(coded)

    def mend(self) -> None:
        """The world as it should be."""
        self.source_v, self.source_a = 40.0, 9.0
        self.bleed_ohm = 100.0
        self.loop_closed, self.reversed = True, False
        self.welded = self.bleed_broken = False
        self.current_offset_codes = 0
        self.pairs_stop_at = None
        self.write_room = None
        self._events.clear()
        self._on_closing = None


@cache
def _profile_file() -> str:
    folder = Path(tempfile.mkdtemp(prefix="kneewise-fuzz-"))
    atexit.register(shutil.rmtree, folder, ignore_errors=True)
    path = folder / "profile.bin"
    path.write_bytes(seal(record(**PROFILE)))
    return str(path)


class Rig:
    """A board, the firmware on it, and the oracle between it and the host."""

    def __init__(self, buffers: Any = None) -> None:
        self.board = FuzzBoard()
        self.loop = loop_module.Loop(self.board, buffers or Buffers(), _profile_file(), None)
        service = self.loop.service
        self.board.relay_left_open = lambda: service.armed.exercise == RELAY_OPEN
        self.oracle = Oracle(lambda: self.board.time_us)
        self.prompts = 0
        """Times that the firmware was left for the prompt."""
        watch(self.loop.service, self.board, self.oracle)

    def state(self) -> str:
        return STATES[self.loop.sequencer.state]

    def serve(self, turn: Callable[[int], None]) -> None:
        """The firmware, after each way to the prompt anew, until a turn raises Done."""
        board = self.board

        def checked(ms: int) -> None:
            assert not board.relay_closed, "the relay is closed outside a charge"
            turn(ms)

        board.turn = checked
        while True:
            try:
                self.loop.run()
            except KeyboardInterrupt:
                pass
            except Done:
                return
            finally:
                assert not board.relay_closed, "left with the contact closed"
                assert board.pulse_until_us <= board.time_us, "left with the pulse running"
                self.oracle.left()
            self.prompts += 1
            board.incoming.clear()
            # Struck twice, a charge may have left its capture running; the next reading halts it.
            board.pairs = None

    def greet(self, hello: bytes) -> None:
        """After whatever came before: a hello is answered, once the firmware runs again.

        The guard that a host sends before it ends what noise has left behind.
        """
        board, oracle = self.board, self.oracle
        board.calm()
        board.mend()
        oracle.reads_all = True
        oracle.notices(bytes(board.sent))
        board.sent.clear()
        hellos = oracle.replies["hello_reply"]
        board.incoming.clear()
        board.arrive(hello)
        turns = iter(range(3))

        def turn(ms: int) -> None:
            if next(turns, None) is None:
                raise Done

        self.serve(turn)
        assert oracle.replies["hello_reply"] == hellos + 1, "hello is not answered"


@contextmanager
def counted_handlers(service: Any, reached: Callable[[str], None]) -> Iterator[None]:
    """Tells `reached` the name of each handler that is called, `abort` included."""
    handlers = service_module.HANDLERS
    before = dict(handlers)

    def counted(name: str, handler: Callable[..., Any]) -> Callable[..., Any]:
        def call(*given: Any) -> Any:
            reached(name)
            return handler(*given)

        return call

    try:
        for name, handler in before.items():
            handlers[name] = counted(name, handler)
        if "abort" not in before:
            service._abort = counted("abort", service._abort)
        yield
    finally:
        handlers.update(before)
        service.__dict__.pop("_abort", None)


__all__ = ["Buffers", "Done", "FuzzBoard", "Rig", "counted_handlers", "service_module"]
