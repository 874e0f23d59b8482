"""The make-and-break output: a square wave that always ends by itself.

The driver of the contact is AC-coupled: it conducts only while its input toggles at 10 kHz or
more, so a level stuck high or low opens it. A PIO state machine makes the wave. It takes the
number of periods left from its FIFO; each period it looks for a newer word, which replaces
what is left. Only a few bits of a word are used, so that no word, not even a garbled one, runs
for long: nine bits with a switch, 511 periods or 20 ms; 17 with a bare relay, which is given one
pulse for its whole charge, 131071 periods or 5.1 s.

Comes in: microseconds. Goes out: the pin. When and how long: not decided here.
"""

import machine
import micropython
import rp2
from micropython import const

TYPE_CHECKING = False
if TYPE_CHECKING:
    from rp2.asm_pio import (
        jmp,
        label,
        noblock,
        nop,
        out,
        pull,
        wrap,
        wrap_target,
        x,
        x_dec,
    )

PERIOD_US = const(39)  # 13 instructions of 3 us: 25.6 kHz
SWITCH_BITS = const(9)
BARE_BITS = const(17)
_STEP_HZ = const(333333)

_GPIO = const(2)  # make and break; see main.py, which names the pins in its first lines
_SIO_OUT_CLR = const(0xD0000018)
_SIO_OE_SET = const(0xD0000024)
_GPIO2_CTRL = const(0x40014014)
_FUNCTION_SIO = const(5)
_FUNCTION_PIO0 = const(6)

# PIO0, state machine 0; the aliases at +0x1000, +0x2000, +0x3000 flip, set and clear bits.
_CTRL = const(0x50200000)
_CTRL_SET = const(0x50202000)
_CTRL_CLR = const(0x50203000)
_SM_ENABLE = const(1)
_SM_RESTART = const(16)
_TXF0 = const(0x50200010)
_SM0_SHIFTCTRL_XOR = const(0x502010D0)
_FJOIN_RX_BIT = const(31)
_SM0_ADDR = const(0x502000D4)
_SM0_INSTR = const(0x502000D8)


def bounded_wave(bits):
    @rp2.asm_pio(sideset_init=rp2.PIO.OUT_LOW, out_shiftdir=rp2.PIO.SHIFT_RIGHT)
    def wave():
        # X holds the periods left. High for 6 steps, low for 7.
        wrap_target()
        pull().side(0)  # at rest: low, until a word comes
        label("period")
        out(x, bits).side(0)  # the bound: nothing above these bits gets in
        jmp(x_dec, "high").side(0)
        wrap()  # none left: low, back to rest
        label("high")
        nop().side(1)[5]
        pull(noblock).side(0)[3]  # a newer word, else X itself
        jmp("period").side(0)

    return wave


@micropython.viper
def _forget_words():
    """Empty the FIFO, so that no queued word can follow the next one."""
    shiftctrl = ptr32(_SM0_SHIFTCTRL_XOR)
    fjoin_rx = 1  # shifted at run time: viper has no literal above 30 bits
    fjoin_rx = fjoin_rx << _FJOIN_RX_BIT
    shiftctrl[0] = fjoin_rx  # a change of this bit flushes both FIFOs
    shiftctrl[0] = fjoin_rx


@micropython.viper
def run(periods: int, origin: int):
    """The wave for so many periods from now, one at least, whatever was left."""
    _forget_words()
    ptr32(_TXF0)[0] = periods
    if ptr32(_CTRL)[0] & _SM_ENABLE == 0:
        ptr32(_CTRL_SET)[0] = _SM_RESTART
        ptr32(_SM0_INSTR)[0] = origin  # "jmp origin" with the side-set pin low
        ptr32(_GPIO2_CTRL)[0] = _FUNCTION_PIO0
        ptr32(_CTRL_SET)[0] = _SM_ENABLE


@micropython.viper
def stop():
    """Low by SIO first, then the state machine stands still."""
    ptr32(_SIO_OUT_CLR)[0] = 1 << _GPIO
    ptr32(_SIO_OE_SET)[0] = 1 << _GPIO
    ptr32(_GPIO2_CTRL)[0] = _FUNCTION_SIO
    ptr32(_CTRL_CLR)[0] = _SM_ENABLE
    _forget_words()


class BoundedPulse:
    """The wave on GP2, at rest. `run` and `stop` do not allocate and do not block."""

    def __init__(self, bare):
        stop()
        bits = BARE_BITS if bare else SWITCH_BITS
        self._most = (1 << bits) - 1
        rp2.PIO(0).remove_program()
        wave = bounded_wave(bits)
        rp2.StateMachine(0, wave, freq=_STEP_HZ, sideset_base=machine.Pin(_GPIO))
        self.origin = machine.mem32[_SM0_ADDR] & 31
        stop()

    def periods(self, us):
        """For `run`: at most `us` from now; 0 where that is too short for one."""
        # The period under way when the word arrives comes on top of the word.
        return min(max(us // PERIOD_US - 1, 0), self._most)
