"""Arming a tracer for one sweep: settings out, the token for its fire in."""

from __future__ import annotations

from kneewise.errors import RefusedError
from kneewise.instrument.full_rate import Window
from kneewise.link.refusals import CODES
from kneewise.link.session import Session

FEWEST_PAIRS = 128
"""Raw pairs: a device without memory for so many has none for any."""


def arm(
    session: Session, knots: int, limit_s: float, window: Window, stands_alone: bool
) -> tuple[int, Window]:
    """The token, and the window that the device has memory for. RefusedError."""
    while True:
        values = {
            "knots": knots,
            "closed_limit_ms": max(round(limit_s * 1000), 1),
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
