"""A contact: it follows its coil after a delay, may bounce as it makes, or conducts always.

Comes in: what the coil asks for, and the time. Goes out: whether the contact conducts, and when
it next moves. What drives the coils and what the contacts switch belongs to `plant.py`.
"""

from __future__ import annotations

from dataclasses import dataclass, field

BOUNCES_AT_MOST = 4  # openings after one make
_WORD = 2**32 - 1


def bounces_us(seed: int, number: int, within_us: int) -> list[int]:
    """Moments after the first touch at which a contact opens and closes again, in turn (us).

    Ascending, an even number of them, none after `within_us`. They depend on `seed` and on
    `number`, that of the closing, alone; plant.mjs beside the emulated chip draws the same.
    """
    if within_us < 2:
        return []
    state = (seed ^ number * 2654435761) & _WORD

    def draw(below: int) -> int:
        nonlocal state
        state = (state * 1664525 + 1013904223) & _WORD
        return (state >> 8) % below

    openings = 1 + draw(BOUNCES_AT_MOST)
    moments = sorted({1 + draw(within_us) for _ in range(2 * openings)})
    return moments[len(moments) % 2 :]


@dataclass(slots=True)
class Contact:
    """`closed` says whether it conducts; all times in whole microseconds."""

    what: str
    close_us: int
    open_us: int
    closed: bool = False
    welded: bool = False
    """Conducts, whatever its coil asks for."""
    bounce_us: int = 0
    seed: int = 0
    _made: bool = field(init=False)
    """Where its armature is; while it bounces, the contact may be open all the same."""
    _due_us: int | None = field(init=False, default=None)
    _bounces_us: list[int] = field(init=False, default_factory=list)
    _closings: int = field(init=False, default=0)

    def __post_init__(self) -> None:
        self.closed = self._made = self.closed or self.welded

    def aim(self, closed: bool, now_us: int) -> None:
        """What its coil asks for from now on."""
        if self.welded:
            self._bounces_us = []
            self._due_us = None if self.closed else now_us
        elif closed == self._made:
            self._due_us = None
        elif self._due_us is None:
            self._due_us = now_us + (self.close_us if closed else self.open_us)

    @property
    def next_us(self) -> int | None:
        """When it moves next, if its coil asks for nothing else."""
        moments = [self._due_us, *self._bounces_us[:1]]
        return min((moment for moment in moments if moment is not None), default=None)

    def move(self, now_us: int) -> bool:
        """Make the move that is due by now; True where it now conducts and did not, or not any
        more.
        """
        before = self.closed
        if self._due_us is not None and self._due_us <= now_us:
            self._due_us = None
            self.closed = self._made = self.welded or not self._made
            self._bounces_us = []
            if self._made and not self.welded:
                self._closings += 1
                after = bounces_us(self.seed, self._closings, self.bounce_us)
                self._bounces_us = [now_us + us for us in after]
        elif self._bounces_us and self._bounces_us[0] <= now_us:
            del self._bounces_us[0]
            self.closed = not self.closed
        return self.closed != before
