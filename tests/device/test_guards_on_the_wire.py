"""If these fail, a host is not told what a guard has seen, or a proof test proves nothing."""

from __future__ import annotations

import pytest
from fake_board import FakeBoard, Hung
from hosting import Device, refusal

from kneewire import catalogue

WRONG_STATE, INTERLOCK, OUT_OF_RANGE = 5, 8, 11
MV, MA, MJ = 1, 2, 4
REASONS = {text: code for code, text in catalogue.END_REASONS.items()}
DIGEST = bytes(range(100, 116))


@pytest.fixture
def device(board, tmp_path):
    return Device(board, tmp_path)


def finding(answer) -> tuple[int, int, int, int]:
    return tuple(answer[name] for name in ("guard", "measured", "limit", "unit"))


def ended(device) -> str:
    answers = device.heard()
    (notice,) = (answer for answer in answers if answer.name == "charge_ended")
    return catalogue.END_REASONS[notice["end_reason"]]


# -- what is named -------------------------------------------------------------------------


@pytest.mark.clause("G1")
def test_a_refusal_names_what_was_measured_and_a_fault_says_it_again(device):
    device.board.source_v = 66.0
    answer = device.arm()
    assert refusal(answer) == INTERLOCK
    assert finding(answer) == (4, pytest.approx(66_000, abs=20), 60_000, MV)
    device.board.source_v = 40.0
    device.board.after_closing(2000, lambda: setattr(device.board, "source_v", 64.0))
    device.sweep()
    latched = (4, pytest.approx(61_000, abs=1500), 60_000, MV)
    assert finding(device.ask("status")) == latched
    answer = device.arm()
    assert refusal(answer) == WRONG_STATE
    assert finding(answer) == latched


@pytest.mark.clause("G2")
def test_a_lower_limit_counts_and_a_higher_does_not(device):
    assert finding(device.arm(limit_mv=39_000)) == (4, 39_996, 39_000, MV)
    assert device.arm(limit_mv=70_000).name == "arm_reply"
    assert device.arm(limit_mv=0xFFFFFFFF).name == "arm_reply"
    token = device.arm(limit_ma=5000)["token"]
    device.fire(token)
    device.turns(ms=1)
    assert ended(device) == "over-current"
    guard, measured, limit, unit = finding(device.ask("status"))
    assert (guard, limit, unit) == (6, 5000, MA)
    assert 5000 <= measured <= 9000
    # For one arming: the next is not held to it.
    device.turns(ms=400)
    device.ask("clear_fault")
    device.turns(device.rested)
    device.ask("acknowledge", {"sweep_id": bytes(range(16))})
    device.sweep()
    assert device.loop.held.manifest["end_reason"] == REASONS["complete"]


# -- exercises -----------------------------------------------------------------------------


@pytest.mark.clause("G3")
@pytest.mark.parametrize("exercise", [1, 2])
def test_an_exercise_with_the_source_there_is_refused(device, exercise):
    assert finding(device.arm(exercise=exercise)) == (4, 39_996, 1000, MV)
    assert device.board.closings == 0


@pytest.mark.clause("G3")
def test_with_the_source_away_the_contact_closes_on_nothing(device):
    device.board.source_v = 0.01
    device.fire(device.arm(exercise=1)["token"])
    device.turns(ms=1)
    assert ended(device) == "no current"
    assert device.board.closings == 1
    assert device.sequencer.logbook.operations == 1
    assert device.sequencer.logbook.hot_openings == 0


@pytest.mark.clause("G3")
def test_a_firmware_told_to_hang_hangs_with_the_contact_closed(device):
    device.board.source_v = 0.01
    device.fire(device.arm(exercise=2)["token"])
    with pytest.raises(Hung):
        device.turns(ms=1)
    assert device.board.closings == 1


@pytest.mark.clause("G3")
def test_a_relay_left_open_lets_no_current_through_unless_it_has_welded(device):
    device.fire(device.arm(exercise=3)["token"])
    device.turns(ms=1)
    assert ended(device) == "no current"
    assert not device.board.when("relay True")
    assert device.sequencer.logbook.operations == 0
    device.turns(device.rested)
    device.ask("acknowledge", {"sweep_id": bytes(range(16))})
    device.board.relay_welded = True
    device.fire(device.arm(exercise=3)["token"])
    device.turns(ms=1)
    assert ended(device) == "switch shorted"
    assert device.ask("status")["guard"] == 2


@pytest.mark.clause("G3")
def test_a_bare_relay_has_no_relay_to_leave_open(board, tmp_path):
    device = Device(board, tmp_path, contact=2, bounce_ms=1)
    assert refusal(device.arm(exercise=3)) == OUT_OF_RANGE
    assert device.arm().name == "arm_reply"


@pytest.mark.clause("G3")
@pytest.mark.parametrize("exercise", [4, 255])
def test_other_exercises_are_out_of_range(device, exercise):
    assert refusal(device.arm(exercise=exercise)) == OUT_OF_RANGE


# -- heat ----------------------------------------------------------------------------------


@pytest.mark.clause("G4")
def test_sweeps_wait_for_the_bleed_resistor(board, tmp_path):
    """Room for two sweeps of 0.176 J, and 0.05 W to cool by."""
    device = Device(board, tmp_path, bleed_mj=400, bleed_mw=50, rated_mv=60_000)
    device.turns(lambda: device.ask("status")["bleed_mj"] == 0, ms=20_000)
    for _ in range(2):
        device.sweep()
        device.turns(lambda: device.state() == "safe")
        device.ask("acknowledge", {"sweep_id": bytes(range(16))})
    answer = device.arm()
    assert finding(answer) == (10, pytest.approx(510, abs=30), 400, MJ)
    rest_ms = device.ask("status")["rest_ms"]
    assert rest_ms == pytest.approx(2200, abs=600)
    device.turns(ms=rest_ms - 200)
    assert finding(device.arm())[0] == 10
    device.turns(ms=300)
    assert device.arm().name == "arm_reply"


