"""An emulated tracer on any rung, as the hazards' tests meet it: what they do to it and see of it.

Comes in: a scenario, a rung, changes of the profile. Goes out: the record of pins and contacts,
and the plant's own figures, in plant time. What is done in which case stands in `hazard_plays.py`.
"""

from __future__ import annotations

import functools
import math
import os
import time
from collections.abc import Callable, Mapping
from itertools import pairwise
from typing import Any

from kneewire.profile_record import seal
from kneewise.emulator.board import Level
from kneewise.emulator.chip import CHIP_DEVICE_ID, ChipTracer
from kneewise.emulator.inprocess import InProcessTracer
from kneewise.emulator.mishaps import Value
from kneewise.emulator.opener import DEVICE_ID, connector, profile_for, start
from kneewise.emulator.process import ProcessTracer
from kneewise.emulator.scenario import Scenario
from kneewise.instrument.opened import Opened
from kneewise.instrument.profile import BoardProfile
from kneewise.instrument.tracer import Tracer
from kneewise.link.port import Port

TURN_US = 90_000  # of plant time between two turns of the MicroPython process that waits
TURN_S = 0.012
PIECE_S = 0.003
HEARD_S = 0.02  # until a terminal has carried some bytes; plant time stands still


class ChipTimePort:
    """A port to the emulated chip whose clock is the chip's own: a busy machine makes no host
    impatient.
    """

    def __init__(self, port: Port, chip: Any) -> None:
        self.name = port.name
        self._port = port
        self._chip = chip

    def clock(self) -> float:
        return float(self._chip.now_us()) / 1e6

    def sleep(self, seconds: float) -> None:
        self._chip.let_pass(1000 * seconds)

    def read(self, timeout_s: float) -> bytes:
        end = self.clock() + timeout_s
        while not (data := self._port.read(PIECE_S)) and self.clock() < end:
            pass
        return data

    def write(self, data: bytes) -> None:
        self._port.write(data)

    def close(self) -> None:
        self._port.close()


