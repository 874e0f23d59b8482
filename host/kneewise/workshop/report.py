"""The report of a proof test: sealed, signed where wanted, stored, and checked again.

A file holds `report`, the SHA-256 of its canonical form (`canonical`) and, where it was signed, an
Ed25519 signature over the same bytes. It is written in one way only, so that any changed byte
is found: in what is sealed by the seal, elsewhere by writing it anew and comparing.
"""

from __future__ import annotations

import hashlib
import json
import os
import tempfile
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

from kneewise.errors import ArchiveError, KneewiseError, TrustError, UsageError
from kneewise.instrument.logbook import EPOCH
from kneewise.instrument.tracer import Tracer
from kneewise.workshop.page import page_of

if TYPE_CHECKING:
    from cryptography.hazmat.primitives.asymmetric.ed25519 import (
        Ed25519PrivateKey,
        Ed25519PublicKey,
    )

SCHEMA = 1
"""Version of the report's content."""
WHAT = "Report of a Kneewise proof test"
SEALED = (
    "SHA-256 over `report` as JSON with sorted keys, no spaces, UTF-8, numbers as Python writes "
    "them"
)
NOTED_BYTES = 16  # of the digest, on the device


def canonical(report: dict[str, Any]) -> bytes:
    """What is sealed and signed. ValueError for numbers that JSON does not have."""
    return json.dumps(
        report, sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False
    ).encode()


def digest_of(report: dict[str, Any]) -> bytes:
    """SHA-256 of the canonical form."""
    return hashlib.sha256(canonical(report)).digest()


@dataclass(frozen=True, slots=True)
class Stored:
    """A report as it was stored."""

    file: Path
    page: Path
    document: dict[str, Any]

    @property
    def digest(self) -> bytes:
        """The seal."""
        return bytes.fromhex(self.document["seal"]["sha256"])


# -- making one -------------------------------------------------------------------------------


def store(content: dict[str, Any], folder: Path, key: Ed25519PrivateKey | None = None) -> Stored:
    """Seal the content of a `ProofTest`, sign it, write it and its page. ArchiveError."""
    report = {"schema": SCHEMA, **content}
    document = _document(report)
    if key is not None:
        own = key.public_key().public_bytes_raw()
        document = _document(report, own, key.sign(canonical(report)))
    digest = digest_of(report)
    begun = report["begun_utc"].replace("-", "").replace(":", "")
    label = "".join(f"-{word}" for word in report["label"].split(", ") if word)
    name = f"{begun}-proof-{report['device_id']}-{digest.hex()[:8]}{label}"
    file, page = folder / f"{name}.json", folder / f"{name}.html"
    try:
        folder.mkdir(parents=True, exist_ok=True)
        _write(file, written(document))
        _write(page, page_of(document).encode())
    except OSError as error:
        raise ArchiveError(
            f"storing the report {file}",
            found=str(error),
            expected="a folder that can be written to",
            next_step="choose another with --store, and test again",
        ) from error
    return Stored(file, page, document)


def _document(
    report: dict[str, Any], public_key: bytes = b"", value: bytes = b""
) -> dict[str, Any]:
    """A report with its seal and its signature, if there is one."""
    signature = {"algorithm": "Ed25519", "public_key": public_key.hex(), "value": value.hex()}
    return {
        "what": WHAT,
        "report": report,
        "seal": {"sha256": digest_of(report).hex(), "of": SEALED},
        "signature": signature if public_key else None,
    }


def written(document: dict[str, Any]) -> bytes:
    """The only way in which a report is written."""
    return (json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False) + "\n").encode()


def _write(path: Path, data: bytes) -> None:
    """Whole or not at all."""
    handle, beside = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}", suffix=".new")
    try:
        with os.fdopen(handle, "wb") as file:
            file.write(data)
            file.flush()
            os.fsync(file.fileno())
        Path(beside).chmod(0o644)
        os.replace(beside, path)
    except BaseException:
        Path(beside).unlink(missing_ok=True)
        raise


def note(tracer: Tracer, stored: Stored) -> bool:
    """Have the tracer keep that it was proven; True where it keeps it over power cycles.

    RefusedError where it is not safe; TrustError where it keeps something else.
    """
    ended = datetime.fromisoformat(stored.document["report"]["ended_utc"])
    day = ended.astimezone(UTC).date()
    digest = stored.digest[:NOTED_BYTES]
    kept = tracer.note_proof((day - EPOCH).days, digest)
    book = tracer.logbook()
    if (book.proven, book.proof_digest) != (day, digest.hex()):
        raise TrustError(
            "noting the proof test on the tracer",
            found=f"{book.proven}, digest {book.proof_digest}",
            expected=f"{day}, digest {digest.hex()}",
            next_step="the report is stored; prove again, and report this",
        )
    return kept


# -- checking one -----------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Checked:
    """A report whose seal holds. `signature` says in words what became of it."""

    report: dict[str, Any]
    sha256: str
    signed_by: str
    """The public key as hex, "" for an unsigned report."""
    signature: str


