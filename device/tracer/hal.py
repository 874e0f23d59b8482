"""What a board must offer to the firmware.

The firmware's decisions live in the other files of this package; a board file only moves
bits. `hal_rp2.py` fulfils this interface with the RP2040's registers, the emulator fulfils
it with an analogue model. Subclass `Hal`, implement every method.

Safe state, everywhere: contact open, bleed engaged. It is also the state of a board with no
power, of a board in reset and of pins that nothing drives.

No method allocates, raises or blocks between `quiet_begin` and `quiet_end`.
"""

# Analogue channels.
VOLTAGE = 0  # source voltage by its own sense pair, through the divider
CURRENT = 1  # shunt amplifier
CAPACITOR = 2  # capacitor voltage, through its own divider

# Kinds of converters, as in the profile.
INTERNAL = 1  # the RP2040's own, V and I in turn
SPI16 = 2  # two of 16 bits, sampled at one instant

# Bits of `trips()`: why supervision asked for the charge to end.
TRIP_STOP_LOOP = 1
TRIP_OVER_VOLTAGE = 2
TRIP_OVER_CURRENT = 4

# Reset causes, as hello reports them.
RESET_POWER_ON = 1
RESET_PIN = 2
RESET_WATCHDOG = 3
RESET_SOFT = 4


class Hal:
    """The interface; see the module's text. All numbers are integers."""

    EMULATED = False
    # Of the converters in use; `use_converters` may change them.
    PAIR_US = 4  # from one voltage conversion to the next
    SKEW_NS = 2000  # from the voltage conversion of a pair to its current conversion
    CODE_BITS = 12  # of V and I; the capacitor's channel always has 12
    RING_PAIRS = 4096  # capacity of `ring`, a power of two

    ring = None
    """Buffer of RING_PAIRS words, voltage in the low half and current in the high half of each,
    aligned to its size."""

    errors = None
    """A faster stand-in for `errors` of plane.py, where the board has one."""

    cobs_into = None
    """A faster stand-in for `cobs_into` of coder.py, where the board has one."""

    # -- identity --------------------------------------------------------------------

    def device_id(self):
        """Eight bytes that no other board has."""
        raise NotImplementedError

    def reset_cause(self):
        """One of the RESET_ constants."""
        raise NotImplementedError

    def random32(self):
        """A random number of 32 bits (boot nonce, session, arm token)."""
        raise NotImplementedError

    # -- converters ------------------------------------------------------------------

    def use_converters(self, kind, pair_us, clock_khz, convert_ns):
        """Measure V and I with these from now on: INTERNAL or SPI16 and its numbers, as in the
        profile. ValueError where the board has none such, or cannot keep that pace.
        """
        raise NotImplementedError

    def zero_input(self, on):
        """Bring the voltage channel's input to its zero (True), or back to the source."""
        raise NotImplementedError

    # -- outputs ---------------------------------------------------------------------

    def safe(self):
        """Contact open, bleed engaged, pulse stopped. Allowed at any time, any number of times."""
        raise NotImplementedError

    def relay(self, closed):
        """Close or open the isolating relay (dry in a relay+switch build)."""
        raise NotImplementedError

    def bleed(self, engaged):
        """Engage the bleed (its contact is closed when unpowered) or release it."""
        raise NotImplementedError

    def use_contact(self, bare):
        """How long the longest pulse may be: 20 ms, or 5 s for a relay without a switch."""
        raise NotImplementedError

    def pulse(self, us):
        """Let the make-and-break output run for at most `us` more microseconds; 0 stops it.

        A new call replaces what is left; calls never add up.
        """
        raise NotImplementedError

    # -- inputs ----------------------------------------------------------------------

    def stop_loop_closed(self):
        """False where the lid or the stop switch is open."""
        raise NotImplementedError

    def leads_reversed(self):
        """True where the comparator sees the source's leads swapped."""
        raise NotImplementedError

    def read(self, channel, count):
        """Sum of `count` (at most 4096) conversions of one channel; not during a capture."""
        raise NotImplementedError

    # -- capture ---------------------------------------------------------------------

    def capture_start(self):
        """Start pairs of V and I into `ring` from its first place."""
        raise NotImplementedError

    def capture_began_us(self):
        """Time of the last capture's first voltage conversion, in us since boot.

        Not in the quiet: the number may have to be allocated.
        """
        raise NotImplementedError

    def capture_written(self):
        """Pairs written since `capture_start`, modulo 2**30; also once the capture has stopped."""
        raise NotImplementedError

    def capture_stop(self):
        """Stop; True where a conversion was dropped (V and I may have swapped)."""
        raise NotImplementedError

    def supervise(self, voltage_trip_code, current_trip_code, breaks):
        """Start the 1 kHz supervision over the newest two pairs and the stop loop.

        `breaks`: a trip ends the pulse at once, and no later call of `pulse` brings it back.
        """
        raise NotImplementedError

    def supervision_ticks(self):
        """Supervision visits since `supervise`, modulo 2**30."""
        raise NotImplementedError

    def trips(self):
        """TRIP_ bits seen since `supervise`."""
        raise NotImplementedError

    def trip_code(self):
        """The code that was the first to trip."""
        raise NotImplementedError

    def supervise_end(self):
        """Stop the supervision."""
        raise NotImplementedError

    # -- time ------------------------------------------------------------------------

    def now_us(self):
        """Microseconds since boot, 64 bits. Not in the quiet, as `capture_began_us`."""
        raise NotImplementedError

    def ticks_us(self):
        """Microseconds modulo 2**30, also in the quiet."""
        raise NotImplementedError

    def wait_us(self, us):
        """Let `us` microseconds pass."""
        raise NotImplementedError

    def bleed_wait(self, ms):
        """Return when bytes from the host can be read, or after `ms`, while the bleed works.

        An emulator may jump over this time; a board waits it out.
        """
        raise NotImplementedError

    def quiet_begin(self):
        """From here to `quiet_end`: nothing allocated, nothing sent, waits are exact.

        Where the board can, an allocation raises MemoryError.
        """
        raise NotImplementedError

    def quiet_end(self):
        """Allowed at any time, any number of times."""
        raise NotImplementedError

    def hang(self):
        """Do nothing for ever, as a firmware does that has hung. For a proof test."""
        raise NotImplementedError

    def watchdog(self, ms):
        """Start or feed the watchdog with `ms`; 0 stops it."""
        raise NotImplementedError

    # -- link ------------------------------------------------------------------------

    def link_wait(self, ms):
        """Return when bytes from the host can be read, or after `ms` at the latest."""
        raise NotImplementedError

    def link_read(self, buffer):
        """Read what is there into `buffer`, without blocking; the count read, 0 for none."""
        raise NotImplementedError

    def link_write(self, data):
        """Write; the count written, which is short when the host has stopped reading."""
        raise NotImplementedError
