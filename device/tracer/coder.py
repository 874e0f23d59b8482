"""COBS on the device: a frame's body becomes the bytes that go over the link.

Comes in: a body, its CRC included, of up to 256 bytes. Goes out: its coding and the delimiter,
written into a buffer that the caller keeps, since nothing is allocated while a frame goes out.
On the RP2040 the same is done by `coder_thumb.py`.

COBS: Cheshire and Baker, "Consistent Overhead Byte Stuffing", IEEE/ACM Transactions on
Networking 7 (1999) 159-172.

Widths: places stay below 2**9, and a code is at most 255.
"""

import micropython


@micropython.viper
def cobs_into(body: ptr8, length: int, out: ptr8) -> int:
    """Code the first `length` bytes of `body` into `out`; the bytes written, delimiter included.

    `out` holds 259 bytes at least: of 256 bytes COBS makes 258, and the delimiter follows.
    """
    code = 0  # place of the open block's code
    at = 1
    taken = 0
    while taken < length:
        byte = body[taken]
        taken += 1
        if byte == 0:
            out[code] = at - code
            code = at
            at += 1
        else:
            out[at] = byte
            at += 1
            # A full block that ends the body is closed below, and no empty one is opened.
            if at - code == 255 and taken < length:
                out[code] = 255
                code = at
                at += 1
    out[code] = at - code
    out[at] = 0
    return at + 1