# -- what is kept --------------------------------------------------------------------------


@pytest.mark.clause("G5")
def test_the_logbook_outlives_the_power(board, tmp_path):
    device = Device(board, tmp_path)
    device.board.after_closing(1000, lambda: board.incoming.extend(device.abort()))
    device.sweep()
    device.turns(device.rested)
    device.ask("acknowledge", {"sweep_id": bytes(range(16))})
    device.sweep()
    device.turns(device.rested)
    assert device.ask("note_proof", {"day": 22_000, "digest": DIGEST})["kept"] == 1
    board = FakeBoard()
    book = Device(board, tmp_path).ask("read_logbook")
    assert (book["operations"], book["hot_openings"]) == (2, 1)
    assert (book["proof_day"], book["proof_digest"]) == (22_000, DIGEST)


@pytest.mark.clause("G5")
def test_a_proof_is_noted_only_when_safe(device):
    device.sweep()
    assert device.state() == "bleeding"
    answer = device.ask("note_proof", {"day": 22_000, "digest": DIGEST})
    assert refusal(answer) == WRONG_STATE
    assert device.ask("read_logbook")["proof_day"] == 0


def test_nothing_is_written_while_the_contact_may_be_closed(device, monkeypatch):
    written = []
    keep = type(device.sequencer.logbook).keep
    monkeypatch.setattr(
        type(device.sequencer.logbook),
        "keep",
        lambda book: written.append((device.state(), device.board.quiet)) or keep(book),
    )
    device.sweep()
    device.turns(lambda: device.state() == "safe")
    assert written == [("armed", False), ("safe", False)]


def test_a_closing_that_ends_in_a_reset_is_counted(board, tmp_path):
    device = Device(board, tmp_path)
    board.source_v = 0.01
    device.fire(device.arm(exercise=2)["token"])
    with pytest.raises(Hung):
        device.turns(ms=1)
    assert Device(FakeBoard(), tmp_path).ask("read_logbook")["operations"] == 1


@pytest.mark.clause("G5")
def test_a_damaged_logbook_is_begun_anew_and_says_so(board, tmp_path):
    assert Device(FakeBoard(), tmp_path).ask("read_logbook")["begun_anew"] == 0
    (tmp_path / "logbook.bin").write_bytes(b"\xff" * 33)
    device = Device(board, tmp_path)
    book = device.ask("read_logbook")
    assert (book["operations"], book["begun_anew"]) == (0, 1)
    device.sweep()
    device.turns(device.rested)
    # The counts since are kept, and so is that they are not those of the contact's life.
    book = Device(FakeBoard(), tmp_path).ask("read_logbook")
    assert (book["operations"], book["begun_anew"]) == (1, 1)


# -- clearing ------------------------------------------------------------------------------


@pytest.mark.clause("G6")
def test_a_live_contact_is_not_put_across_a_hot_bleed_again(device):
    board = device.board
    board.after_closing(3000, lambda: setattr(board, "welded", True))
    device.sweep()
    device.turns(lambda: not board.bleed_engaged)
    assert device.ask("status")["guard"] == 2
    answer = device.ask("clear_fault")
    assert refusal(answer) == INTERLOCK
    assert finding(answer) == (10, pytest.approx(40_000, abs=2000), 20_000, MJ)
    device.turns(ms=2100)
    assert device.ask("clear_fault").name == "clear_fault_reply"
    device.turns(lambda: device.state() == "fault")
    assert device.ask("status")["guard"] == 2


@pytest.mark.clause("G6")
def test_the_bleed_comes_back_once_the_source_is_isolated(device):
    board = device.board
    board.after_closing(3000, lambda: setattr(board, "welded", True))
    device.sweep()
    device.turns(lambda: not board.bleed_engaged)
    board.welded = False
    device.turns(lambda: board.bleed_engaged)
    device.turns(ms=300)
    assert board.capacitor_v < 1.0
    assert device.state() == "fault"


# -- the manifest --------------------------------------------------------------------------


@pytest.mark.clause("G7")
def test_the_manifest_tells_of_capacitor_and_opening(device):
    device.sweep()
    manifest = device.ask("read_manifest")
    assert manifest["capacitor_conversions"] == 16
    assert manifest["capacitor_before_sum"] == 16 * 24
    assert manifest["capacitor_full_sum"] / 16 == pytest.approx(24 + 40 / 0.0165, rel=0.01)
    assert manifest["hot_opening"] == 0
    assert 39 <= manifest["opening_code"] <= 44
    assert manifest["bleed_tau_us"] == 0
    device.turns(lambda: device.state() == "safe")
    assert device.ask("read_manifest")["bleed_tau_us"] == pytest.approx(21_900, rel=0.03)


@pytest.mark.clause("G7")
def test_an_opening_under_load_is_told(device):
    device.board.after_closing(1000, lambda: device.board.incoming.extend(device.abort()))
    device.sweep()
    manifest = device.ask("read_manifest")
    assert manifest["hot_opening"] == 1
    assert manifest["opening_code"] > 40 + 38


def test_a_worn_capacitor_is_told_with_its_capacitance(board, tmp_path):
    device = Device(board, tmp_path, capacitance_nf=440_000)
    device.sweep()
    guard, measured, limit, unit = finding(device.ask("status"))
    assert (guard, limit, unit) == (15, 308_000, 7)
    assert measured == pytest.approx(220_000, rel=0.05)
    assert device.loop.held.count == 32
