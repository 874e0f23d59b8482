"""If these fail, a tracer runs with limits that are not the ones it was built for."""

from __future__ import annotations

import pytest
from charging import FINE
from fake_board import DEVICE_ID, REFERENCE, profile, record
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from kneewire.guards import BOUNDS
from kneewire.profile_record import seal
from kneewire.seam import crc32
from kneewise.emulator.firmware import firmware_module

module = firmware_module("tracer.profile")


def test_the_reference_profile_is_accepted(reference):
    assert reference.fault(DEVICE_ID) == ""
    assert reference.crc == crc32(record())


@settings(max_examples=200)
@given(st.integers(0, 64 * 4095), st.integers(0, 65535), st.integers(1, 2 * 10**7))
def test_codes_become_millivolts(code_sum, zero_x16, nano):
    made = profile(
        voltage_nv_per_code=nano,
        voltage_zero_x16=zero_x16,
        capacitor_nv_per_code=nano,
        capacitor_zero_x16=zero_x16,
    )
    true = (code_sum / 64 - zero_x16 / 16) * nano / 1e6
    for found in (
        made.millivolts("voltage", code_sum, 64),
        made.millivolts("capacitor", code_sum, 64),
    ):
        assert true - 1.01 <= found <= true + 0.01


@pytest.mark.parametrize("channel", ["voltage", "current"])
@settings(max_examples=200)
@given(st.integers(0, 10**6), st.integers(10**5, 10**8), st.integers(0, 4095 * 16))
def test_a_trip_code_is_never_above_the_rating_and_never_beyond_the_rail(
    channel, milli, nano, zero_x16
):
    scale = "voltage_nv_per_code" if channel == "voltage" else "current_na_per_code"
    made = profile(**{scale: nano, channel + "_zero_x16": zero_x16})
    code = made.trip_code(channel, milli)
    assert code <= 4095
    exact = milli * 1e6 / nano + zero_x16 / 16
    assert code <= exact + 1e-6
    assert code >= min(exact - 2, 4095)


def test_trip_codes_of_the_reference_are_those_of_its_ratings(reference):
    assert reference.trip_code("voltage", 60000) == 24 + 3636
    assert reference.trip_code("current", 20000) == 40 + 3846
    assert reference.trip_code("voltage", 67000) == 24 + 4060
    assert reference.trip_code("voltage", 70000) == 4095


def test_trip_codes_of_sixteen_bits_are_as_fine_as_their_converters():
    made = profile(**FINE)
    assert made.finer == 16
    assert made.trip_code("voltage", 60000) == 24 * 16 + 60000 * 10**6 // (16500000 // 16)
    assert made.trip_code("current", 20000) == 40 * 16 + 20000 * 10**6 // (5200000 // 16)
    assert made.trip_code("voltage", 70000) == 65535


BOUND = "the bound of its class"
B = {
    "hazard_class": 2,
    "declared": 15,
    "reviewer": "T. Ovrel",
    "reviewed_day": 20_515,
    "bleed_mj": 500_000,
}


# -- what speaks against a profile -------------------------------------------------------------


def test_a_profile_of_another_board_is_refused(reference):
    assert reference.fault(b"\x01" * 8) == "made for another board"


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ({"rated_mv": 60001}, "rated_mv is above 60000, " + BOUND),
        ({"rated_ma": 20001}, "rated_ma is above 20000, " + BOUND),
        (
            {"capacitance_nf": 14_000_000},
            "energy at rated_mv is above 25000, " + BOUND,
        ),
        ({"hazard_class": 0}, "class or contact is none that this firmware knows"),
        ({"contact": 3}, "class or contact is none that this firmware knows"),
        (B | {"declared": 7}, "class B without all its declarations"),
        (B | {"reviewer": ""}, "class B without a reviewer and a date"),
        (B | {"reviewed_day": 0}, "class B without a reviewer and a date"),
        (B | {"rated_mv": 1_000_001}, "rated_mv is above 1000000, " + BOUND),
        (
            {"bleed_cutoff": 0, "bleed_mw": 35_999},
            "bleed_mw is below what a welded contact would bring, without a cut-off",
        ),
        ({"bleed_mj": 395}, "bleed_mj is below the energy at rated_mv"),
        ({"contact": 2}, "a bare relay bounces; bounce_ms is zero"),
    ],
)
def test_a_build_beyond_its_class_is_refused(change, said):
    assert profile(**change).fault(DEVICE_ID) == said


