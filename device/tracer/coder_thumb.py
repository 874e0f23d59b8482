"""`cobs_into` of coder.py in the RP2040's own instructions: 11 cycles a byte and 15 a zero.

Does what coder.py does, byte for byte; tests compare the two and count the cycles. A block's
reach is worked out once, to 254 bytes or to the body's end, so that a byte is compared with one
limit; a reach that is the end already stays it, and a zero then opens a block in few cycles.
"""

import micropython


@micropython.asm_thumb
def cobs_into(r0, r1, r2):
    # r0: body, later its next byte; r1: length, later the end; r2: out, later its next place.
    mov(r6, r2)  # r6: where out begins
    add(r1, r0, r1)
    mov(r4, r0)  # r4: the block's reach, which is the end already where the body is empty
    b(OPEN)
    label(COPY)
    strb(r5, [r2, 0])
    add(r2, r2, 1)
    label(NEXT)
    cmp(r0, r4)
    beq(REACHED)
    ldrb(r5, [r0, 0])
    add(r0, r0, 1)
    cmp(r5, 0)
    bne(COPY)
    sub(r7, r2, r3)
    strb(r7, [r3, 0])
    label(OPEN)
    mov(r3, r2)  # r3: place of the block's code
    add(r2, r2, 1)
    cmp(r4, r1)
    beq(NEXT)
    mov(r4, 254)
    add(r4, r4, r0)
    cmp(r4, r1)
    bls(NEXT)
    mov(r4, r1)
    b(NEXT)
    label(REACHED)
    sub(r7, r2, r3)
    strb(r7, [r3, 0])
    # A full block opens another only where data follow.
    cmp(r0, r1)
    bne(OPEN)
    mov(r7, 0)
    strb(r7, [r2, 0])
    add(r2, r2, 1)
    sub(r0, r2, r6)