def check(file: Path, public_key: Ed25519PublicKey | None = None) -> Checked:
    """Seal and signature of a stored report. ArchiveError where it cannot be read, TrustError
    where something does not hold, or where `public_key` is given and has not signed it.
    """
    document = _read(file)
    report, seal = document["report"], document["seal"]["sha256"]
    found = digest_of(report).hex()
    if found != seal:
        raise _broken(file, f"the content's SHA-256 is {found}", f"the seal, {seal}")
    signature = document["signature"]
    signed_by = signature["public_key"] if signature else ""
    half, value = (
        bytes.fromhex(signature[n]) if signature else b"" for n in ("public_key", "value")
    )
    if written(_document(report, half, value)) != file.read_bytes():
        raise _broken(file, "changes outside of what is sealed", "every byte as it was stored")
    if public_key is not None:
        wanted = public_key.public_bytes_raw().hex()
        if signed_by != wanted:
            raise _broken(file, _by(signed_by), f"signed by the key given, {wanted}")
    if not signature:
        return Checked(report, seal, "", "none")
    if not _signing_there():
        return Checked(
            report, seal, signed_by, f"{_by(signed_by)}, not checked: pip install 'kneewise[sign]'"
        )
    _verify(file, report, signature)
    own = "the key given" if public_key is not None else "whose key that is, --public-key tells"
    return Checked(report, seal, signed_by, f"holds, {_by(signed_by)}; {own}")


def _by(public_key: str) -> str:
    return f"signed by key {public_key}" if public_key else "no signature"


def _broken(file: Path, found: str, expected: str) -> TrustError:
    return TrustError(
        f"checking the report {file}",
        found=found,
        expected=expected,
        next_step="do not rely on it: get the report as it was stored, or prove the tracer again",
    )


def _read(file: Path) -> dict[str, Any]:
    try:
        document = json.loads(file.read_text(encoding="utf-8"))
        if document["what"] != WHAT or not isinstance(document["seal"]["sha256"], str):
            raise ValueError("another kind of file")
        schema = document["report"]["schema"]
        canonical(document["report"])
        signature = document["signature"]
        if signature is not None:
            bytes.fromhex(signature["public_key"] + signature["value"])
    except (OSError, ValueError, KeyError, TypeError) as error:
        raise ArchiveError(
            f"reading the report {file}",
            found=f"no report that can be read ({type(error).__name__}: {error})",
            expected="the .json file of a proof test, as it was stored",
            next_step="name that file, or get the report as it was stored",
        ) from error
    if schema != SCHEMA:
        raise ArchiveError(
            f"reading the report {file}",
            found=f"schema {schema}",
            expected=f"schema {SCHEMA}",
            next_step="check it with the version of Kneewise that made it",
        )
    return dict(document)


# -- signatures, where the extra is installed ---------------------------------------------------


def _signing_there() -> bool:
    try:
        import cryptography  # noqa: F401
    except ImportError:
        return False
    return True


def _demand_signing(what: str) -> None:
    if not _signing_there():
        raise KneewiseError(
            what,
            found="no package cryptography",
            expected="the optional part for signatures",
            next_step="pip install 'kneewise[sign]'",
        )


def private_key(file: Path) -> Ed25519PrivateKey:
    """The key of `--sign`, a PEM file without a passphrase. KneewiseError, UsageError."""
    what = f"reading the signing key {file}"
    _demand_signing(what)
    from cryptography.hazmat.primitives.asymmetric.ed25519 import Ed25519PrivateKey
    from cryptography.hazmat.primitives.serialization import load_pem_private_key

    try:
        key = load_pem_private_key(file.read_bytes(), password=None)
    except (OSError, ValueError, TypeError) as error:
        raise _no_key(what, str(error)) from error
    if not isinstance(key, Ed25519PrivateKey):
        raise _no_key(what, type(key).__name__)
    return key


def public_key(file: Path) -> Ed25519PublicKey:
    """The key of `--public-key`, a PEM file. KneewiseError, UsageError."""
    what = f"reading the public key {file}"
    _demand_signing(what)
    from cryptography.hazmat.primitives.asymmetric.ed25519 import Ed25519PublicKey
    from cryptography.hazmat.primitives.serialization import load_pem_public_key

    try:
        key = load_pem_public_key(file.read_bytes())
    except (OSError, ValueError) as error:
        raise _no_key(what, str(error)) from error
    if not isinstance(key, Ed25519PublicKey):
        raise _no_key(what, type(key).__name__)
    return key


def _no_key(what: str, found: str) -> UsageError:
    return UsageError(
        what,
        found=found,
        expected="an Ed25519 key as PEM, without a passphrase",
        next_step="openssl genpkey -algorithm ed25519 -out key.pem makes one, "
        "openssl pkey -in key.pem -pubout -out public.pem its public half",
    )


def _verify(file: Path, report: dict[str, Any], signature: dict[str, str]) -> None:
    from cryptography.exceptions import InvalidSignature
    from cryptography.hazmat.primitives.asymmetric.ed25519 import Ed25519PublicKey

    try:
        key = Ed25519PublicKey.from_public_bytes(bytes.fromhex(signature["public_key"]))
        key.verify(bytes.fromhex(signature["value"]), canonical(report))
    except (InvalidSignature, ValueError) as error:
        raise _broken(
            file,
            f"a signature that is not that of key {signature['public_key']}",
            "a signature over the content by that key",
        ) from error
