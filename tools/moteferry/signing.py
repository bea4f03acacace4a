"""Signing a calibration document: a detached SSH signature beside it, made and checked by `ssh-keygen`.

Owns the call and the checks before and after: a document that no device would read is not signed, and a signature is
put beside it only once it has been found good over the exact bytes. Keys in files, in an agent and on a FIDO token work
alike, since `ssh-keygen` asks for passphrase, PIN or touch itself; nothing of them is seen here.
"""

import re
import subprocess
import tempfile
from dataclasses import dataclass
from pathlib import Path

from motekeep.edges.signers import NAMESPACE, Signers
from motekeep.errors import DocumentError, MotekeepError
from motekeep.measure.document import CalibrationDocument
from motekeep.measure.document_text import LARGEST_BYTES, parse

KEY = re.compile(r"key (SHA256:[A-Za-z0-9+/]{43})")
# A person looks for the token and touches it.
PATIENCE_S = 180.0


class SigningError(MotekeepError):
    """A document cannot be signed, or what came of it is no good signature. Exit code 2."""


@dataclass(frozen=True, slots=True)
class Signed:
    """A document, the signature beside it, and the key by its fingerprint. `signer` is the name that an allowed-signers
    file gives it, None where none was asked."""

    document: CalibrationDocument
    signature: Path
    key: str
    signer: str | None


def signature_path(document: Path) -> Path:
    """`x.toml.sig`."""
    return document.with_name(document.name + ".sig")


def sign(path: Path, key: Path, signers: Signers | None = None) -> Signed:
    """Sign the document at `path` with `key`: a private key, or the public one of a key in the agent.

    An older signature beside it is replaced. With `signers` it is also judged as a device would. Raises SigningError,
    or OfferRefusedError with the device's own words.
    """
    text = path.read_bytes()
    document = _parsed(path, text)
    with tempfile.TemporaryDirectory(prefix="moteferry-") as name:
        copy = Path(name) / "document"
        copy.write_bytes(text)
        _make(copy, key)
        made = signature_path(copy).read_bytes()
    fingerprint = fingerprint_of(text, made)
    signer = None if signers is None else signers.verify(text, made, None).principal
    beside = signature_path(path)
    new = beside.with_name(f".{beside.name}.new")
    new.write_bytes(made)
    new.replace(beside)
    if path.read_bytes() != text:
        raise SigningError(f"signing {path}", "it was changed meanwhile", "sign it again")
    return Signed(document, beside, fingerprint, signer)


def fingerprint_of(text: bytes, signature: bytes) -> str:
    """The key that has signed exactly these bytes for our namespace, whoever's it is. Raises SigningError."""
    with tempfile.NamedTemporaryFile(suffix=".sig") as file:
        file.write(signature)
        file.flush()
        done = _keygen(["-Y", "check-novalidate", "-n", NAMESPACE, "-s", file.name], text)
    found = KEY.search(done.stdout.decode("utf-8", "replace"))
    if done.returncode != 0 or found is None:
        raise SigningError("checking the signature", _last(done.stderr), "sign the document again")
    return found.group(1)


def _parsed(path: Path, text: bytes) -> CalibrationDocument:
    if len(text) > LARGEST_BYTES:
        raise SigningError(f"signing {path}", f"it has {len(text)} bytes", f"{LARGEST_BYTES} are possible")
    try:
        return parse(text)
    except DocumentError as error:
        raise SigningError(
            f"signing {path}", f"no device would read it: {error.path} {error.why}", error.mend
        ) from error


def _make(copy: Path, key: Path) -> None:
    """`ssh-keygen` talks to the person itself: it has our terminal."""
    words = ["ssh-keygen", "-q", "-Y", "sign", "-n", NAMESPACE, "-f", str(key), str(copy)]
    try:
        done = subprocess.run(words, timeout=PATIENCE_S, stdout=subprocess.DEVNULL, check=False)  # noqa: S603 (paths of the caller)
    except FileNotFoundError as error:
        raise SigningError("signing", "there is no ssh-keygen", "install the OpenSSH client") from error
    except subprocess.TimeoutExpired as error:
        raise SigningError("signing", f"nothing in {PATIENCE_S:.0f} s", "unlock the key or touch the token") from error
    if done.returncode != 0 or not signature_path(copy).exists():
        raise SigningError(
            f"signing with {key}", "ssh-keygen made no signature (its words are above)", "name a key that can sign"
        )


def _keygen(words: list[str], text: bytes = b"") -> subprocess.CompletedProcess[bytes]:
    try:
        return subprocess.run(  # noqa: S603 (fixed words and files of ours)
            ["ssh-keygen", *words],  # noqa: S607 (the operator's PATH)
            input=text,
            capture_output=True,
            timeout=PATIENCE_S,
            check=False,
        )
    except FileNotFoundError as error:
        raise SigningError("asking ssh-keygen", "there is none", "install the OpenSSH client") from error


def _last(said: bytes) -> str:
    lines = said.decode("utf-8", "replace").strip().splitlines()
    return lines[-1][:200] if lines else "ssh-keygen says no more"