class World:
    """`close` ends it; `profile` names values by section and key: {"limits.rated_v": 40.0}."""

    def __init__(
        self, rung: str, scenario: Mapping[str, Any], profile: Mapping[str, Any] | None = None
    ) -> None:
        self.rung = rung
        self.scenario = Scenario.default().varied(**scenario)
        self.profile = changed(profile_for(self.scenario), profile or {})
        self.emulated = start(self.scenario, rung, self.profile)
        self._opened: list[Tracer] = []

    def close(self) -> None:
        for tracer in self._opened:
            tracer.close()
        self.emulated.close()

    # -- the host ----------------------------------------------------------------------------

    def tracer(self) -> Tracer:
        """A host that has the port now."""
        opened = Opened(connect=self._connect, close=lambda: None, rung=self.emulated.rung)
        self._opened.append(Tracer(opened))
        return self._opened[-1]

    def _connect(self) -> Port:
        port = connector(self.emulated)()
        if isinstance(self.emulated, ChipTracer):
            return ChipTimePort(port, self.emulated.chip)
        return port

    def let_pass(self, seconds: float, turn_us: int = TURN_US) -> None:
        """Plant time, in which the firmware has its turns; no charge may be under way."""
        made = self.emulated
        if isinstance(made, InProcessTracer):
            made.sleep(seconds)
        elif isinstance(made, ChipTracer):
            made.chip.let_pass(1000 * seconds)
        else:
            end_us = made.board.virtual_us + round(1e6 * seconds)
            while (left_us := end_us - made.board.virtual_us) > 0:
                with made._lock:
                    made.board.settle(min(turn_us, left_us))
                time.sleep(TURN_S)

    def let_pass_unpowered(self, seconds: float) -> None:
        made = self.emulated
        if isinstance(made, ChipTracer):
            made.chip.let_pass(1000 * seconds)
        else:
            made.board.settle(round(1e6 * seconds))

    # -- what is done to it --------------------------------------------------------------------

    def change(self, what: str, value: Value = 1) -> None:
        self.emulated.change(what, value)

    def after_closing(self, delay_us: int, what: str, value: Value = 1) -> None:
        self.emulated.after_closing(delay_us, what, value)

    def power(self, on: bool) -> None:
        """Take power away, or give it."""
        self.change("power_off", 0 if on else 1)

    def wait_unpowered(self) -> None:
        """Until the board's own loss of power has ended what ran on it."""
        if isinstance(self.emulated, ProcessTracer):
            self.emulated.wait_power_lost()
        elif isinstance(self.emulated, InProcessTracer):
            self.emulated.unplug()

    def on_mishap(self, action: Callable[[], None]) -> None:
        """Do this at the moment of a `link_cut` of 0, which does nothing else. Not on the chip."""
        board = self._board()
        happen = board._happen

        def happened(what: str, given: Any) -> None:
            happen(what, given)
            if what == "link_cut" and not given[0]:
                action()

        board._happen = happened  # type: ignore[method-assign]

    def _board(self) -> Any:
        assert not isinstance(self.emulated, ChipTracer), "the chip's plant takes no functions"
        return self.emulated.board

    def stop_supervision(self) -> float:
        """Its visits come to an end; when that is (us). Not on the chip."""
        self._board()._converters._watch.running = False
        return self.now_us

    def in_zero_reading(self, number: int, action: Callable[[int], None]) -> None:
        """Do this as the voltage channel's input goes to its zero the `number`th time from now on,
        and as it leaves it, with the level. Not on the chip.
        """
        board = self._board()
        switch = board.zero_input
        seen = 0

        def switched(level: Level) -> None:
            nonlocal seen
            switch(level)
            if level == 1:
                seen += 1
            if seen == number and level is not None:
                action(level)
                seen += level == 0

        board.zero_input = switched

    def happen(self, what: str, value: Value) -> None:
        """At once, from within the plant. Not on the chip."""
        self._board()._happen(what, (value, None))

    def say(self, data: bytes) -> float:
        """Bytes on the link that the host's own program has not sent; when they come (us)."""
        made = self.emulated
        if isinstance(made, ChipTracer):
            return float(made.chip.order("forge", bytes=list(data))["ns"]) / 1000
        if isinstance(made, InProcessTracer):
            made.put_input(data)
        else:
            assert made._terminal is not None
            os.write(made._terminal, data)
            time.sleep(HEARD_S)
        return self.now_us

    def store_profile(self, content: bytes | None) -> None:
        """Over a power cycle, so that the firmware reads it; None takes it away."""
        made = self.emulated
        if isinstance(made, ChipTracer):
            made.chip.run(
                f"with open('/profile.bin', 'wb') as file: file.write({content!r})"
                if content is not None
                else "import os\nos.remove('/profile.bin')"
            )
            made.chip.unplug()
        self.power(False)
        if not isinstance(made, ChipTracer):
            path = made._flash / "profile.bin"
            path.unlink() if content is None else path.write_bytes(content)
        self.power(True)

    def record_of_profile(self, device_id: bytes | None = None) -> bytes:
        """What the board's flash holds of its profile, or would for another board."""
        own = CHIP_DEVICE_ID if self.rung == "chip" else DEVICE_ID
        return seal(self.profile.record(device_id or own))

    # -- what is seen of it -----------------------------------------------------------------------

    @property
    def now_us(self) -> float:
        made = self.emulated
        return made.chip.now_us() if isinstance(made, ChipTracer) else made.board.virtual_us

    def record(self) -> list[tuple[int, str, Level]]:
        made = self.emulated
        return made.record() if isinstance(made, ChipTracer) else list(made.board.record)

    def at(self, what: str) -> list[tuple[int, Level]]:
        return [(us, level) for us, name, level in self.record() if name == what]

    def after(self, us: float, what: str, *levels: Level) -> int:
        """How long after `us` this first came to one of the levels (us)."""
        return next(
            round(when - us) for when, level in self.at(what) if when >= us and level in levels
        )

    def closings(self) -> list[int]:
        """When the path began to conduct."""
        return [us for us, level in self.at("conducting") if level == 1]

    def _state(self) -> dict[str, Any]:
        made = self.emulated
        if isinstance(made, ChipTracer):
            return made.chip.order("plant")
        board = made.board
        return {
            "closed": board.contact_conducting,
            "bled": board.bleed_engaged,
            "hot_openings": board.hot_openings,
            "bleed_j": board.bleed_energy_j,
            "v_capacitor": board.capacitor_v,
        }

    @property
    def conducting(self) -> bool:
        return bool(self._state()["closed"])

    @property
    def bleed_engaged(self) -> bool:
        return bool(self._state()["bled"])

    @property
    def hot_openings(self) -> list[tuple[float, float]]:
        """(us, A) of each opening under load."""
        return [(us, ampere) for us, ampere in self._state()["hot_openings"]]

    @property
    def bleed_j(self) -> float:
        return float(self._state()["bleed_j"])

    @property
    def capacitor_v(self) -> float:
        return float(self._state()["v_capacitor"])

    def open_v(self) -> float:
        return self.scenario.build_source().truth()["voc"]

    def predicted_us(self) -> float:
        """1.6 C Voc / Isc of the scenario's source: the time of a charge to 99.9 % of Voc."""
        truth = self.scenario.build_source().truth()
        return 1.6e6 * self.profile.capacitor.capacitance_f * truth["voc"] / truth["isc"]

    def together_us(self) -> int:
        """How long contact and bleed have conducted at the same time, by the record."""
        levels = {"conducting": 0, "bleed_contact": 1}
        if self.scenario.board.contact_welded:
            levels["conducting"] = 1
        began: int | None = None
        total = 0
        for us, what, level in self.record():
            if what in levels:
                levels[what] = level or 0
            both = all(levels.values())
            if both and began is None:
                began = us
            elif not both and began is not None:
                total += us - began
                began = None
        return total + (round(self.now_us) - began if began is not None else 0)

    def dead_times_us(self) -> list[int]:
        """Between the contact's opening and the bleed's closing, and the other way round."""
        moves = [
            (us, what, level)
            for us, what, level in self.record()
            if what in ("conducting", "bleed_contact")
        ]
        return [
            after - before
            for (before, first, gone), (after, then, come) in pairwise(moves)
            if first != then and not gone and come
        ]


def bleed_s(ohm: float, farad: float, from_v: float, to_v: float) -> float:
    """t = R C ln(V0 / V)."""
    return ohm * farad * math.log(from_v / to_v)


def changed(profile: BoardProfile, changes: Mapping[str, Any]) -> BoardProfile:
    """With other values; a key is "section.name", or a name alone."""

    def put(made: BoardProfile, change: tuple[str, Any]) -> BoardProfile:
        key, value = change
        section, _, name = key.rpartition(".")
        if not section:
            return made.model_copy(update={name: value})
        part = getattr(made, section).model_copy(update={name: value})
        return made.model_copy(update={section: part})

    return functools.reduce(put, changes.items(), profile)
