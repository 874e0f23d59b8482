"""The board profile on the device: read, checked, its limits turned into ADC codes."""

from kneewire import guards, profile_record
from kneewire.seam import crc32

BARE_RELAY = 2  # code of CONTACTS: a relay that makes and breaks by itself
CLASS_B = 2


def ln_x1000(high, low):
    """1000 times the natural logarithm of high / low, high >= low > 0; good to 1."""
    halvings = 0
    while high >= 2 * low:
        low *= 2
        halvings += 1
    # ln(x) = 2 (z + z^3 / 3 + z^5 / 5 ...), z = (x - 1) / (x + 1), at most 1/3 here.
    z = 100000 * (high - low) // (high + low)
    cube = z * z // 100000 * z // 100000
    fifth = cube * z // 100000 * z // 100000
    return (693147 * halvings // 10 + 2 * z + 2 * cube // 3 + 2 * fifth // 5 + 50) // 100


class Profile:
    """What the firmware needs of a profile: `values` by name, and limits in codes."""

    def __init__(self, record):
        self.record = record
        self.crc = crc32(record)
        self.values = profile_record.unpack_profile(record)
        # Codes of V and I that make one of 12 bits.
        self.finer = 16 if self.values["converter"] == 2 else 1

    def __getitem__(self, name):
        return self.values[name]

    def millivolts(self, channel, code_sum, conversions):
        """Mean of a channel ("voltage" or "capacitor") in mV."""
        sixteenths = 16 * code_sum - self.values[channel + "_zero_x16"] * conversions
        return sixteenths * self.values[channel + "_nv_per_code"] // (16000 * conversions) // 1000

    def leak(self):
        """(ratio, shift): what the permanent bleeder draws through the shunt, in current codes, is
        voltage codes x ratio >> shift; ratio below 2**13, so that 16-bit codes fit.
        """
        values = self.values
        if not values["permanent_bleeder_ohm"]:
            return 0, 0
        volts = values["voltage_nv_per_code"]
        amperes = values["current_na_per_code"] * values["permanent_bleeder_ohm"]
        shift = 28
        while shift and (volts << shift) // amperes >= 8192:
            shift -= 1
        return min((volts << shift) // amperes, 8191), shift

    def bleed_tau_us(self):
        return self.values["bleed_mohm"] * self.values["capacitance_nf"] // 1000000

    def code(self, channel, milli):
        """ADC code of a voltage in mV or a current in mA."""
        scale = self.values[channel + ("_na_per_code" if channel == "current" else "_nv_per_code")]
        return milli * 1000000 // scale + self.values[channel + "_zero_x16"] // 16

    def trip_code(self, channel, milli):
        """The same, at most the converter's rail."""
        return min(self.code(channel, milli), 4096 * self.finer - 1)

    def milli_of(self, channel, code):
        """mV or mA of a code."""
        scale = self.values[channel + ("_na_per_code" if channel == "current" else "_nv_per_code")]
        return (16 * code - self.values[channel + "_zero_x16"]) * scale // 16000000

    def near_zero_codes(self):
        """Codes of current above its zero below which an opening is cold; three at the least."""
        milli = self.values["rated_ma"] * self.values["near_zero_permyriad"] // 10000
        return max(milli * 1000000 // self.values["current_na_per_code"], 3 * self.finer)

    def stored_uj(self, milli):
        """Energy that the capacitor holds at a voltage in mV."""
        return self.values["capacitance_nf"] * milli * milli // 2000000000

    def stored_mj(self, milli):
        return self.stored_uj(milli) // 1000

    def bare(self):
        """True where a relay makes and breaks by itself, without a switch in series."""
        return self.values["contact"] == BARE_RELAY

    def closed_limit_ms(self):
        limit = self.values["closed_limit_ms"]
        return min(limit, guards.BARE_CLOSED_MS) if self.bare() else limit

    def fault(self, device_id):
        """ "" where this profile may be used on that board, else what speaks against it."""
        values = self.values
        if values["device_id"] != device_id:
            return "made for another board"
        if values["hazard_class"] not in (1, CLASS_B) or values["contact"] not in (1, BARE_RELAY):
            return "class or contact is none that this firmware knows"
        for name in (
            "voltage_nv_per_code",
            "current_na_per_code",
            "capacitor_nv_per_code",
            "rated_mv",
            "rated_ma",
            "capacitance_nf",
            "bleed_mohm",
            "permanent_bleeder_ohm",
            "pair_us",
        ):
            if values[name] == 0:
                return name + " is zero"
        for name, least, greatest in guards.BOUNDS:
            if not least <= values[name] <= greatest:
                return "%s is outside %d to %d" % (name, least, greatest)
        return self._class_fault()

    def _class_fault(self):
        """What the hazard class asks for, and what a welded contact would do to the bleed."""
        values = self.values
        letter = values["hazard_class"] - 1
        for name, found, bound in (
            ("rated_mv", values["rated_mv"], guards.RATED_MV[letter]),
            ("rated_ma", values["rated_ma"], guards.RATED_MA[letter]),
            ("energy at rated_mv", self.stored_mj(values["rated_mv"]), guards.STORED_MJ[letter]),
        ):
            if found > bound:
                return "%s is above %d, the bound of its class" % (name, bound)
        if letter:
            if values["declared"] & guards.DECLARED_ALL != guards.DECLARED_ALL:
                return "class B without all its declarations"
            if not values["reviewer"] or not values["reviewed_day"]:
                return "class B without a reviewer and a date"
        held_mw = values["rated_mv"] * values["rated_mv"] // values["bleed_mohm"]
        if held_mw > values["bleed_mw"] and not values["bleed_cutoff"]:
            return "bleed_mw is below what a welded contact would bring, without a cut-off"
        if self.stored_mj(values["rated_mv"]) > values["bleed_mj"]:
            return "bleed_mj is below the energy at rated_mv"
        if self.bare() and not values["bounce_ms"]:
            return "a bare relay bounces; bounce_ms is zero"
        return ""


def load(path, device_id):
    """(profile or None, what is wrong or "")."""
    try:
        with open(path, "rb") as file:
            profile = Profile(profile_record.unseal(file.read()))
    except OSError:
        return None, "no profile is stored"
    except ValueError as error:
        return None, "the stored profile is damaged (%s)" % error
    wrong = profile.fault(device_id)
    return (None if wrong else profile), wrong
