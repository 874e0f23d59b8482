"""If these fail, a fault in mid-charge leaves the contact closed or the bleed released.

Each fault strikes the firmware in the middle of a whole sweep, on the emulated RP2040, with the
pulse pin at either level (board_faults.py). Bounds are those of the wave: what the parts need
to release comes on top, and is in the plant's description.
"""

import contextlib
from collections.abc import Iterator
from typing import Any, NamedTuple

import pytest
from chip import Edge, missing
from on_chip import capacitor, chip_for, tracer_on

from kneewire import catalogue
from kneewise.emulator.chip import ChipTracer
from kneewise.errors import KneewiseError, OutcomeUnknownError
from kneewise.instrument.tracer import Tracer

pytestmark = pytest.mark.skipif(missing() is not None, reason=str(missing()))

PULSE, RELAY, RELEASE, MARK = 2, 3, 4, 15
LEVELS = (0, 1)
PULSE_US = 5000
WATCHDOG_US = 2_000_000
AT_ONCE_US = 300  # from the error to the end of the wave, by way of the interpreter
OPENING_US = 5000
BLED_US = 40_000  # relay release, dead time
SLOW = capacitor(22e-3)  # 150 ms: the fault comes after about 20


class After(NamedTuple):
    """What a fault has left, times in us since it struck."""

    wave_us: float
    relay_us: float
    bleed_us: float
    levels: dict[int, int | None]
    plant: dict[str, Any]


@contextlib.contextmanager
def struck(name: str, level: int) -> Iterator[ChipTracer]:
    fault = {"/fault.txt": f"{name},{level},20"}
    with chip_for(SLOW, board="board_faults.py", files=fault) as made:
        made.chip.edges()
        yield made


def fire(tracer: Tracer) -> None:
    """As a sweep does, without waiting for what comes of it."""
    session = tracer._session
    values = {
        "knots": 96,
        "closed_limit_ms": 10_000,
        "confirmed": 1,
        "raw_from_us": 0,
        "raw_pairs": 0,
        "limit_mv": 0xFFFFFFFF,
        "limit_ma": 0xFFFFFFFF,
        "exercise": 0,
    }
    token = session.request("arm", values)["token"]
    session.request("fire", {"token": token, "sweep_id": bytes(range(16))})


def after(made: ChipTracer) -> After:
    edges = made.chip.edges()
    (mark,) = [edge.us for edge in edges if edge.pin == MARK and edge.level == 1]
    rises = [edge.us for edge in edges if edge.pin == PULSE and edge.level == 1]
    falls = [edge.us for edge in edges if edge.pin == PULSE and edge.us > rises[-1]]

    def let_go(pin: int) -> float:
        return next(edge.us for edge in edges if edge.pin == pin and edge.us >= mark) - mark

    return After(
        falls[0] - mark,
        let_go(RELAY),
        let_go(RELEASE),
        {edge.pin: edge.level for edge in edges if edge.pin != MARK},
        made.chip.order("plant"),
    )


def check_safe(found: After, *, wave_us: float, bleed_us: float) -> None:
    assert found.wave_us <= wave_us
    assert found.relay_us <= found.bleed_us <= bleed_us
    assert set(found.levels.values()) <= {0, None}
    assert found.plant["bled"]
    assert not found.plant["closed"]
    assert found.plant["overlap_ns"] == 0
    assert found.plant["closings"] == 1


@pytest.mark.parametrize("level", LEVELS)
@pytest.mark.parametrize("name", ["loop", "native loop"])
def test_an_endless_loop_is_ended_by_the_pulse_and_then_by_the_watchdog(
    name: str, level: int
) -> None:
    with struck(name, level) as made:
        with tracer_on(made) as tracer, pytest.raises(OutcomeUnknownError, match="cause: watchdog"):
            tracer.sweep()
        check_safe(after(made), wave_us=PULSE_US, bleed_us=WATCHDOG_US)
        assert made.chip.boots() == 1


@pytest.mark.parametrize("level", LEVELS)
def test_a_supervision_that_fails_ends_the_renewals(level: int) -> None:
    """What it prints goes out from the interrupt itself. Where the link has no room for it, that
    lasts, and the watchdog ends it.
    """
    with struck("timer callback fails", level) as made, tracer_on(made) as tracer:
        bleed_us = WATCHDOG_US
        with contextlib.suppress(OutcomeUnknownError):
            assert tracer.sweep().end_reason == "supervision lost"
            bleed_us = PULSE_US + BLED_US
        check_safe(after(made), wave_us=PULSE_US, bleed_us=bleed_us)
        # One or the other, and no third way.
        assert made.chip.boots() == (bleed_us == WATCHDOG_US)
        assert tracer.device["reset_cause"] == (3 if made.chip.boots() else 1)


