"""If these fail, a report that somebody has changed passes as sealed, or a page says another thing
than the test has found.
"""

from __future__ import annotations

import builtins
import json
import re
from datetime import UTC, datetime, timedelta

import pytest
from cryptography.hazmat.primitives.asymmetric.ec import SECP256R1, generate_private_key
from cryptography.hazmat.primitives.asymmetric.ed25519 import Ed25519PrivateKey
from cryptography.hazmat.primitives.serialization import Encoding, NoEncryption, PrivateFormat
from proving import Bench, pem_of

from kneewise.errors import ArchiveError, KneewiseError, TrustError, UsageError
from kneewise.workshop import report
from kneewise.workshop.page import page_of

TODAY = datetime.now(UTC).date()


@pytest.fixture(scope="module")
def content():
    one = Bench()
    try:
        return one.prove().content()
    finally:
        one.close()


@pytest.fixture
def key():
    return Ed25519PrivateKey.generate()


# -- the seal ---------------------------------------------------------------------------------


def test_a_stored_report_checks(content, tmp_path):
    stored = report.store(content, tmp_path / "proofs")
    checked = report.check(stored.file)
    assert checked.sha256 == stored.digest.hex()
    assert checked.report == {"schema": 1, **content}
    assert (checked.signed_by, checked.signature) == ("", "none")
    assert stored.file.name.endswith(f"-{stored.digest.hex()[:8]}-EMULATED.json")
    assert sorted(path.suffix for path in (tmp_path / "proofs").iterdir()) == [".html", ".json"]


def test_a_report_says_who_what_when_and_which(content):
    for name in ("device_id", "firmware", "protocol", "who", "verdict", "label", "rung"):
        assert content[name]
    assert content["profile"]["name"] == "reference, class A"
    assert re.fullmatch("[0-9a-f]{8}", content["profile"]["crc"])
    for name in ("begun_utc", "ended_utc"):
        assert content[name].endswith("Z")
        assert datetime.fromisoformat(content[name]).date() - TODAY < timedelta(days=2)
    assert [row["hazard"] for row in content["guards"]] == list(range(1, 22))
    assert content["logbook"]["hot_openings"] == 1
    for step in content["steps"]:
        assert step["does"]
        assert step["values"]


def test_any_changed_byte_is_found(content, tmp_path, key):
    stored = report.store(content, tmp_path, key)
    data = bytearray(stored.file.read_bytes())
    file = tmp_path / "changed.json"
    # All of what surrounds the content, and of the content every 41st byte.
    begin, end = data.find(b'"report"'), data.find(b'"seal"')
    for place in (*range(begin), *range(begin, end, 41), *range(end, len(data))):
        kept = data[place]
        data[place] ^= (1, 0x20, 0x80)[place % 3]
        file.write_bytes(data)
        data[place] = kept
        with pytest.raises((TrustError, ArchiveError)):
            report.check(file)
    file.write_bytes(data)
    report.check(file)


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ('"verdict": "passed"', '"verdict": "failed"', "SHA-256"),
        ('  "what"', ' "what"', "outside of what is sealed"),
        ("\n}", "\n}\n", "outside of what is sealed"),
        ('"what"', '"what": "", "what"', "outside of what is sealed"),
    ],
)
def test_what_was_changed_is_told(old, new, said, content, tmp_path):
    file = report.store(content, tmp_path).file
    file.write_text(file.read_text(encoding="utf-8").replace(old, new, 1), encoding="utf-8")
    with pytest.raises(TrustError, match=re.escape(said)) as caught:
        report.check(file)
    assert "do not rely on it" in caught.value.next_step
    assert caught.value.exit_code == 5


@pytest.mark.parametrize("text", ["", "[]", '{"what": "another"}', "{}", None])
def test_what_is_no_report_is_told(text, tmp_path):
    file = tmp_path / "some.json"
    if text is not None:
        file.write_text(text, encoding="utf-8")
    with pytest.raises(ArchiveError, match="no report that can be read"):
        report.check(file)


def test_a_report_of_another_schema_is_told(content, tmp_path):
    document = dict(report.store(content, tmp_path).document)
    document["report"] = {**document["report"], "schema": 2}
    file = tmp_path / "later.json"
    file.write_bytes(report.written(document))
    with pytest.raises(ArchiveError, match="found schema 2"):
        report.check(file)


