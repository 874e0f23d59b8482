"""If these fail, a bad link, a reset or a pulled cable makes a curve silently wrong, or hangs.

The invariant: what the host delivers equals what the device measured, or an exception says
otherwise; the contact closes at most once for each sweep asked for; no call outlasts its
deadlines; and when the link is good again, the tracer answers.
"""

from __future__ import annotations

import contextlib
from collections.abc import Callable
from typing import Any
from unittest import mock

import numpy as np
import pytest
from hypothesis import HealthCheck, settings
from hypothesis import strategies as st
from hypothesis.stateful import RuleBasedStateMachine, invariant, rule

from kneewise import FullRate
from kneewise.emulator.faults import FaultyPort, LinkFaults
from kneewise.emulator.opener import connector, start
from kneewise.emulator.scenario import Scenario
from kneewise.errors import KneewiseError
from kneewise.instrument.opened import Opened
from kneewise.instrument.sweep import unpack_records
from kneewise.instrument.trace import RawKnots, Trace
from kneewise.instrument.tracer import Tracer

NONCES = [int.from_bytes(b"abc" + bytes([97 + n]), "little") for n in range(26)]
CALL_S = 300.0  # of virtual time; the worst link needs about 210

SCENARIO = Scenario.default().varied(load={"capacitance_f": 470e-6})  # a sweep of 3 ms
# What a link may do, and how badly a link can be while a sweep still has a chance.
PROBABLY = st.sampled_from([0.0, 0.001, 0.01, 0.03])
RARELY = st.sampled_from([0.0, 0.02, 0.2])


def alike(one: RawKnots, other: RawKnots) -> bool:
    names = ("time_us", "voltage_sum", "current_sum", "pairs", "voltage_scatter", "current_scatter")
    return all(np.array_equal(getattr(one, name), getattr(other, name)) for name in names)


def records_of(held: Any) -> bytes:
    """The knot records of a held sweep, as the firmware writes them into its blocks."""
    return b"".join(bytes(piece) for piece in held.pieces())


class Events:
    """A port that lets something happen at its n-th read."""

    def __init__(self, port: FaultyPort) -> None:
        self.port = port
        self.name = port.name
        self.left = -1
        self.event: Callable[[], None] = lambda: None

    def __getattr__(self, name: str) -> Any:
        return getattr(self.port, name)

    def read(self, timeout_s: float) -> bytes:
        self.left -= 1
        if self.left == 0:
            self.event()
        return self.port.read(timeout_s)


