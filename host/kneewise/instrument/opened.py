"""What a target's name opens: a serial port, or what an opener was registered for.

Goes out: a way to get a port, again after each loss of the link, and what is known beside it.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Any

from kneewise.instrument.hands import Hands
from kneewise.link.port import Port, open_port

Opener = Callable[[str], "Opened"]
_OPENERS: dict[str, Opener] = {}


@dataclass(frozen=True, slots=True)
class Opened:
    """What an opener gives: a way to get a port, and what is known of an emulated source.

    `utc` is the time of day at the tracer, now; `remark` is for people to know of the target;
    `hands` does at an emulated bench what an operator is asked to do at a real one.
    """

    connect: Callable[[], Port]
    close: Callable[[], None]
    rung: str
    scenario: dict[str, Any] | None = None
    truth: dict[str, float] | None = None
    utc: Callable[[], datetime] = lambda: datetime.now(UTC)
    remark: str = ""
    hands: Hands | None = None


def register_opener(prefix: str, opener: Opener) -> None:
    """Targets "PREFIX" and "PREFIX:anything" are opened by `opener`."""
    _OPENERS[prefix] = opener


def open_target(target: str) -> Opened:
    """Open a target by its opener, or as a port."""
    opener = _OPENERS.get(target.split(":", 1)[0])
    if opener is not None:
        return opener(target)
    return Opened(connect=lambda: open_port(target), close=lambda: None, rung="tracer")
