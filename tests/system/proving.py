"""A proof test on an emulated bench, with what is wrong there."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

from cryptography.hazmat.primitives.asymmetric.ed25519 import Ed25519PrivateKey
from cryptography.hazmat.primitives.serialization import (
    Encoding,
    NoEncryption,
    PrivateFormat,
    PublicFormat,
)

from kneewise.emulator.hands import EmulatedHands
from kneewise.emulator.opener import Emulated, connector, start
from kneewise.emulator.scenario import Scenario
from kneewise.instrument.hands import Reading, Task
from kneewise.instrument.opened import Opened
from kneewise.instrument.tracer import Tracer
from kneewise.workshop.operator import EmulatedOperator
from kneewise.workshop.prooftest import ProofTest, prove


class OddHands:
    """Hands that leave some tasks undone, do others in their own way, or misread."""

    def __init__(
        self,
        emulated: Emulated,
        undone: tuple[Task, ...] = (),
        instead: Mapping[Task, Callable[[Any, Mapping[str, float]], None]] | None = None,
        reads: Mapping[Reading, float] | None = None,
    ) -> None:
        self._emulated = emulated
        self._hands = EmulatedHands(emulated)
        self._undone = undone
        self._instead = instead or {}
        self._reads = reads or {}
        self.done: list[Task] = []

    def do(self, task: Task, values: Mapping[str, float]) -> None:
        self.done.append(task)
        if task in self._instead:
            self._instead[task](self._emulated, values)
        elif task not in self._undone:
            self._hands.do(task, values)

    def read(self, reading: Reading) -> float:
        return self._reads.get(reading, self._hands.read(reading))


class Bench:
    """An emulated tracer at a bench; close it."""

    def __init__(
        self,
        changes: Mapping[str, Any] | None = None,
        rung: str = "in-process",
        *,
        broken: Callable[[Emulated], None] = lambda emulated: None,
        **hands: Any,
    ) -> None:
        scenario = Scenario.default().varied(**(changes or {}))
        self.emulated = start(scenario, rung)
        broken(self.emulated)
        self.hands = OddHands(self.emulated, **hands)
        self.tracer = Tracer(
            Opened(
                connect=connector(self.emulated),
                close=lambda: None,
                rung=self.emulated.rung,
                hands=self.hands,
            )
        )
        self.told: list[str] = []

    def prove(self, operator: Any = None) -> ProofTest:
        """The test, whatever its verdict."""
        return prove(self.tracer, operator or EmulatedOperator(self.hands, self.told.append))

    def close(self) -> None:
        self.tracer.close()
        self.emulated.close()

    def closings(self) -> int:
        """Of the path as a whole."""
        return sum(
            1 for _, what, level in self.emulated.board.record if (what, level) == ("conducting", 1)
        )

    def armed(self) -> bool:
        return any(seen.row()["message"] == "arm" for seen in self.tracer.frames.entries())


def by_result(test: ProofTest, result: str) -> list[str]:
    """Ids of the steps that ended so."""
    return [found.step.id for found in test.steps if found.result == result]


def guards_by(test: ProofTest, result: str) -> list[int]:
    """Hazards whose rows say so."""
    return [row["hazard"] for row in test.content()["guards"] if row["result"] == result]


def pem_of(key: Ed25519PrivateKey, folder: Path) -> tuple[Path, Path]:
    """The two halves of a key as files."""
    own, public = folder / "key.pem", folder / "public.pem"
    own.write_bytes(key.private_bytes(Encoding.PEM, PrivateFormat.PKCS8, NoEncryption()))
    public.write_bytes(
        key.public_key().public_bytes(Encoding.PEM, PublicFormat.SubjectPublicKeyInfo)
    )
    return own, public
