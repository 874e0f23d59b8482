"""The one place where CPython and MicroPython differ: who does the COBS coding.

On CPython the `cobs` package does it in C. MicroPython has no such package, so `pure_encode`
and `pure_decode` stand in; both run the same vectors. CRC-32/ISO-HDLC is in C on both sides
(`binascii.crc32`).

COBS: Cheshire and Baker, "Consistent Overhead Byte Stuffing", IEEE/ACM Transactions on
Networking 7 (1999) 159-172.
"""

from binascii import crc32


def pure_encode(data: bytes) -> bytes:
    """COBS without the closing delimiter; works a zero-free run at a time."""
    out = bytearray()
    runs = data.split(b"\x00")
    last = len(runs) - 1
    for number, run in enumerate(runs):
        whole = len(run)
        start = 0
        while whole - start >= 254:
            out.append(255)
            out.extend(run[start : start + 254])
            start += 254
        # A full block already implies "no zero here", so the end of data adds nothing to it.
        if start < whole or number < last or whole == 0:
            out.append(whole - start + 1)
            out.extend(run[start:])
    return bytes(out)


def pure_decode(coded: bytes) -> bytes:
    """The inverse of `pure_encode`; raises ValueError on anything COBS cannot have made."""
    out = bytearray()
    place = 0
    end = len(coded)
    if end == 0:
        raise ValueError("empty")
    while place < end:
        code = coded[place]
        after = place + code
        if code == 0 or after > end:
            raise ValueError("cobs")
        block = coded[place + 1 : after]
        if b"\x00" in block:
            raise ValueError("cobs")
        out.extend(block)
        if code < 255 and after < end:
            out.append(0)
        place = after
    return bytes(out)


try:
    from cobs import cobs as _cobs
except ImportError:
    cobs_encode = pure_encode
    cobs_decode = run_decode = pure_decode
    CobsErrors: tuple[type[Exception], ...] = (ValueError,)
else:
    # Straight from the package: a stream of blocks spends much of its time in calls.
    cobs_encode = _cobs.encode
    run_decode = _cobs.decode
    CobsErrors = (ValueError, _cobs.DecodeError)

    def cobs_decode(coded: bytes) -> bytes:
        """The inverse of `cobs_encode`; raises ValueError on anything COBS cannot have made."""
        if not coded:
            raise ValueError("empty")
        try:
            return run_decode(coded)
        except _cobs.DecodeError as error:
            raise ValueError("cobs") from error


# `run_decode` is for runs, which are never empty; it raises one of `CobsErrors`.
__all__ = [
    "CobsErrors",
    "cobs_decode",
    "cobs_encode",
    "crc32",
    "pure_decode",
    "pure_encode",
    "run_decode",
]