@pytest.mark.parametrize("level", LEVELS)
def test_a_dead_supervision_timer_ends_the_renewals(level: int) -> None:
    with struck("timer stopped", level) as made, tracer_on(made) as tracer:
        assert tracer.sweep().end_reason == "supervision lost"
        check_safe(after(made), wave_us=PULSE_US, bleed_us=PULSE_US + BLED_US)
        assert tracer.status().state == "fault"


@pytest.mark.parametrize("level", LEVELS)
@pytest.mark.parametrize(
    ("name", "told"),
    [
        ("exception", "ValueError: injected"),
        ("allocation", "MemoryError: memory allocation failed, heap is locked"),
        ("Ctrl-C", "KeyboardInterrupt"),
    ],
)
def test_an_error_ends_at_the_prompt_and_is_told(name: str, told: str, level: int) -> None:
    with struck(name, level) as made:
        chip = made.chip
        with tracer_on(made) as tracer:
            fire(tracer)
            chip.let_pass(1500)  # what was measured is placed and kept first
            assert told in chip.said()
        check_safe(after(made), wave_us=AT_ONCE_US, bleed_us=OPENING_US + BLED_US)
        # With the heap still locked the prompt could not even compile this.
        assert chip.run("print(6 * 7)").strip() == "42"
        chip.let_pass(3000)
        assert chip.boots() == 0, "the watchdog goes on at the prompt"


@pytest.mark.parametrize("level", LEVELS)
@pytest.mark.parametrize(
    ("name", "cause", "bleed_us"),
    [
        ("SystemExit", "soft reset", OPENING_US + BLED_US),
        ("soft reset", "soft reset", OPENING_US + BLED_US),
        ("reset", "soft reset", AT_ONCE_US),
        ("watchdog", "watchdog", 2000 + AT_ONCE_US),
    ],
)
def test_a_reset_ends_in_the_service_and_its_cause_is_told(
    name: str, cause: str, bleed_us: int, level: int
) -> None:
    with struck(name, level) as made:
        with tracer_on(made) as tracer, pytest.raises(OutcomeUnknownError, match=f"cause: {cause}"):
            tracer.sweep()
        check_safe(after(made), wave_us=min(bleed_us, AT_ONCE_US + 2000), bleed_us=bleed_us)


def test_a_host_that_floods_the_link_does_not_open_the_contact_under_load() -> None:
    """Frames sent again and again, as by a host that is in a hurry."""
    with chip_for(SLOW) as made:
        chip = made.chip
        with tracer_on(made) as tracer:
            chip.edges()
            fire(tracer)
            noise = [35, 0, *range(10, 40), 0] * 12
            edges: list[Edge] = []
            while not [edge for edge in edges if edge.pin == RELAY and edge.level == 1]:
                edges += chip.edges()
            while not [edge for edge in edges if edge.pin == RELEASE and edge.level == 0]:
                chip.order("forge", bytes=noise)
                chip.let_pass(5)
                edges += chip.edges()
            notice = tracer._session.wait_notice("charge_ended", 5.0)
        assert notice is not None
        assert catalogue.END_REASONS[notice["end_reason"]] == "complete"
        assert chip.order("plant")["closings"] == 1


@pytest.mark.parametrize("delay_ms", [0, 60])
def test_a_forged_ctrl_c_ends_safe(delay_ms: int) -> None:
    """On the wire, where corruption can make one of any byte."""
    with chip_for(SLOW) as made:
        chip = made.chip
        with tracer_on(made) as tracer:
            chip.edges()
            fire(tracer)
            edges = []
            while not [edge for edge in edges if edge.pin == PULSE and edge.level == 1]:
                edges += chip.edges()
            chip.let_pass(delay_ms)
            chip.order("forge", bytes=[3])
            forged_us = chip.now_us()
            chip.let_pass(200)
            edges += chip.edges()
            with contextlib.suppress(KneewiseError):  # what the host makes of it is not asked here
                tracer.status()
    rises = [edge.us for edge in edges if edge.pin == PULSE and edge.level == 1]
    assert rises[-1] - forged_us < 20_000
    assert {edge.pin: edge.level for edge in edges} == {PULSE: 0, RELAY: 0, RELEASE: 0}