# -- the signature ----------------------------------------------------------------------------


def test_a_signature_tells_who(content, tmp_path, key):
    stored = report.store(content, tmp_path, key)
    own, public = pem_of(key, tmp_path)
    mine = key.public_key().public_bytes_raw().hex()
    assert report.check(stored.file).signed_by == mine
    checked = report.check(stored.file, report.public_key(public))
    assert checked.signature == f"holds, signed by key {mine}; the key given"
    assert report.private_key(own).public_key() == key.public_key()


def test_a_signature_of_somebody_else_is_told(content, tmp_path, key):
    other = Ed25519PrivateKey.generate().public_key()
    unsigned = report.store(content, tmp_path / "a")
    signed = report.store(content, tmp_path / "b", key)
    with pytest.raises(TrustError, match="no signature"):
        report.check(unsigned.file, other)
    with pytest.raises(TrustError, match="signed by the key given"):
        report.check(signed.file, other)
    # A seal made anew over changed content does not carry the signature along.
    document = json.loads(signed.file.read_text(encoding="utf-8"))
    document["report"]["who"] = "somebody else"
    document["seal"]["sha256"] = report.digest_of(document["report"]).hex()
    signed.file.write_bytes(report.written(document))
    with pytest.raises(TrustError, match="a signature that is not that of key"):
        report.check(signed.file)


def test_other_keys_are_told(tmp_path):
    own = tmp_path / "key.pem"
    curve = generate_private_key(SECP256R1())
    own.write_bytes(curve.private_bytes(Encoding.PEM, PrivateFormat.PKCS8, NoEncryption()))
    for read in (report.private_key, report.public_key):
        with pytest.raises(UsageError, match="openssl genpkey -algorithm ed25519"):
            read(own)
        with pytest.raises(UsageError, match="an Ed25519 key"):
            read(tmp_path / "none.pem")


def test_without_the_extra_it_says_what_to_install(content, tmp_path, key, monkeypatch):
    stored = report.store(content, tmp_path, key)
    original = builtins.__import__

    def lacking(name, *given, **more):
        if name.startswith("cryptography"):
            raise ImportError(name)
        return original(name, *given, **more)

    monkeypatch.setattr(builtins, "__import__", lacking)
    assert "not checked: pip install 'kneewise[sign]'" in report.check(stored.file).signature
    for read in (report.private_key, report.public_key):
        with pytest.raises(KneewiseError, match=re.escape("pip install 'kneewise[sign]'")):
            read(tmp_path / "key.pem")


# -- the page ---------------------------------------------------------------------------------


def test_the_page_holds_it_all_and_needs_nothing_else(content, tmp_path, key):
    stored = report.store(content, tmp_path, key)
    page = stored.page.read_text(encoding="utf-8")
    assert "EMULATED: no real tracer was proven" in page
    assert "<title>EMULATED: Proof test of tracer 4b4e454557495345</title>" in page
    assert stored.digest.hex() in page
    assert key.public_key().public_bytes_raw().hex() in page
    for step in content["steps"]:
        for value in step["values"]:
            assert value["name"].replace("'", "&#x27;") in page
    for hazard in range(1, 22):
        assert f"<td>H{hazard}</td>" in page
    assert "not exercised here" in page
    assert not re.search(r"(src|href)=|url\(|@import|<script", page)


def test_a_page_of_a_real_tracer_has_no_label_and_escapes_what_it_is_given(content, tmp_path):
    real = {**content, "label": "", "who": "<b>&"}
    page = page_of(report.store(real, tmp_path).document)
    assert "EMULATED" not in page
    assert "&lt;b&gt;&amp;" in page
    assert "<b>" not in page


def test_a_failed_test_says_so_in_words_on_its_page(tmp_path):
    one = Bench({"board": {"current_stuck_code": 40}})
    try:
        stored = report.store(one.prove().content(), tmp_path)
    finally:
        one.close()
    page = stored.page.read_text(encoding="utf-8")
    assert "FAILED<small>Stopped after A2, zeros and noise, which failed.</small>" in page
    assert '<strong class="failed">NO</strong>' in page
    assert "not done" in page
