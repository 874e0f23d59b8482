"""A link that loses, damages, repeats and holds back what it carries, seeded.

A port around another port, on the host's side, so it serves every rung.
"""

from __future__ import annotations

from dataclasses import dataclass
from random import Random

from kneewise.link.port import Port


@dataclass(frozen=True, slots=True, kw_only=True)
class LinkFaults:
    """Probabilities, both ways alike: the first three for each byte, the others for each piece
    that is read or written at once.
    """

    lose: float = 0.0
    corrupt: float = 0.0
    repeat: float = 0.0
    lose_piece: float = 0.0
    truncate_piece: float = 0.0
    """Its end is lost, from any place on."""
    repeat_piece: float = 0.0
    delay_piece: float = 0.0
    """Held back until the next piece, and then carried before or behind it."""


class FaultyPort:
    """`port` with faults. `carried` and `spoilt` count bytes both ways together."""

    def __init__(self, port: Port, faults: LinkFaults, seed: int) -> None:
        self.name = port.name
        self.faults = faults
        self.carried = 0
        self.spoilt = 0
        self._port = port
        self._random = Random(seed)
        self._held = {True: b"", False: b""}  # of what was written, of what was read

    def clock(self) -> float:
        return self._port.clock()

    def sleep(self, seconds: float) -> None:
        self._port.sleep(seconds)

    def read(self, timeout_s: float) -> bytes:
        return self._spoil(self._port.read(timeout_s), False)

    def write(self, data: bytes) -> None:
        spoilt = self._spoil(data, True)
        if spoilt:
            self._port.write(spoilt)

    def close(self) -> None:
        self._port.close()

    def _spoil(self, data: bytes, written: bool) -> bytes:
        self.carried += len(data)
        data = b"".join(self._byte(byte) for byte in data)
        faults, draw = self.faults, self._random.random()
        held, self._held[written] = self._held[written], b""
        if not data:
            return held
        if draw < faults.lose_piece:
            self.spoilt += len(data)
            return held
        draw -= faults.lose_piece
        if draw < faults.truncate_piece:
            kept = self._random.randrange(len(data))
            self.spoilt += len(data) - kept
            return held + data[:kept]
        draw -= faults.truncate_piece
        if draw < faults.repeat_piece:
            data += data
        elif draw - faults.repeat_piece < faults.delay_piece:
            self._held[written] = data
            data = b""
        return held + data if self._random.random() < 0.5 else data + held

    def _byte(self, byte: int) -> bytes:
        faults, draw = self.faults, self._random.random()
        if draw < faults.lose:
            self.spoilt += 1
            return b""
        draw -= faults.lose
        if draw < faults.corrupt:
            self.spoilt += 1
            return bytes([byte ^ self._random.randrange(1, 256)])
        if draw - faults.corrupt < faults.repeat:
            self.spoilt += 1
            return bytes([byte, byte])
        return bytes([byte])
