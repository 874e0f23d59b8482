"""The exceptions of Kneewise: one base, a few kinds, each saying what to do next.

Every message has four parts: what was done, what was found, what was expected, and the next
step. `exit_code` is what the command line returns for it.
"""

from __future__ import annotations


class KneewiseError(Exception):
    """Base of all. The four parts are attributes and make the message."""

    exit_code = 1

    def __init__(self, what: str, *, found: str, expected: str, next_step: str) -> None:
        self.what = what
        self.found = found
        self.expected = expected
        self.next_step = next_step
        super().__init__(f"{what}: found {found}; expected {expected}. Next: {next_step}")


class UsageError(KneewiseError):
    """The caller named something that does not exist or cannot be meant."""

    exit_code = 2


class ScenarioError(UsageError):
    """A scenario file cannot be read or holds an impossible value."""


class ProfileError(UsageError):
    """A board profile cannot be read or holds an impossible value."""


class LinkError(KneewiseError):
    """The port cannot be opened, or the device stopped answering."""

    exit_code = 4


class ProtocolError(KneewiseError):
    """Something answers, but it is not firmware that this host can talk to."""


class RefusedError(KneewiseError):
    """The device refused a request. `guard` is the hazard's number, 0 where none is meant, and
    `measured` what it is about, in `unit` ("mV", "mA", ...; "" where it is a yes or no).
    """

    exit_code = 3

    def __init__(
        self,
        what: str,
        *,
        found: str,
        expected: str,
        next_step: str,
        code: int = 0,
        guard: int = 0,
        measured: int = 0,
        unit: str = "",
    ) -> None:
        self.code = code
        self.guard = guard
        self.measured = measured
        self.unit = unit
        super().__init__(what, found=found, expected=expected, next_step=next_step)


class DeviceFaultError(KneewiseError):
    """The device has latched a fault; `guard`, `measured` and `unit` as in `RefusedError`."""

    exit_code = 3

    def __init__(
        self,
        what: str,
        *,
        found: str,
        expected: str,
        next_step: str,
        guard: int = 0,
        measured: int = 0,
        unit: str = "",
    ) -> None:
        self.guard = guard
        self.measured = measured
        self.unit = unit
        super().__init__(what, found=found, expected=expected, next_step=next_step)


class OutcomeUnknownError(KneewiseError):
    """The link or the device went away after a fire: it may or may not have swept."""

    exit_code = 4


class ArchiveError(KneewiseError):
    """A trace cannot be stored or read."""


class TrustError(KneewiseError):
    """The result arrived but must not be trusted."""

    exit_code = 5
