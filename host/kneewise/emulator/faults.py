"""A link that loses, damages and repeats bytes, seeded: a port around another port.

It stands on the host's side of any port, so it serves every rung.
"""

from __future__ import annotations

from dataclasses import dataclass
from random import Random

from kneewise.link.port import Port


@dataclass(frozen=True, slots=True, kw_only=True)
class LinkFaults:
    """Probabilities for each byte, both ways alike."""

    lose: float = 0.0
    corrupt: float = 0.0
    repeat: float = 0.0


class FaultyPort:
    """`port` with faults. `carried` and `spoilt` count bytes both ways together."""

    def __init__(self, port: Port, faults: LinkFaults, seed: int) -> None:
        self.name = port.name
        self.faults = faults
        self.carried = 0
        self.spoilt = 0
        self._port = port
        self._random = Random(seed)

    def clock(self) -> float:
        return self._port.clock()

    def sleep(self, seconds: float) -> None:
        self._port.sleep(seconds)

    def read(self, timeout_s: float) -> bytes:
        return self._spoil(self._port.read(timeout_s))

    def write(self, data: bytes) -> None:
        self._port.write(self._spoil(data))

    def close(self) -> None:
        self._port.close()

    def _spoil(self, data: bytes) -> bytes:
        self.carried += len(data)
        faults = self.faults
        out = bytearray()
        for byte in data:
            draw = self._random.random()
            if draw < faults.lose:
                self.spoilt += 1
                continue
            draw -= faults.lose
            if draw < faults.corrupt:
                self.spoilt += 1
                out.append(byte ^ self._random.randrange(1, 256))
                continue
            out.append(byte)
            if draw - faults.corrupt < faults.repeat:
                self.spoilt += 1
                out.append(byte)
        return bytes(out)
