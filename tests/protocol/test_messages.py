"""Messages: what one side packs the other reads, over the whole range of every field.

A value that wraps or a field read at the wrong place would become a wrong figure, or an order
that nobody gave.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from wire_checks import refused_as

from kneewire import catalogue, fields, hazards, messages, profile_record
from kneewire.catalogue import MESSAGES
from kneewire.meanings import MEANINGS
from kneewire.messages import KNOT_BYTES, Message, Refused, fingerprint, pack, unpack

NAMES = sorted(catalogue.KINDS)
at_length = settings(max_examples=25, deadline=None)
u32 = st.integers(0, 0xFFFFFFFF)

VALUES: dict[str, st.SearchStrategy[Any]] = {
    **{
        kind: st.binary(min_size=size, max_size=size)
        if signed is None
        else st.integers(*fields.bounds(kind))
        for kind, (size, signed) in fields.FIXED.items()
    },
    "text": st.text(max_size=255).filter(lambda text: len(text.encode()) <= 255),
    "bytes": st.binary(max_size=236),
    "knots": st.integers(0, 6).flatmap(
        lambda count: st.binary(min_size=count * KNOT_BYTES, max_size=count * KNOT_BYTES)
    ),
}


def rows_of(name: str) -> tuple[tuple[str, str], ...]:
    return MESSAGES[catalogue.KINDS[name]][4]


def values_of(rows: Any) -> st.SearchStrategy[dict[str, Any]]:
    return st.fixed_dictionaries({field: VALUES[kind] for field, kind in rows})


def least(rows: Any) -> dict[str, Any]:
    """Values that every field takes."""
    return {
        field: {"text": "", "bytes": b"", "knots": b""}.get(kind, 0) for field, kind in rows
    } | {field: bytes(fields.FIXED[kind][0]) for field, kind in rows if kind in {"b8", "b16"}}


def refusal(body: bytes) -> Refused:
    with pytest.raises(Refused) as caught:
        unpack(body)
    return caught.value


# -- there and back ----------------------------------------------------------------------


@pytest.mark.parametrize("name", NAMES)
@pytest.mark.clause("B1")
def test_message_comes_back_whole(name: str) -> None:
    @at_length
    @given(values=values_of(rows_of(name)), session=u32, sequence=u32, tail=st.binary(max_size=9))
    def check(values: dict[str, Any], session: int, sequence: int, tail: bytes) -> None:
        body = pack(name, session, sequence, values)
        # A later version may add fields at the end; an older reader passes over them.
        for received in (body, body + tail):
            message = unpack(received)
            assert (message.name, message.session, message.sequence) == (name, session, sequence)
            assert message.values == values
            assert all(message[field] == values[field] for field in values)

    check()


@pytest.mark.parametrize("name", NAMES)
@pytest.mark.clause("B1")
def test_message_holds_the_ends_of_every_range(name: str) -> None:
    rows = rows_of(name)
    for end in (0, 1):
        values = least(rows) | {
            field: fields.bounds(kind)[end]
            for field, kind in rows
            if kind in fields.FIXED and fields.FIXED[kind][1] is not None
        }
        assert unpack(pack(name, 0xFFFFFFFF * end, 0xFFFFFFFF * end, values)).values == values


@pytest.mark.parametrize("name", NAMES)
def test_cut_message_is_called_malformed(name: str) -> None:
    values = least(rows_of(name)) | {"record": b"\x01\x02", "data": bytes(KNOT_BYTES)}
    body = pack(name, 77, 88, values)
    kind = catalogue.KINDS[name]
    for length in range(len(body)):
        refused = refusal(body[:length])
        assert catalogue.REFUSALS[refused.code] == "malformed"
        assert refused.kind == (kind if length else 0)
        assert (refused.session, refused.sequence) == ((77, 88) if length >= 9 else (0, 0))


@settings(max_examples=300, deadline=None)
@given(st.binary(max_size=80), st.sampled_from(sorted(MESSAGES)))
def test_any_body_is_a_message_or_refused(body: bytes, kind: int) -> None:
    for received in (body, bytes([kind]) + body):
        refused = refused_as(received)
        if refused is not None:
            assert refused[0] in {1, 2}
            continue
        message = unpack(received)
        # What was read is what was sent, up to bytes that nobody knows of.
        again = pack(message.name, message.session, message.sequence, message.values)
        assert received.startswith(again)


def test_unknown_kind_is_named_so_that_the_link_lives_on() -> None:
    for kind in set(range(256)) - set(MESSAGES):
        refused = refusal(bytes([kind]) + (513).to_bytes(4, "little") + (770).to_bytes(4, "little"))
        assert catalogue.REFUSALS[refused.code] == "unknown kind"
        assert (refused.kind, refused.session, refused.sequence) == (kind, 513, 770)


# -- what does not fit -------------------------------------------------------------------


@pytest.mark.parametrize("name", NAMES)
def test_value_out_of_range_never_reaches_the_wire(name: str) -> None:
    rows = rows_of(name)
    for field, kind in rows:
        for value in outside(kind):
            with pytest.raises(ValueError, match=rf"^{name}\.{field}: (range|length)$"):
                pack(name, 1, 1, least(rows) | {field: value})
        with pytest.raises(KeyError, match=field):
            pack(name, 1, 1, {key: value for key, value in least(rows).items() if key != field})


def outside(kind: str) -> list[Any]:
    if kind == "text":
        return ["x" * 256, "ü" * 128]
    if kind == "bytes":
        return [bytes(65536)]
    if kind == "knots":
        return [bytes(KNOT_BYTES - 1), bytes(KNOT_BYTES + 1), bytes(256 * KNOT_BYTES)]
    size, signed = fields.FIXED[kind]
    if signed is None:
        return [bytes(size - 1), bytes(size + 1), b""]
    low, high = fields.bounds(kind)
    return [low - 1, high + 1, 1 << 80, -(1 << 80)]


@pytest.mark.parametrize("number", [-1, 1 << 32])
def test_session_and_sequence_out_of_range_are_refused(number: int) -> None:
    for header in ((number, 1), (1, number)):
        with pytest.raises(ValueError, match="range"):
            pack("abort", *header)


def test_field_of_no_type_is_an_error_and_not_a_guess() -> None:
    with pytest.raises(ValueError, match="type"):
        fields.write(bytearray(), "u24", 1, 1)
    with pytest.raises(ValueError, match="type"):
        fields.read(bytes(9), 0, "u24", 1)


# -- knots and profile -------------------------------------------------------------------


@at_length
@given(st.lists(values_of(catalogue.KNOT), max_size=messages.KNOTS_A_BLOCK))
def test_knots_come_back_whole(knots: list[dict[str, int]]) -> None:
    data = b"".join(messages.pack_knot(knot) for knot in knots)
    assert len(data) == len(knots) * KNOT_BYTES
    assert messages.unpack_knots(data) == knots
    body = pack("block", 1, 2, {"first": 0, "data": data})
    assert unpack(body)["data"] == data
    assert len(body) + 4 <= catalogue.MAX_FRAME


def test_one_knot_more_would_not_fit_a_frame() -> None:
    data = bytes((messages.KNOTS_A_BLOCK + 1) * KNOT_BYTES)
    assert len(pack("block", 1, 2, {"first": 0, "data": data})) + 4 > catalogue.MAX_FRAME


def test_as_many_raw_pairs_as_there_may_be_in_a_block_fit_a_frame_and_one_more_does_not() -> None:
    for many, fits in ((messages.RAW_A_BLOCK, True), (messages.RAW_A_BLOCK + 1, False)):
        body = pack("raw_block", 1, 2, {"first": 0, "data": bytes(many * messages.RAW_BYTES)})
        assert (len(body) + 4 <= catalogue.MAX_FRAME) == fits


def test_half_a_knot_is_an_error() -> None:
    with pytest.raises(ValueError, match="short"):
        messages.unpack_knots(bytes(KNOT_BYTES + 1))


def test_every_message_fits_a_frame_and_that_of_a_profile_with_a_long_name_too() -> None:
    values = least(profile_record.PROFILE) | {"name": "x" * 40, "reviewer": "x" * 30}
    record = profile_record.pack_profile(values)
    for name in NAMES:
        if name != "block":
            body = pack(name, 0, 0, least(rows_of(name)) | {"record": record})
            assert len(body) + 4 <= catalogue.MAX_FRAME, name


@settings(max_examples=50, deadline=None)
@given(values_of(profile_record.PROFILE), st.binary(max_size=5))
def test_profile_comes_back_whole(values: dict[str, Any], tail: bytes) -> None:
    values["format"] = profile_record.FORMAT
    record = profile_record.pack_profile(values)
    assert profile_record.unpack_profile(record) == values
    assert profile_record.unpack_profile(record + tail) == values
    assert profile_record.unseal(profile_record.seal(record)) == record


def test_cut_profile_is_an_error() -> None:
    values = least(profile_record.PROFILE) | {"format": profile_record.FORMAT, "name": "Südhang"}
    record = profile_record.pack_profile(values)
    for length in range(len(record)):
        with pytest.raises(ValueError, match=r"short|utf-8"):
            profile_record.unpack_profile(record[:length])


@pytest.mark.parametrize(("field", "kind"), profile_record.PROFILE)
def test_profile_value_out_of_range_never_reaches_the_record(field: str, kind: str) -> None:
    for value in outside(kind):
        with pytest.raises(ValueError, match=rf"^{field}: (range|length)$"):
            profile_record.pack_profile(least(profile_record.PROFILE) | {field: value})


def test_every_bit_of_a_stored_profile_is_guarded() -> None:
    values = least(profile_record.PROFILE) | {"format": profile_record.FORMAT, "name": "A"}
    sealed = profile_record.seal(profile_record.pack_profile(values))
    for bit in range(8 * len(sealed)):
        damaged = bytearray(sealed)
        damaged[bit // 8] ^= 1 << bit % 8
        with pytest.raises(ValueError, match="crc"):
            profile_record.unseal(bytes(damaged))


# -- the catalogue -----------------------------------------------------------------------


def test_every_request_has_its_reply_and_nothing_else_looks_like_one() -> None:
    for kind, (name, direction, frozen, changes, _) in MESSAGES.items():
        assert direction == (catalogue.TO_HOST if kind & catalogue.REPLY else catalogue.TO_DEVICE)
        if direction == catalogue.TO_DEVICE:
            reply = MESSAGES[kind | catalogue.REPLY]
            assert reply[1] == catalogue.TO_HOST
            assert reply[2] == frozen, name
        else:
            assert not changes, name


def test_names_are_told_apart() -> None:
    names = [name for name, *_ in MESSAGES.values()]
    assert len(set(names)) == len(names)
    for *_, rows in MESSAGES.values():
        fields_named = [field for field, _ in rows]
        assert len(set(fields_named)) == len(fields_named)
        assert {kind for _, kind in rows} <= set(VALUES)


def test_state_changing_requests_are_those_that_change_the_device() -> None:
    changing = {name for name, _, _, changes, _ in MESSAGES.values() if changes}
    assert changing == {"abort", "arm", "fire", "clear_fault", "acknowledge", "note_proof"}


def test_a_message_shows_itself_readably() -> None:
    message = Message("fetch_reply", 7, 9, {"first": 6, "count": 90})
    assert repr(message) == "fetch_reply(first=6, count=90) session 7 sequence 9"


def changed_catalogues() -> list[tuple[str, Callable[[pytest.MonkeyPatch], None]]]:
    """Every catalogue that differs from ours in one place, by what was changed."""
    out: list[tuple[str, Callable[[pytest.MonkeyPatch], None]]] = []

    def add(what: str, attribute: str, value: Any) -> None:
        out.append((what, lambda patch: patch.setattr(catalogue, attribute, value)))

    for attribute in ("HEADER", "KNOT"):
        for what, rows in changed_rows(getattr(catalogue, attribute)):
            add(f"{attribute}: {what}", attribute, rows)
    for attribute in ("STATES", "RESET_CAUSES", "END_REASONS", "REFUSALS", "UNITS", "EXERCISES"):
        codes = getattr(catalogue, attribute)
        for code, words in codes.items():
            others = {other: codes[other] for other in codes if other != code}
            add(f"{attribute}: {code} away", attribute, others)
            add(f"{attribute}: {code} renamed", attribute, others | {code: words + "!"})
            add(f"{attribute}: {code} renumbered", attribute, others | {99: words})
    for kind, (name, direction, frozen, changes, rows) in MESSAGES.items():
        others = {other: MESSAGES[other] for other in MESSAGES if other != kind}
        variants = [
            (what, (name, direction, frozen, changes, new)) for what, new in changed_rows(rows)
        ]
        variants += [
            ("renamed", (name + "_", direction, frozen, changes, rows)),
            ("turned round", (name, 1 - direction, frozen, changes, rows)),
            ("changing or not", (name, direction, frozen, not changes, rows)),
        ]
        for what, message in variants:
            add(f"{name}: {what}", "MESSAGES", {**others, kind: message})
        add(f"{name}: renumbered", "MESSAGES", {**others, 0x7D: MESSAGES[kind]})
        add(f"{name}: away", "MESSAGES", others)
    return out


def changed_rows(
    rows: tuple[tuple[str, str], ...],
) -> list[tuple[str, tuple[tuple[str, str], ...]]]:
    out = [("one more", (*rows, ("extra", "u8")))]
    for place, (field, kind) in enumerate(rows):
        before, after = rows[:place], rows[place + 1 :]
        out.append((f"{field} away", before + after))
        out.append((f"{field} renamed", (*before, (field + "_", kind), *after)))
        other = "u16" if kind == "u8" else "u8"
        out.append((f"{field} of another type", (*before, (field, other), *after)))
        if after:
            out.append(
                (f"{field} after {after[0][0]}", (*before, after[0], rows[place], *after[1:]))
            )
    return out


def test_fingerprint_changes_with_anything_that_changes_the_messages() -> None:
    seen = {fingerprint(): "the catalogue itself"}
    for what, change in changed_catalogues():
        with pytest.MonkeyPatch.context() as patch:
            change(patch)
            number = fingerprint()
        assert number not in seen, f"{what} and {seen.get(number)} have one fingerprint"
        seen[number] = what
    assert len(seen) > 400
    # No byte of it is one that a prompt acts on: see test_hello.py.
    assert all(number & 0x80808080 == 0x80808080 and number < 1 << 32 for number in seen)


# -- words for people --------------------------------------------------------------------

# Names that say it all: the unit stands in the name, or the word has one meaning on the wire.
PLAIN = {
    "minor",
    "firmware_major",
    "firmware_minor",
    "firmware_patch",
    "device_id",
    "max_knots",
    "sweep_id",
    "knots",
    "profile_crc",
    "ring_overruns",
    "stop_loop_closed",
    "leads_reversed",
    "name",
    "capacitance_nf",
    "bleed_mohm",
    "permanent_bleeder_ohm",
    "relay_operate_ms",
    "relay_release_ms",
    "closed_limit_ms",
    "token_life_ms",
    "heartbeat_lost_ms",
}
FINDING = {"guard", "measured", "limit", "unit"}


def named_fields() -> set[str]:
    out = {f"knot.{field}" for field, _ in catalogue.KNOT}
    out |= {f"profile.{field}" for field, _ in profile_record.PROFILE}
    for name, _, _, _, rows in MESSAGES.values():
        out |= {f"{'finding' if field in FINDING else name}.{field}" for field, _ in rows}
    return out


def test_every_field_has_a_meaning_or_a_name_that_needs_none() -> None:
    without = {key for key in named_fields() - set(MEANINGS) if key.split(".")[1] not in PLAIN}
    assert without == set()


def test_no_meaning_is_left_of_a_field_that_went() -> None:
    assert set(MEANINGS) - named_fields() == set()
    assert {key.split(".")[1] for key in named_fields() - set(MEANINGS)} == PLAIN
    assert all(text == text.strip() != "" for text in MEANINGS.values())


def test_every_hazard_says_what_was_wrong_and_what_to_do() -> None:
    for number, texts in hazards.HAZARDS.items():
        assert 1 <= number <= 21  # the hazards of the device's table
        assert len(texts) == 3
        assert all(text == text.strip() != "" for text in texts)


def test_the_short_way_of_a_block_is_that_of_the_catalogue() -> None:
    """Its form is written out by hand, so a change of the table must not leave it behind."""
    rows = catalogue.MESSAGES[catalogue.KINDS["block"]][4]
    assert rows == (("first", "u16"), ("data", "knots"))
    assert [kind for _, kind in catalogue.HEADER] == ["u8", "u32", "u32"]
    data = bytes(range(240))
    body = pack("block", 7, 9, {"first": 300, "data": data})
    for end in range(len(body) + 2):
        cut = (body + b"x")[:end]
        if end < len(body):
            with pytest.raises(Refused) as refused:
                unpack(cut)
            assert refused.value.code == 2
        else:
            assert unpack(cut).values == {"first": 300, "data": data}
