"""What the three targets of atheris share.

A target is a module with `one_input(data)`, which raises where something is wrong. Run as a
program it fuzzes, with libFuzzer's own arguments; imported, it needs no atheris.
"""

from __future__ import annotations

import logging
import sys
from collections.abc import Callable
from contextlib import AbstractContextManager, nullcontext
from pathlib import Path

CORPUS = Path(__file__).parent / "corpus"


def instrumented(name: str, *packages: str) -> AbstractContextManager[None]:
    """Where `name` is the program: what is imported inside is watched for its branches."""
    if name != "__main__":
        return nullcontext()
    import atheris

    return atheris.instrument_imports(include=list(packages), enable_loader_override=False)


def fuzz(one_input: Callable[[bytes], None]) -> None:
    """Until an argument of the command line ends it, or something is wrong."""
    import atheris

    logging.disable()
    atheris.Setup(sys.argv, one_input)
    atheris.Fuzz()


class Virtual:
    """The clock of a port on which time passes in reads alone."""

    def __init__(self, data: bytes) -> None:
        self.name = "fuzz"
        self.now_s = 0.0
        self.data = data

    def clock(self) -> float:
        return self.now_s

    def sleep(self, seconds: float) -> None:
        self.now_s += max(seconds, 0.0)

    def read(self, timeout_s: float) -> bytes:
        self.now_s += 0.01 + timeout_s
        data, self.data = self.data, b""
        return data

    def write(self, data: bytes) -> None:
        pass

    def close(self) -> None:
        pass
