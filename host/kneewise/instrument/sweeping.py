"""One sweep over a connection: arm, fire once, wait, fetch, hand over.

Comes in: what is asked for. Goes out: a trace, which the device is told to forget only once it
has been handed over. A fire is never sent a second time.
"""

from __future__ import annotations

import secrets
from collections.abc import Callable

from kneewire import catalogue
from kneewire.messages import Message
from kneewise.errors import DeviceFaultError, RefusedError, TrustError
from kneewise.instrument.arming import Asked, arm
from kneewise.instrument.assemble import assemble
from kneewise.instrument.bled import wait_bled
from kneewise.instrument.connection import Connection, Progress
from kneewise.instrument.full_rate import Window
from kneewise.instrument.scout import with_scout
from kneewise.instrument.sweep import fetch, fetch_raw
from kneewise.instrument.timing import probes_of, utc_of
from kneewise.instrument.trace import Trace
from kneewise.link.refusals import CODES

NOTICE_S = 5.0
MANIFEST_S = 10.0
ARMINGS = 3

Keep = Callable[[Trace], object]


class Sweeping:
    """`rung` says what runs the firmware; see `Trace.rung`."""

    def __init__(self, connection: Connection, rung: str) -> None:
        self._connection = connection
        self._rung = rung

    def sweep(
        self,
        asked: Asked,
        window: Window,
        stands_alone: bool,
        keep: Keep | None,
        progress: Progress,
        scout: Trace | None = None,
    ) -> Trace:
        """See `Tracer.sweep`. `window`: pairs kept one by one; `scout`: put into the trace."""
        connection = self._connection
        progress("getting ready")
        connection.wait_safe(progress)
        sweep_id = secrets.token_bytes(16)
        for left in reversed(range(ARMINGS)):
            progress("arming")
            token, window = arm(connection.session, asked, window, stands_alone)
            try:
                self.fire(token, sweep_id, progress)
                break
            except RefusedError as error:
                # Refused means not fired, for good: on a bad link the token has died on its way.
                if not left or error.code not in (CODES["bad token"], CODES["wrong state"]):
                    raise
        progress("bleeding")
        trace = connection.after_fire(
            sweep_id, lambda: self._finish(sweep_id, progress, window.pairs)
        )
        if scout is not None:
            trace = with_scout(trace, scout)
        self._hand_over(trace, sweep_id, keep)
        return trace

    def held(self, keep: Keep | None) -> Trace | None:
        """See `Tracer.held`."""
        connection = self._connection
        # A latched fault is no reason to lose what was measured before it.
        status, _ = wait_bled(connection.session, connection.profile)
        if not status.held_sweep:
            return None
        sweep_id = bytes.fromhex(status.held_sweep)
        trace = connection.rejoining(lambda: self._finish(sweep_id, lambda stage: None, None))
        self._hand_over(trace, sweep_id, keep)
        return trace

    def fire(self, token: int, sweep_id: bytes, progress: Progress) -> None:
        """Fire, and wait in quiet until the charge has ended. Never fires a second time."""
        session = self._connection.session
        progress("charging")

        def go() -> None:
            fired = session.request("fire", {"token": token, "sweep_id": sweep_id})
            session.wait_quiet(fired["quiet_ms"] / 1000, sweep_id)

        # The charge may be under way when the link goes: whatever happened, the device knows.
        self._connection.after_fire(sweep_id, go, lambda: None)

    def _finish(self, sweep_id: bytes, progress: Progress, asked: int | None) -> Trace:
        """Wait for the bleed, fetch the held sweep, make the trace.

        `asked`: raw pairs that were to be kept; None where that is not known.
        """
        fault = self._await_bleed(sweep_id)
        progress("fetching")
        connection = self._connection
        session = connection.session
        manifest = self._manifest(sweep_id, fault)
        reassembly = fetch(session, manifest)
        pairs = fetch_raw(session, manifest)
        probes = probes_of(session)
        try:
            started, uncertainty_s = utc_of(
                manifest["conducting_us"], probes, session, connection.opened.utc()
            )
            return assemble(
                manifest,
                reassembly,
                pairs,
                asked=asked,
                rung=self._rung,
                device=connection.device,
                profile=connection.profile,
                frames_bad=session.frames_bad,
                started_utc=started,
                started_uncertainty_s=uncertainty_s,
                scenario=connection.opened.scenario,
                truth=connection.opened.truth,
            )
        except TrustError as error:
            # Not a curve: held on, it would only stand in the way of the next sweep.
            session.request("acknowledge", {"sweep_id": sweep_id})
            raise (fault or error) from None

    def _manifest(self, sweep_id: bytes, fault: DeviceFaultError | None) -> Message:
        session = self._connection.session
        try:
            manifest = session.request("read_manifest", deadline_s=MANIFEST_S)
            held = manifest["sweep_id"]
        except RefusedError as error:
            if error.code != CODES["no held sweep"]:
                raise
            held = b""
        if held == sweep_id:
            return manifest
        if fault is not None:
            raise fault
        raise TrustError(
            f"sweep {sweep_id.hex()[:8]}",
            found=f"the device holds {held.hex() or 'no sweep'}",
            expected="this sweep",
            next_step="sweep again; another program may be talking to the tracer",
        )

    def _await_bleed(self, sweep_id: bytes) -> DeviceFaultError | None:
        """Until the bleed after a charge has ended, by its notice; a fault that is latched."""
        connection = self._connection
        notice = connection.session.wait_notice("bleed_ended", NOTICE_S, sweep_id)
        if notice is not None and catalogue.STATES.get(notice["state"]) != "fault":
            return None
        _, fault = wait_bled(connection.session, connection.profile)
        return fault

    def _hand_over(self, trace: Trace, sweep_id: bytes, keep: Keep | None) -> None:
        if keep is not None:
            keep(trace)
        connection = self._connection
        connection.rejoining(
            lambda: connection.session.request("acknowledge", {"sweep_id": sweep_id})
        )
