"""If this fails, some sequence of requests and faults leaves a hazard behind.

The whole firmware on the board of plain numbers, both kinds of contact, driven at random. A tenth
of the sequences that the design asks for is run each time; KNEEWISE_SEQUENCES=5000 runs them all.
"""

from __future__ import annotations

import atexit
import os
import shutil
import tempfile
from pathlib import Path

from fake_board import FakeBoard
from hosting import Device
from hypothesis import HealthCheck, settings
from hypothesis import strategies as st
from hypothesis.stateful import RuleBasedStateMachine, initialize, invariant, rule

from kneewise.emulator.firmware import firmware_module

plane = firmware_module("tracer.plane")
FOLDER = Path(tempfile.mkdtemp(prefix="kneewise-any-"))
atexit.register(shutil.rmtree, FOLDER, ignore_errors=True)
SEQUENCES = int(os.environ.get("KNEEWISE_SEQUENCES", "500"))
LIMIT_MS = 200
SAFE_V = 12.0
COLD_A = 0.4  # 1 % of the rating, and what flows between two looks
SWEEP = bytes(range(16))


class WatchedBoard(FakeBoard):
    """Notes how long the contact conducted at most."""

    def __init__(self) -> None:
        super().__init__()
        self.longest_us = 0
        self._since_us = 0

    def check(self) -> None:
        if self.conducting and not self._was_conducting:
            self._since_us = self.time_us
        if self.conducting:
            self.longest_us = max(self.longest_us, self.time_us - self._since_us)
        super().check()

    @staticmethod
    def errors(bins, work, cuts, k) -> None:
        """All alike, for speed: where knots stand is no hazard."""
        for number in range(k[plane.K_COUNT]):
            work[k[plane.K_OUT] + number] = 1


