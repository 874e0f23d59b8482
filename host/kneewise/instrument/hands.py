"""What an operator is asked to do at the bench, by name.

A person reads the words that go with a name (`kneewise.workshop.operator`); at an emulated bench
`Hands` does it.
"""

from __future__ import annotations

from collections.abc import Mapping
from enum import StrEnum
from typing import Protocol


class Task(StrEnum):
    """To do. Values that go with it are in V, A and s."""

    DISCONNECT = "disconnect"
    CONNECT_SUPPLY = "connect supply"  # voltage_v, current_a
    OPEN_LOOP = "open stop loop"
    CLOSE_LOOP = "close stop loop"
    SWAP_LEADS = "swap leads"
    LEADS_RIGHT = "put leads right"
    PULL_POWER = "pull power"  # in the next charge, as near as can be
    WAIT = "wait"  # seconds, without power
    GIVE_POWER = "give power"


class Reading(StrEnum):
    """To read off or to measure."""

    SUPPLY_V = "supply voltage"
    SUPPLY_A = "supply current limit"
    CAPACITOR_V = "capacitor voltage"


class Hands(Protocol):
    """Somebody at an emulated bench."""

    def do(self, task: Task, values: Mapping[str, float]) -> None:
        """Do it; it is done when this returns."""

    def read(self, reading: Reading) -> float:
        """V or A."""
