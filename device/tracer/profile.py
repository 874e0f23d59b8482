"""The board profile on the device: read, checked, its limits turned into ADC codes."""

from kneewire import profile_record
from kneewire.seam import crc32

# Hard upper bounds: no profile can ask for more than these.
MAX_RATED_MV = 60000  # class A
MAX_RATED_MA = 20000
MAX_CLOSED_LIMIT_MS = 120000
MAX_PULSE_US = 20000
MAX_TOKEN_LIFE_MS = 10000
MAX_SAFE_MV = 60000
MAX_START_PERMYRIAD = 500
MAX_NEAR_ZERO_PERMYRIAD = 500
MAX_BLEED_TIME_PERCENT = 400
MAX_HEARTBEAT_LOST_MS = 10000
MIN_DEAD_TIME_MS = 20  # a lower one: less time between contact and bleed is less safe


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

    def predicted_bleed_ms(self, from_mv, to_mv):
        """Time for the bleed to bring the capacitor from one voltage to the other."""
        values = self.values
        # t = R C ln(V0 / V); ln by halvings: ln 2 = 0.6931, the rest by its chord.
        halvings_x1000 = 0
        while from_mv >= 2 * to_mv:
            from_mv //= 2
            halvings_x1000 += 1000
        if from_mv > to_mv:
            halvings_x1000 += 1000 * (from_mv - to_mv) // to_mv
        tau_us = values["bleed_mohm"] * values["capacitance_nf"] // 1000000
        return tau_us * halvings_x1000 // 1000 * 693 // 1000000

    def trip_code(self, channel, milli):
        """ADC code of a voltage in mV or a current in mA, at most the converter's rail."""
        scale = self.values[channel + ("_na_per_code" if channel == "current" else "_nv_per_code")]
        code = milli * 1000000 // scale + self.values[channel + "_zero_x16"] // 16
        return min(code, 4096 * self.finer - 1)

    def fault(self, device_id):
        """ "" where this profile may be used on that board, else what speaks against it."""
        values = self.values
        if values["device_id"] != device_id:
            return "made for another board"
        if values["hazard_class"] != 1 or values["rated_mv"] > MAX_RATED_MV:
            return "class B is not supported by this firmware"
        if values["contact"] != 1:
            return "contact kind is not supported by this firmware"
        for name, bound in (
            ("rated_ma", MAX_RATED_MA),
            ("closed_limit_ms", MAX_CLOSED_LIMIT_MS),
            ("pulse_us", MAX_PULSE_US),
            ("token_life_ms", MAX_TOKEN_LIFE_MS),
            ("safe_mv", MAX_SAFE_MV),
            ("start_permyriad", MAX_START_PERMYRIAD),
            ("near_zero_permyriad", MAX_NEAR_ZERO_PERMYRIAD),
            ("bleed_time_percent", MAX_BLEED_TIME_PERCENT),
            ("heartbeat_lost_ms", MAX_HEARTBEAT_LOST_MS),
        ):
            if values[name] > bound:
                return name + " is above the bound in the firmware"
        if values["dead_time_ms"] < MIN_DEAD_TIME_MS:
            return "dead_time_ms is below the bound in the firmware"
        for name in (
            "voltage_nv_per_code",
            "current_na_per_code",
            "capacitor_nv_per_code",
            "rated_ma",
            "capacitance_nf",
            "bleed_mohm",
            "pulse_us",
            "safe_mv",
            "pair_us",
        ):
            if values[name] == 0:
                return name + " is zero"
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
