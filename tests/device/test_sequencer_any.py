"""If this fails, some order of events puts contact and bleed together or forgets a fault."""

from __future__ import annotations

from fake_board import FakeBoard, profile
from hypothesis import settings
from hypothesis import strategies as st
from hypothesis.stateful import RuleBasedStateMachine, initialize, invariant, precondition, rule
from test_sequencer import EVENTS, LID, NAMES, STATES, WAYS, Logbook, module

FINDINGS = st.sampled_from([LID, (1, 500, 200, 1), (2, 39000, 200, 1), (4, 1, 1, 1), (7, 0, 0, 3)])


class AnyOrder(RuleBasedStateMachine):
    """Events, voltages and times in any order."""

    @initialize(volt=st.floats(0, 60))
    def start(self, volt):
        self.board = FakeBoard()
        self.board.capacitor_v = volt
        self.sequencer = module.Sequencer(self.board, profile(), Logbook(None))
        self.latched = None
        self.sequencer.tick()
        self.follow()

    def state(self) -> str:
        return NAMES[STATES.index(self.sequencer.state)]

    def follow(self, *, clears: bool = False) -> None:
        """Once in a fault, only clearing leads out of it."""
        if self.latched and not clears:
            assert self.state() == "fault"
        self.latched = self.state() == "fault"

    @rule(volt=st.floats(0, 60))
    def capacitor(self, volt):
        self.board.capacitor_v = volt

    @rule(volt=st.floats(1, 66))
    def source(self, volt):
        self.board.source_v = volt

    @rule(welded=st.booleans(), broken=st.booleans(), ohm=st.sampled_from([100.0, 4000.0]))
    def wear(self, welded, broken, ohm):
        self.board.welded, self.board.bleed_broken, self.board.bleed_ohm = welded, broken, ohm

    @rule(turns=st.integers(1, 60))
    def time_passes(self, turns):
        for _ in range(turns):
            self.sequencer.tick()
            self.sequencer.pause()
        self.follow()

    @rule(event=st.sampled_from([e for e in EVENTS if e not in ("CLEAR", "FIRE", "FAULT")]))
    def bare_event(self, event):
        before = self.state()
        try:
            self.sequencer.event(getattr(module, "EV_" + event))
        except ValueError:
            assert event not in WAYS[before]
        else:
            assert self.state() == WAYS[before][event]
        self.follow()

    @rule(token=st.integers(1, 2**32 - 1), confirmed=st.booleans())
    def arm(self, token, confirmed):
        if self.state() != "safe":
            return
        finding = self.sequencer.arm(token, self.sequencer.readings(confirmed))
        assert (self.state() == "armed") is (finding is None)
        if finding is None:
            assert confirmed
            assert self.board.source_v < 60.02
            assert self.board.capacitor_v < max(0.005 * self.board.source_v, 0.05) + 0.02

    @rule()
    def disarm(self):
        self.sequencer.disarm()
        self.follow()

    @precondition(lambda self: self.state() == "armed")
    @rule(ms=st.integers(1, 4), finding=st.none() | FINDINGS)
    def charge(self, ms, finding):
        board, sequencer = self.board, self.sequencer
        sequencer.event(module.EV_FIRE)
        assert sequencer.token == 0
        board.bleed(False)
        board.pass_us(26_000)
        board.relay(True)
        board.pulse(5000)
        board.pass_us(1000 * ms)
        board.pulse(0)
        board.relay(False)
        board.pass_us(25_000)
        board.bleed(True)
        if finding is None:
            sequencer.event(module.EV_OPENED)
        else:
            sequencer.fault(finding)
        self.follow()

    @rule(finding=FINDINGS)
    def fault(self, finding):
        self.sequencer.fault(finding)
        assert self.state() == "fault"
        self.follow()

    @precondition(lambda self: self.state() == "fault")
    @rule()
    def clear(self):
        if self.sequencer.clear() is not None:
            assert self.sequencer.finding[0] == 2
            assert self.sequencer.heat.mj() > 20_000
            return
        assert self.state() == "bleeding"
        assert self.sequencer.finding == module.NO_FINDING
        self.follow(clears=True)

    @invariant()
    def outputs_are_what_the_state_means(self):
        board, sequencer = self.board, self.sequencer
        assert self.state() != "charging"
        assert not board.relay_closed
        assert not board.conducting
        assert board.bleed_engaged == sequencer.bleed_engaged
        if not board.bleed_engaged:
            assert (self.state(), sequencer.finding[0]) == ("fault", 2)
        assert not sequencer.contact_closed

    @invariant()
    def token_and_watchdog_go_with_the_state(self):
        assert bool(self.sequencer.token) <= (self.state() == "armed")
        assert (self.board.watchdog_ms == 0) is (self.state() == "safe")

    @invariant()
    def a_finding_stands_exactly_in_a_fault(self):
        assert (self.sequencer.finding != module.NO_FINDING) is (self.state() == "fault")


TestAnyOrder = AnyOrder.TestCase
TestAnyOrder.settings = settings(max_examples=150, stateful_step_count=40, deadline=None)