@pytest.mark.parametrize(
    "change",
    [
        {"rated_mv": 60000},
        B,
        B | {"rated_mv": 1_000_000},
        {"bleed_cutoff": 0, "bleed_mw": 36_000},
        {"bleed_mj": 396},
        {"contact": 2, "bounce_ms": 1},
    ],
)
def test_a_build_within_its_class_is_accepted(change):
    assert profile(**change).fault(DEVICE_ID) == ""


@pytest.mark.parametrize(("name", "least", "greatest"), BOUNDS)
def test_no_profile_can_ask_for_more_than_the_firmware_allows(name, least, greatest):
    roomy = {"bleed_mj": 10**7, "bleed_mw": 10**6} | {name: greatest}
    assert profile(**roomy).fault(DEVICE_ID) == ""
    said = f"{name} is outside {least} to {greatest}"
    assert profile(**{name: least - 1}).fault(DEVICE_ID) == said
    if name not in ("capacitance_high_percent",):
        assert profile(**{name: greatest + 1}).fault(DEVICE_ID) == said


def test_a_bare_relay_is_closed_for_as_long_as_its_pulse_can_last_and_no_longer():
    assert profile(contact=2, bounce_ms=1).closed_limit_ms() == 5000
    assert profile().closed_limit_ms() == 120_000


@pytest.mark.parametrize(
    "name",
    [
        "voltage_nv_per_code",
        "current_na_per_code",
        "capacitor_nv_per_code",
        "rated_ma",
        "capacitance_nf",
        "bleed_mohm",
        "permanent_bleeder_ohm",
        "rated_mv",
        "pair_us",
    ],
)
def test_a_zero_that_would_make_nonsense_is_refused(name):
    assert profile(**{name: 0}).fault(DEVICE_ID) == name + " is zero"


NUMBERS = [name for name, value in REFERENCE.items() if isinstance(value, int) and name != "format"]


@settings(max_examples=300)
@given(st.dictionaries(st.sampled_from(NUMBERS), st.integers(0, 2**32 - 1), max_size=6))
def test_whatever_a_profile_says_an_accepted_one_stays_within_the_bounds(changes):
    try:
        made = profile(**changes)
    except ValueError:
        assume(False)
    if made.fault(DEVICE_ID) == "":
        assert all(least <= made[name] <= most for name, least, most in BOUNDS)
        assert made["rated_mv"] <= (60000 if made["hazard_class"] == 1 else 1_000_000)


# -- from the file -----------------------------------------------------------------------------


def test_a_stored_profile_is_read_back(tmp_path):
    path = tmp_path / "profile.bin"
    path.write_bytes(seal(record()))
    found, wrong = module.load(str(path), DEVICE_ID)
    assert wrong == ""
    assert found.values == REFERENCE


def test_without_a_file_there_is_no_profile(tmp_path):
    assert module.load(str(tmp_path / "none"), DEVICE_ID) == (None, "no profile is stored")


@pytest.mark.parametrize("damage", [b"", b"abc", seal(record())[:-1], record()])
def test_a_damaged_file_is_told_as_one(tmp_path, damage):
    path = tmp_path / "profile.bin"
    path.write_bytes(damage)
    found, wrong = module.load(str(path), DEVICE_ID)
    assert found is None
    assert wrong.startswith("the stored profile is damaged (")


@given(st.data())
@settings(max_examples=200)
def test_one_flipped_bit_anywhere_is_noticed(tmp_path_factory, data):
    whole = bytearray(seal(record()))
    bit = data.draw(st.integers(0, 8 * len(whole) - 1))
    whole[bit // 8] ^= 1 << bit % 8
    path = tmp_path_factory.mktemp("profile") / "profile.bin"
    path.write_bytes(whole)
    assert module.load(str(path), DEVICE_ID)[0] is None


def test_a_record_of_another_format_is_damaged(tmp_path):
    path = tmp_path / "profile.bin"
    path.write_bytes(seal(record(format=1)))
    wrong = module.load(str(path), DEVICE_ID)[1]
    assert wrong == "the stored profile is damaged (format 1)"


def test_a_refused_profile_is_no_profile(tmp_path):
    path = tmp_path / "profile.bin"
    path.write_bytes(seal(record(contact=3)))
    found, wrong = module.load(str(path), DEVICE_ID)
    assert found is None
    assert wrong == "class or contact is none that this firmware knows"