class LinkMachine(RuleBasedStateMachine):
    def __init__(self) -> None:
        super().__init__()
        # What the library draws at random decides which bytes a bad link spoils.
        self.drawn = 0
        self.patches = [
            mock.patch("kneewise.link.session.quiet_nonce", self._nonce),
            mock.patch("secrets.token_bytes", self._token),
        ]
        for patch in self.patches:
            patch.start()
        self.emulated = start(SCENARIO, "in-process")
        self.connect = connector(self.emulated)
        self.faults = LinkFaults()
        self.ports = 0
        self.port: Events | None = None
        self.pending: tuple[int, Callable[[], None]] | None = None
        self.tracer: Tracer | None = None
        self.host_starts_anew()

    def teardown(self) -> None:
        if self.tracer is not None:
            self.tracer.close()
        self.emulated.close()
        for patch in self.patches:
            patch.stop()

    def _nonce(self) -> int:
        self.drawn += 1
        return NONCES[self.drawn % len(NONCES)]

    def _token(self, count: int) -> bytes:
        self.drawn += 1
        # As a drawn one, hardly any zeros: they make the frames of a fetch twice as long.
        return bytes((7 * self.drawn + place) % 250 + 6 for place in range(count))

    def _open(self) -> Events:
        self.ports += 1
        self.port = Events(FaultyPort(self.connect(), self.faults, self.ports))
        if self.pending is not None:
            self.port.left, self.port.event = self.pending
            self.pending = None
        return self.port

    def _within_its_time(self, action: Callable[[], Any]) -> Any:
        board = self.emulated.board
        began_us = board.virtual_us
        try:
            return action()
        except KneewiseError:
            return None
        finally:
            assert board.virtual_us - began_us < CALL_S * 1e6

    def _closings(self) -> int:
        record = self.emulated.board.record
        return sum(entry[1:] == ("switch_contact", 1) for entry in record)

    # -- what happens ----------------------------------------------------------------------

    @rule(
        lose=PROBABLY,
        corrupt=PROBABLY,
        repeat=PROBABLY,
        piece=st.tuples(RARELY, RARELY, RARELY, RARELY),
    )
    def the_link_gets_worse_or_better(self, lose, corrupt, repeat, piece) -> None:
        self.faults = LinkFaults(
            lose=lose,
            corrupt=corrupt / 10,
            repeat=repeat,
            lose_piece=piece[0],
            repeat_piece=piece[1],
            delay_piece=piece[2],
            truncate_piece=piece[3],
        )
        if self.port is not None:
            self.port.port.faults = self.faults

    @rule()
    def host_starts_anew(self) -> None:
        if self.tracer is not None:
            self.tracer.close()
        opened = Opened(connect=self._open, close=lambda: None, rung="in-process")
        self.tracer = None
        with contextlib.suppress(KneewiseError):
            self.tracer = Tracer(opened)

    @rule()
    def status_is_asked_for(self) -> None:
        if self.tracer is not None:
            self._within_its_time(self.tracer.status)

    @rule(
        knots=st.sampled_from([16, 40, 96]),
        event=st.sampled_from(["", "", "reset", "cut", "ctrl-c"]),
        at=st.integers(1, 40),
        full_rate=st.sampled_from([None, FullRate(start_s=0.001, duration_s=0.001)]),
    )
    def sweep(self, knots: int, event: str, at: int, full_rate: FullRate | None) -> None:
        if self.tracer is None:
            return
        if event and self.port is not None:
            self.port.left, self.port.event = at, getattr(self, "_" + event.replace("-", "_"))
        before = self._closings()
        seen: list[Trace] = []

        def keep(trace: Trace) -> None:
            held = self.emulated.firmware.held
            assert alike(trace.raw, unpack_records(records_of(held))), "not what was measured"
            if full_rate is not None:
                codes = np.frombuffer(held._raw, dtype="<u2").reshape(-1, 2)[: held.raw_count]
                kept = trace.full_rate.raw
                assert (np.stack([kept.voltage, kept.current], axis=1) == codes).all()
            seen.append(trace)

        trace = self._within_its_time(
            lambda: self.tracer.sweep(knots=knots, full_rate=full_rate, keep=keep)
        )
        assert trace is None or seen == [trace] or seen[0] is trace
        assert self._closings() - before <= 1, "closed twice for one sweep"

    @rule()
    def a_held_sweep_is_fetched(self) -> None:
        if self.tracer is None:
            return
        before = self._closings()
        self._within_its_time(self.tracer.held)
        assert self._closings() == before

    @rule()
    def a_damaged_byte_becomes_ctrl_c(self) -> None:
        self._ctrl_c()

    def _ctrl_c(self) -> None:
        self.emulated.put_input(b"\x03")

    def _reset(self) -> None:
        self.emulated.unplug()
        self.emulated.plug()

    def _cut(self) -> None:
        self.emulated.cut_link()

    # -- what holds ------------------------------------------------------------------------

    @invariant()
    def nothing_has_failed_inside(self) -> None:
        assert self.emulated.crash is None

    @rule()
    def on_a_good_link_the_tracer_answers(self) -> None:
        self.the_link_gets_worse_or_better(0.0, 0.0, 0.0, (0.0, 0.0, 0.0, 0.0))
        self.host_starts_anew()
        assert self.tracer is not None
        assert self.tracer.rest().state == "safe"
        self.tracer.held()
        before = self._closings()
        assert self.tracer.sweep(knots=16).end_reason == "complete"
        assert self._closings() == before + 1


LinkMachine.TestCase.settings = settings(
    max_examples=25,
    stateful_step_count=12,
    deadline=None,
    suppress_health_check=[HealthCheck.too_slow],
)
TestLinkMachine = pytest.mark.clause("S2", "S6", "W4", "W9", "W12", "W14", "R3", "F6")(
    LinkMachine.TestCase
)
