"""`fold_units` of capture.py in the RP2040's own instructions: about 17 cycles a pair and 45 a
unit, on an emulated RP2040.

Does what capture.py does, word for word; a test compares the two over the whole range of codes.
A pair's two differences come from one subtraction: the low half of `pair - last` is the
voltage's, and what is left after taking it away, shifted down, is the current's. A unit's two
sums fit one word, since 16 codes stay below 2**16.
"""

import micropython


@micropython.asm_thumb
def fold_units(r0, r1, r2):
    # r0: ring, r1: bins, r2: control, whose words are C_UNIT, C_LAST, C_AT, C_PLACE, C_UNITS.
    mov(r4, r8)
    mov(r5, r9)
    mov(r6, r10)
    mov(r7, r11)
    push({r4, r5, r6, r7})
    mov(r11, r2)
    ldr(r4, [r2, 0])
    mov(r10, r4)  # r10: pairs in a unit
    ldr(r5, [r2, 4])  # r5: the last pair
    ldr(r4, [r2, 8])
    lsl(r4, r4, 2)
    add(r0, r0, r4)  # r0: the next pair
    ldr(r4, [r2, 12])
    lsl(r4, r4, 2)
    add(r1, r1, r4)
    mov(r9, r1)  # r9: the next unit's place
    ldr(r4, [r2, 16])
    mov(r8, r4)  # r8: units to go
    label(UNIT)
    mov(r1, r10)  # r1: pairs to go
    mov(r2, 0)  # r2: both sums
    mov(r3, 0)  # r3: scatter of the voltage
    mov(r4, 0)  # r4: scatter of the current
    label(PAIR)
    ldr(r6, [r0, 0])
    add(r0, r0, 4)
    add(r2, r2, r6)
    sub(r7, r6, r5)
    mov(r5, r6)
    lsl(r6, r7, 16)
    asr(r6, r6, 16)
    sub(r7, r7, r6)
    asr(r7, r7, 16)
    mul(r6, r6)
    add(r3, r3, r6)
    mul(r7, r7)
    add(r4, r4, r7)
    sub(r1, r1, 1)
    bne(PAIR)
    mov(r6, r9)
    lsl(r7, r2, 16)
    lsr(r7, r7, 16)
    str(r7, [r6, 0])
    lsr(r7, r2, 16)
    str(r7, [r6, 4])
    str(r3, [r6, 8])
    mov(r7, 0)
    str(r7, [r6, 12])
    str(r4, [r6, 16])
    str(r7, [r6, 20])
    mov(r7, 24)
    add(r6, r6, r7)
    mov(r9, r6)
    mov(r1, r8)
    sub(r1, r1, 1)
    mov(r8, r1)
    bne(UNIT)
    mov(r3, r11)
    str(r5, [r3, 4])
    pop({r4, r5, r6, r7})
    mov(r8, r4)
    mov(r9, r5)
    mov(r10, r6)
    mov(r11, r7)
