"""The analogue world of the emulated device, in virtual time.

Comes in: a `Source`, a `Circuit`, and what drives the contacts. Goes out: source voltage,
loop current and bank voltage at any instant, and a notice of every contact that moves.
Converters, noise, pins and the wall clock do not belong here; `board.py` has them. How the
circuit behaves between two events is in `circuit.py`.

Time is a whole number of microseconds. Each stretch between two events (a contact moving) is
solved from its own start and never across an event, so that a result does not depend on how
often somebody asked on the way.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass

import numpy as np

from kneewise.emulator.circuit import Circuit, ClosedStretch, OpenStretch, Stretch
from kneewise.emulator.contacts import Contact
from kneewise.emulator.source import Floats, Source, solve_diode

Notice = Callable[[int, str, int], None]

HOT_A = 0.1  # an opening that breaks more than this is one under load
HISTORY_US = 100  # how far back `sample` may look; a pair in progress is at most so old


@dataclass(slots=True)
class _Drive:
    """What the pins ask for, after pulls, and the stop loop."""

    relay: bool = False
    bleed_release: bool = False
    wave_end_us: int | None = None
    loop_closed: bool = True


def _sign_of(circuit: Circuit) -> float:
    """Of what is measured: the mirrored circuit is solved where the leads are reversed."""
    return -1.0 if circuit.leads_reversed else 1.0


class Plant:
    """Source, contacts and capacitor bank from virtual time 0 on.

    `notice(time_us, what, level)` is called when `relay_contact`, `switch_contact` or
    `bleed_contact` moves, when the path as a whole begins or ends to conduct
    (`conducting`), and when the make-and-break wave runs out by itself (`pulse`, 0).
    """

    def __init__(self, source: Source, circuit: Circuit, notice: Notice | None = None) -> None:
        self.source = source
        self.circuit = circuit
        self._notice = notice
        self._sign = _sign_of(circuit)
        self._relay = Contact(
            "relay_contact",
            circuit.relay_operate_us,
            circuit.relay_release_us,
            welded=self._stuck("relay_contact"),
            bounce_us=circuit.bounce_us if circuit.bare_relay else 0,
            seed=circuit.bounce_seed,
        )
        # Where there is none, a wire is in its place.
        self._switch = Contact(
            "switch_contact", 0, circuit.switch_open_us, welded=self._stuck("switch_contact")
        )
        # Closed when unpowered: its coil opens it.
        self._bleed = Contact(
            "bleed_contact", circuit.bleed_release_us, circuit.bleed_operate_us, closed=True
        )
        self._drive = _Drive()
        self._now_us = 0
        self._past: deque[tuple[Stretch, float, int]] = deque()
        self._held_us: int | None = None
        self._state = (self.conducting, self._bleed.closed)
        # A source connected in reverse charges the capacitor in reverse; the loop has no
        # other sense of direction, so the mirrored circuit is solved.
        self._stretch = self._begin(self._sign * circuit.capacitor_start_v)
        self._bled_j = 0.0
        self.hot_openings: list[tuple[int, float]] = []
        """(us, A) of each time that the path opened with more than HOT_A in it."""

    def _stuck(self, what: str) -> bool:
        c = self.circuit
        if what == "relay_contact":
            return c.contact_welded or c.relay_welded
        return c.contact_welded or c.switch_shorted or c.bare_relay

    def _rest_voltage(self) -> float:
        """Terminal voltage with nothing but the divider as load."""
        s, divider = self.source, 1.0 / self.circuit.divider_ohm
        part = 1.0 + s.series_resistance_ohm * divider
        u = solve_diode(
            part * (s.photocurrent_a + s.saturation_current_a),
            part * s.saturation_current_a,
            part / s.shunt_resistance_ohm + divider,
            s.n_ns_vt_v,
        )
        return float(s.voltage(u))

    # -- what drives the contacts; each takes effect from `now_us` on ---------------------

    def relay(self, energised: bool) -> None:
        self._drive.relay = energised
        self._follow()

    def bleed_release(self, energised: bool) -> None:
        """Energised opens the bleed contact."""
        self._drive.bleed_release = energised
        self._follow()

    def pulse(self, us: int) -> None:
        """Run the make-and-break wave for `us` from now, in place of what was left; 0 stops."""
        self._drive.wave_end_us = self._now_us + us if us > 0 else None
        self._follow()

    def stop_loop(self, closed: bool) -> None:
        """An open stop loop takes the drive from everything, but from nothing in a bare relay
        build, where the board only senses it.
        """
        self._drive.loop_closed = closed
        self._follow()

    # -- what changes by itself -------------------------------------------------------------

    def alter(self, *, source: Source | None = None, circuit: Circuit | None = None) -> None:
        """From now on another source or circuit; what the contacts and the capacitor hold stays."""
        self.source = source or self.source
        self.circuit = circuit or self.circuit
        self._relay.welded = self._stuck("relay_contact")
        self._switch.welded = self._stuck("switch_contact")
        self._follow(anew=True)

    # -- time -----------------------------------------------------------------------------

    @property
    def now_us(self) -> int:
        return self._now_us

    @property
    def next_event_us(self) -> int | None:
        """When something moves next if nothing new is commanded."""
        due = [contact.next_us for contact in (self._relay, self._switch, self._bleed)]
        return min((t for t in (*due, self._drive.wave_end_us) if t is not None), default=None)

    def advance_to(self, time_us: int) -> None:
        """Let time pass; an earlier time than now is now."""
        while self._past and self._past[0][2] < self._known_from_us:
            self._past.popleft()
        while (event_us := self.next_event_us) is not None and event_us <= time_us:
            self._now_us = event_us
            if self._drive.wave_end_us == event_us:
                self._drive.wave_end_us = None
                self._tell("pulse", 0)
            self._follow()
        self._now_us = max(self._now_us, time_us)

    def _follow(self, anew: bool = False) -> None:
        """Aim the contacts at their drives, and move those that are due; a new stretch begins
        where one has moved, or `anew`.
        """
        drive, now_us = self._drive, self._now_us
        wave = drive.wave_end_us is not None
        bare = self.circuit.bare_relay
        carried = drive.loop_closed or bare
        self._relay.aim(wave if bare else drive.relay and carried, now_us)
        self._switch.aim(wave and carried, now_us)
        self._bleed.aim(not (drive.bleed_release and carried), now_us)
        for contact in (self._relay, self._switch, self._bleed):
            if contact.move(now_us):
                self._tell(contact.what, int(contact.closed))
        state = (self.conducting, self._bleed.closed)
        if state == self._state and not anew:
            return
        ended, since, before = self._stretch, self._since_s, self._sign
        self._sign = _sign_of(self.circuit)
        v0 = before * self._sign * ended.capacitor_v(since)
        self._bled_j += ended.bleed_j(since)
        self._past.append((ended, before, now_us))
        moved = state[0] != self._state[0]
        self._state = state
        self._stretch = self._begin(v0)
        if moved:
            broken_a = abs(float(ended.values(np.array([since]))[1][0]))
            if broken_a > HOT_A:
                self.hot_openings.append((now_us, broken_a))
            self._tell("conducting", int(state[0]))

    @property
    def _since_s(self) -> float:
        return (self._now_us - self._stretch.start_us) * 1e-6

    def _begin(self, v0: float) -> Stretch:
        bled = self._bleed.closed
        if self.conducting:
            return ClosedStretch(self.source, self.circuit, bled, self._now_us, v0)
        return OpenStretch(self.circuit, bled, self._rest_voltage(), self._now_us, v0)

    def _tell(self, what: str, level: int) -> None:
        if self._notice is not None:
            self._notice(self._now_us, what, level)

    # -- what can be seen -----------------------------------------------------------------

    @property
    def conducting(self) -> bool:
        """Whether the source is across the capacitor."""
        return self._relay.closed and self._switch.closed

    @property
    def bleed_engaged(self) -> bool:
        """Whether the bleed contact is closed."""
        return self._bleed.closed

    @property
    def capacitor_v(self) -> float:
        """Voltage on the ideal capacitor now; its terminals differ by the ESR's drop."""
        return self._sign * self._stretch.capacitor_v(self._since_s)

    @property
    def loop_current_a(self) -> float:
        """What flows through contact and shunt now."""
        return self._sign * float(self._stretch.values(np.array([self._since_s]))[1][0])

    @property
    def bleed_energy_j(self) -> float:
        """What the bleed resistor has taken since the plant began."""
        return self._bled_j + self._stretch.bleed_j(self._since_s)

    def sample(self, instants_us: Floats) -> tuple[Floats, Floats, Floats]:
        """Source voltage (V), loop current (A) and bank terminal voltage (V), shape (n,).

        `instants_us` ascends from at most HISTORY_US ago; time passes to the last of them
        where that lies ahead. An instant at which a contact moves is just after the move.
        """
        out = np.zeros((3, len(instants_us)))
        if not len(instants_us):
            return out[0], out[1], out[2]
        if instants_us[0] < self._known_from_us:
            raise ValueError(f"{instants_us[0]} us is past; virtual time is {self._now_us} us")
        self.advance_to(math.ceil(instants_us[-1]))
        begin = 0
        for stretch, sign, end_us in (*self._past, (self._stretch, self._sign, math.inf)):
            end = int(np.searchsorted(instants_us, end_us))
            if end > begin:
                times = (instants_us[begin:end] - stretch.start_us) * 1e-6
                out[:, begin:end] = sign * np.stack(stretch.values(times))
                begin = end
        return out[0], out[1], out[2]

    @contextmanager
    def holding(self) -> Iterator[None]:
        """Within it, `sample` may look back to where it began."""
        self._held_us = self._now_us
        try:
            yield
        finally:
            self._held_us = None

    @property
    def _known_from_us(self) -> int:
        back_us = self._now_us - HISTORY_US if self._held_us is None else self._held_us
        return max(0, back_us)

    def sample_pairs(
        self, t0_us: int, count: int, pair_us: float = 4.0, skew_us: float = 2.0
    ) -> tuple[Floats, Floats]:
        """Voltage at t0 + pair_us p and current at t0 + pair_us p + skew_us, p < `count`."""
        if not 0.0 <= skew_us <= pair_us:
            raise ValueError(f"skew of {skew_us} us does not fit into a pair of {pair_us} us")
        starts = t0_us + pair_us * np.arange(count)
        instants = np.stack((starts, starts + skew_us), axis=1).ravel()
        v, i, _ = self.sample(instants)
        return v[0::2], i[1::2]
