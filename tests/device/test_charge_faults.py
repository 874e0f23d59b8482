"""If these fail, an error in mid-charge leaves the contact closed or the bleed released."""

from __future__ import annotations

from typing import Any

import pytest
from charging import Rig, module
from fake_board import FakeBoard

INTERRUPTED = module.INTERRUPTED


class Broken(Exception):
    pass


class Tripwire:
    """The board, except that the calls of the given numbers raise, before or after their act."""

    def __init__(self, board: FakeBoard, numbers: tuple[int, ...], kind: type, acts: bool) -> None:
        self._board = board
        self._numbers = numbers
        self._kind = kind
        self._acts = acts
        self.made: list[str] = []

    def __getattr__(self, name: str) -> Any:
        thing = getattr(self._board, name)
        if not callable(thing):
            return thing

        def call(*values: Any) -> Any:
            self.made.append(name)
            fails = len(self.made) in self._numbers
            if fails and not self._acts:
                raise self._kind(f"in {name}, call {len(self.made)}")
            result = thing(*values)
            if fails:
                raise self._kind(f"in {name}, call {len(self.made)}")
            return result

        return call


def run(
    *numbers: int, kind: type = Broken, acts: bool = False
) -> tuple[FakeBoard, Tripwire, Rig, BaseException | None]:
    board = FakeBoard(capacitance_f=100e-6)
    wire = Tripwire(board, numbers, kind, acts)
    rig = Rig(board, through=wire)
    try:
        rig.result = rig.run()
    except kind as error:
        return board, wire, rig, error
    return board, wire, rig, None


CALLS = run()[1].made
ALL = range(1, len(CALLS) + 1)


def unsafe(board: FakeBoard, rig: Rig) -> list[str]:
    """What is wrong with the state that a charge has left."""
    wrong = {
        "the wave runs": board.time_us < board.pulse_until_us,
        "the relay is closed": board.relay_closed,
        "the bleed is released": not board.bleed_engaged,
        "the voltage is measured at its zero": board.voltage_at_zero,
        "the sequencer takes the contact for closed": rig.outputs.contact_closed,
        "the sequencer takes the bleed for released": not rig.outputs.bleed_engaged,
    }
    return [what for what, holds in wrong.items() if holds]


def test_the_calls_that_are_broken_below_are_all_there():
    assert len(CALLS) > 80
    named = {"read", "zero_input", "bleed", "relay", "pulse", "capture_stop", "quiet_end"}
    assert named <= set(CALLS)


@pytest.mark.parametrize("acts", [False, True], ids=["before its act", "after its act"])
@pytest.mark.parametrize("kind", [Broken, KeyboardInterrupt, MemoryError])
def test_an_error_in_any_call_ends_with_contact_open_and_bleed_engaged(kind, acts):
    found = {}
    for number in ALL:
        board, _, rig, error = run(number, kind=kind, acts=acts)
        wrong = unsafe(board, rig)
        # Ctrl-C ends a charge as an abort would; `loop.py` raises it again.
        kept = kind is KeyboardInterrupt and error is None
        if error is None and not (kept and rig.result.end_reason == INTERRUPTED):
            wrong.append("the error was swallowed")
        if wrong:
            found[f"{CALLS[number - 1]}, call {number}"] = wrong
    assert found == {}


def test_a_second_error_in_the_clean_up_of_the_first_ends_safe_as_well():
    found = {}
    for first in range(5, len(CALLS), 7):
        for later in range(1, 9):
            board, wire, rig, error = run(first, first + later)
            if wire.made[first + later - 1 :][:1] == ["safe"]:
                continue  # `loop.py` calls that one again
            wrong = unsafe(board, rig)
            if error is None:
                wrong.append("the error was swallowed")
            if wrong:
                found[first, later] = wrong
    assert found == {}


@pytest.mark.parametrize("acts", [False, True], ids=["before its act", "after its act"])
def test_after_an_error_the_board_allocates_and_sends_again(acts):
    stays = []
    for number in ALL:
        board, _, _, _ = run(number, acts=acts)
        # Where the end of the quiet is itself what fails, `loop.py` ends it again.
        if board.quiet and CALLS[number - 1] != "quiet_end":
            stays.append(number)
    assert stays == []
