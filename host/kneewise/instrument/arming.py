"""Arming a tracer for one sweep: settings out, the token for its fire in."""

from __future__ import annotations

from dataclasses import dataclass

from kneewire import catalogue
from kneewise.errors import RefusedError, UsageError
from kneewise.instrument.full_rate import Window
from kneewise.link.refusals import CODES
from kneewise.link.session import Session

EXERCISES = {text: code for code, text in catalogue.EXERCISES.items()}
NO_LIMIT = 0xFFFFFFFF  # but the board's rating
FEWEST_PAIRS = 128
"""Raw pairs: a device without memory for so many has none for any."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Asked:
    """What one sweep is asked for, the points that it is measured with apart.

    `limit_s`: longest closed time. `limit_v`, `limit_a`: trip below the board's ratings; None for
    these. `exercise`: a key of the wire's EXERCISES; all but "sweep" are for the proof test.
    """

    knots: int = 96
    limit_s: float = 10.0
    limit_v: float | None = None
    limit_a: float | None = None
    exercise: str = "sweep"

    def values(self) -> dict[str, int]:
        """As the fields of `arm` have them. UsageError for a limit that is none."""
        for name, value in (("limit_v", self.limit_v), ("limit_a", self.limit_a)):
            if value is not None and not 1e-3 <= value <= 4e6:
                raise UsageError(
                    "arming",
                    found=f"{name} = {value:g}",
                    expected="at least 0.001, in V or A",
                    next_step="leave it out for the limit of the board's profile",
                )
        return {
            "knots": self.knots,
            "closed_limit_ms": max(round(self.limit_s * 1000), 1),
            "limit_mv": _milli(self.limit_v),
            "limit_ma": _milli(self.limit_a),
            "exercise": EXERCISES[self.exercise],
        }


def _milli(limit: float | None) -> int:
    return NO_LIMIT if limit is None else round(1000 * limit)


def arm(session: Session, asked: Asked, window: Window, stands_alone: bool) -> tuple[int, Window]:
    """The token, and the window that the device has memory for. RefusedError."""
    while True:
        values = asked.values() | {
            "confirmed": 1 if stands_alone else 0,
            "raw_from_us": window.from_us,
            "raw_pairs": window.pairs,
        }
        try:
            token: int = session.request("arm", values)["token"]
            return token, window
        except RefusedError as error:
            if not window.pairs or error.code != CODES["out of range"]:
                raise
            if not window.shrinks or window.pairs < 2 * FEWEST_PAIRS:
                raise RefusedError(
                    f"arming, with {window.pairs} raw pairs to be kept",
                    found="out of range: the tracer has no memory for so many, or a setting is "
                    "beyond its limits",
                    expected="a stretch that it can keep",
                    next_step="ask for a shorter stretch, or for none",
                    code=error.code,
                ) from error
            window = window.smaller()
