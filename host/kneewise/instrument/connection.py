"""One connection to a tracer that outlives a lost link: its session, its profile, its state.

Comes in: what an opener gives. Goes out: requests through the session, the link opened again
where it was lost, and whether the device on its other end is still the same.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeVar

from kneewire import catalogue
from kneewise.errors import LinkError, OutcomeUnknownError, RefusedError
from kneewise.instrument.bled import still_hot, wait_bled
from kneewise.instrument.opened import Opened
from kneewise.instrument.profile import read_record
from kneewise.instrument.status import Status, status_of
from kneewise.link.port import Port
from kneewise.link.recording import Recorder
from kneewise.link.refusals import CODES
from kneewise.link.session import Session, quiet_nonce

REJOIN_S = 20.0
SETTLE_S = 0.25
COOL_S = 60.0  # so long is waited for a hot bleed resistor
COOL_MARGIN_S = 0.02  # the source's voltage, and so the energy, is not read twice alike

T = TypeVar("T")
Progress = Callable[[str], None]


class Connection:
    """Greets the device and reads its profile; `close` ends it. LinkError, ProtocolError."""

    def __init__(self, opened: Opened, recorder: Recorder | None = None) -> None:
        self.opened = opened
        self.recorder = recorder
        self._closed = False
        try:
            self.session = Session(self._connect())
        except BaseException:
            opened.close()
            raise
        try:
            self.device: dict[str, Any] = self.session.hello()
            """The device's latest hello."""
            self.record: bytes = self.session.request("read_profile")["record"]
            self.profile = read_record(self.record) if self.record else {}
        except BaseException:
            self.close()
            raise

    def _connect(self) -> Port:
        port = self.opened.connect()
        return port if self.recorder is None else self.recorder.wrap(port)

    def close(self) -> None:
        """Close the port; twice is harmless."""
        if not self._closed:
            self._closed = True
            self.session.port.close()
            self.opened.close()
            if self.recorder is not None:
                self.recorder.close()

    # -- state -------------------------------------------------------------------------

    def status(self) -> Status:
        """State and live readings."""
        return status_of(self.session.request("status"), self.profile)

    def wait_safe(self, progress: Progress = lambda stage: None) -> Status:
        """Wait out the bleed, and what its resistor needs to cool; a latched fault is raised."""
        status, fault = wait_bled(self.session, self.profile)
        if fault is not None:
            raise fault
        if status.state == "armed":
            self.session.abort()
        if status.rest_s > COOL_S:
            raise still_hot(status, self.profile)
        if status.rest_s:
            progress(f"letting the bleed resistor cool for {status.rest_s:.1f} s")
            self.session.port.sleep(status.rest_s + COOL_MARGIN_S)
            status, fault = wait_bled(self.session, self.profile)
            if fault is not None:
                raise fault
        return status

    def greet_anew(self) -> None:
        """Begin another session: what was confirmed in the one before counts no more."""
        self.session.host_nonce = quiet_nonce()
        self.device = self.session.hello()

    # -- a link that goes --------------------------------------------------------------

    def rejoin(self, within_s: float = REJOIN_S) -> None:
        """Open the port again and resume the session, for so long at most. LinkError."""
        port = self.session.port
        end = port.clock() + within_s
        port.close()
        while True:
            try:
                self.session.take_over(self._connect())
                self.device = self.session.hello()
                return
            except LinkError:
                if port.clock() >= end:
                    raise
                self.session.port.close()
                port.sleep(SETTLE_S)

    def rejoining(self, action: Callable[[], T]) -> T:
        """`action`, and once more after a lost link."""
        try:
            return action()
        except LinkError:
            self.rejoin()
            return action()

    def after_fire(
        self, sweep_id: bytes, action: Callable[[], T], again: Callable[[], T] | None = None
    ) -> T:
        """`action`; after a lost link `again`, or `action` once more, if the device is the same.

        OutcomeUnknownError where it is not.
        """
        boot_nonce = self.device["boot_nonce"]
        try:
            return action()
        except (LinkError, RefusedError) as error:
            # A device that was reset over an unbroken link knows no session.
            if isinstance(error, RefusedError) and error.code != CODES["unknown session"]:
                raise
        self.rejoin()
        self._same_sweep(boot_nonce, sweep_id)
        return (again or action)()

    def _same_sweep(self, boot_nonce: int, sweep_id: bytes) -> None:
        """OutcomeUnknownError where the device was reset, or does not know of the sweep."""
        if self.device["boot_nonce"] != boot_nonce:
            cause = catalogue.RESET_CAUSES.get(self.device["reset_cause"], "unknown")
            volt = self.status().capacitor_v
            raise OutcomeUnknownError(
                f"sweep {sweep_id.hex()[:8]}",
                found=f"the device was reset after it was told to fire (cause: {cause}); "
                f"{volt:.2f} V on the capacitor",
                expected="the device that was told to fire",
                next_step="the sweep is lost or was never made; measure the capacitor, "
                "find the cause, then sweep again",
            )
        status = self.status()
        if status.state != "charging" and status.held_sweep != sweep_id.hex():
            self.session.abort()
            raise OutcomeUnknownError(
                f"sweep {sweep_id.hex()[:8]}",
                found="the device holds no such sweep: the fire did not arrive, or the firmware "
                "failed in the charge" + self._crash(),
                expected="a held sweep",
                next_step="measure the capacitor, then sweep again",
            )

    def _crash(self) -> str:
        tracebacks = self.session.tracebacks
        return f" ({tracebacks[-1].splitlines()[-1]})" if tracebacks else ""