class AnySequence(RuleBasedStateMachine):
    """Requests, faults of the board, resets and Ctrl-C in any order."""

    @initialize(bare=st.booleans(), volt=st.sampled_from([0.0, 5.0, 40.0]))
    def start(self, bare: bool, volt: float) -> None:
        self.board = WatchedBoard()
        self.board.capacitor_v = volt
        self.bare = bare
        kind = {"contact": 2, "bounce_ms": 1, "breaks_dc": 0} if bare else {}
        self.profile = {**kind, "heartbeat_lost_ms": 1000}
        self.device = Device(self.board, FOLDER, **self.profile)
        self.latched = self.device.state() == "fault"

    def follow(self, *, cleared: bool = False) -> None:
        if self.latched and not cleared:
            assert self.device.state() == "fault", "a fault was left without being cleared"
        self.latched = self.device.state() == "fault"

    # -- the world -------------------------------------------------------------------------

    @rule(
        what=st.sampled_from(
            [
                {"welded": True},
                {"bleed_broken": True},
                {"bleed_ohm": 0.5},
                {"bleed_ohm": 4000.0},
                {"source_v": 3.0},
                {"source_v": 55.0, "source_a": 25.0},
                {"source_v": 66.0},
                {"source_a": 0.3},
                {"loop_closed": False},
                {"reversed": True},
                {"current_offset_codes": 60},
            ]
        )
    )
    def goes_wrong(self, what: dict[str, object]) -> None:
        for name, value in what.items():
            setattr(self.board, name, value)

    @rule()
    def mend(self) -> None:
        board = self.board
        board.welded = board.bleed_broken = board.reversed = False
        board.bleed_ohm, board.loop_closed, board.current_offset_codes = 100.0, True, 0
        board.source_v, board.source_a = 40.0, 9.0

    @rule(ms=st.sampled_from([20, 300, 2500]))
    def time_passes(self, ms: int) -> None:
        self.device.turns(ms=ms)
        self.follow()

    # -- the host --------------------------------------------------------------------------

    @rule(
        confirmed=st.sampled_from([1, 1, 1, 0]),
        exercise=st.sampled_from([0, 0, 0, 0, 1, 3]),
        after_us=st.integers(0, 4000),
        what=st.sampled_from(
            ["", "", "abort", "lid", "weld", "source", "supervision", "ring", "ctrl-c", "power"]
        ),
    )
    def sweep(self, confirmed: int, exercise: int, after_us: int, what: str) -> None:
        """Arm and fire, whatever the state; something may happen in mid-charge."""
        device, board = self.device, self.board
        device.turns(lambda: device.rested() or device.state() == "fault", ms=2000)
        self.follow()
        if device.loop.held.present():
            device.ask("acknowledge", {"sweep_id": device.loop.held.sweep_id})
        armed = device.arm(confirmed=confirmed, exercise=exercise, closed_limit_ms=LIMIT_MS)
        if armed.name != "arm_reply":
            assert device.state() != "charging"
            return
        closings, hot = board.closings, len(board.opened_at_a)
        board.after_closing(after_us, lambda: self.happen(what))
        fired = device.fire(armed["token"])
        try:
            device.turns(ms=1)
        except KeyboardInterrupt:
            self.back_from_the_prompt()
        self.calm()
        device.turns(ms=20)
        device.heard()
        assert board.closings <= closings + (fired.name == "fire_reply")
        if self.bare and what != "power":
            assert all(current < COLD_A for current in board.opened_at_a[hot:])
        self.follow()

    @rule(after_us=st.integers(0, 4000), what=st.sampled_from(["", "abort", "lid", "weld"]))
    def plain_sweep(self, after_us: int, what: str) -> None:
        self.sweep(1, 0, after_us, what)

    @rule()
    def mended_sweep(self) -> None:
        """With everything as it should be, and what was latched cleared."""
        self.mend()
        self.clear()
        self.sweep(1, 0, 0, "")

    def happen(self, what: str) -> None:
        board = self.board
        if what == "abort":
            board.incoming += self.device.abort()
        elif what == "lid":
            board.loop_closed = False
        elif what == "weld":
            board.welded = True
        elif what == "source":
            board.source_v, board.source_a = 64.0, 22.0
        elif what == "supervision":
            board.supervision_stops_us = board.time_us
        elif what == "ring":
            board.overtaken = 5000
        elif what == "ctrl-c":
            read = type(board).link_read

            def strike(buffer):
                board.link_read = read.__get__(board)
                raise KeyboardInterrupt

            board.link_read = strike

    def calm(self) -> None:
        self.board.supervision_stops_us = None
        self.board.overtaken = 0
        self.board.__dict__.pop("link_read", None)
        self.board._on_closing = None
        self.board._events.clear()

    def back_from_the_prompt(self) -> None:
        assert not self.board.conducting
        self.device.loop.leave()
        self.device.loop.sequencer.resume()
        self.device.loop.forget_fire()

    @rule()
    def abort(self) -> None:
        self.device.say(self.device.abort())
        self.follow()

    @rule()
    def clear(self) -> None:
        answer = self.device.ask("clear_fault")
        if answer.name == "clear_fault_reply":
            assert self.latched
            self.follow(cleared=True)
        self.follow()

    @rule()
    def ctrl_c(self) -> None:
        """To the prompt and back, in any state but charging."""
        self.back_from_the_prompt()
        self.follow()

    @rule()
    def reset(self) -> None:
        """Pins let go, and the firmware starts anew."""
        board = self.board
        board.pulse_until_us, board.relay_closed, board.bleed_engaged = 0, False, True
        board.check()
        self.device = Device(board, FOLDER, **self.profile)
        self.latched = self.device.state() == "fault"

    # -- what must hold --------------------------------------------------------------------

    @invariant()
    def the_contact_is_open_outside_a_charge(self) -> None:
        board, sequencer = self.board, self.device.sequencer
        assert self.device.state() != "charging"
        assert not board.relay_closed
        assert not board.conducting
        assert not sequencer.contact_closed
        assert board.bleed_engaged == sequencer.bleed_engaged
        if not board.bleed_engaged:
            assert (self.device.state(), sequencer.finding[0]) == ("fault", 2)

    @invariant()
    def no_contact_was_closed_for_too_long(self) -> None:
        """A bare relay has its pulse, and twice two thirds of it more."""
        most_us = 1000 * LIMIT_MS * (7 / 3 if self.bare else 1) + 10_000
        assert self.board.longest_us <= most_us

    def teardown(self) -> None:
        """In the end: empty where the plant allows it, and told where it does not."""
        if not hasattr(self, "device"):
            return
        board, device = self.board, self.device
        device.turns(ms=8000)
        state = device.state()
        if board.welded or board.bleed_broken or board.bleed_ohm > 100:
            if board.capacitor_v > SAFE_V:
                assert state == "fault"
                assert device.sequencer.finding[0] in (1, 2)
        else:
            assert board.capacitor_v < SAFE_V
            assert state in ("safe", "fault")
        status = device.ask("status")
        code = status["capacitor_sum"] / status["conversions"]
        assert abs((code - 24) * 0.0165 - board.capacitor_v) < 0.05


TestAnySequence = AnySequence.TestCase
TestAnySequence.settings = settings(
    max_examples=SEQUENCES,
    stateful_step_count=12,
    deadline=None,
    suppress_health_check=list(HealthCheck),
)
