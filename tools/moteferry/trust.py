"""Who a fleet trusts: the allowed-signers file and the revocation list that devices read, written without a slip.

Owns the form of a line and the care of writing: each file is written beside its place and renamed. `ssh-keygen` reads
the keys and makes the list. Getting the files onto the devices is whoever's who may write there, which must not be a
broker: signatures are only as good as this file.
"""

import re
import subprocess
import tempfile
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date
from pathlib import Path

from moteferry.signing import SigningError
from motekeep.edges.signers import NAMESPACE

# A name goes into one field of a line and onto a topic; patterns of ssh (`*`, `?`, `!`, `,`) have no place in it.
PRINCIPAL = re.compile(r"[A-Za-z0-9][A-Za-z0-9_.+@-]{0,99}")
PATIENCE_S = 30.0


@dataclass(frozen=True, slots=True)
class Line:
    """One key of an allowed-signers file. `options` as they stand there; `revoked` by the list that was asked."""

    principal: str
    options: str
    key: str
    fingerprint: str
    revoked: bool


def add(allowed: Path, public: Path, principal: str, until: date | None = None) -> Line:
    """Trust a public key for calibration, and nothing else, until the end of the day before `until` (UTC)."""
    if not PRINCIPAL.fullmatch(principal):
        raise SigningError(f"adding {principal!r}", "is no name for a signer", "use one like anna@example")
    key, fingerprint = _public(public)
    if any(line.key == key for line in lines(allowed)):
        raise SigningError(f"adding {public}", f"its key stands in {allowed} already", "change that line by hand")
    options = f'namespaces="{NAMESPACE}"'
    if until is not None:
        options += f',valid-before="{until:%Y%m%d}"'
    before = allowed.read_text(encoding="utf-8") if allowed.exists() else ""
    if before and not before.endswith("\n"):
        before += "\n"
    _write(allowed, f"{before}{principal} {options} {key}\n".encode())
    return Line(principal, options, key, fingerprint, revoked=False)


def revoke(revoked: Path, public: Path) -> str:
    """Put a public key on the revocation list, made if there is none; its fingerprint."""
    key, fingerprint = _public(public)
    new = revoked.with_name(f".{revoked.name}.new")
    update: list[str] = []
    if revoked.exists():
        new.write_bytes(revoked.read_bytes())
        update = ["-u"]
    try:
        done = _keygen(["-q", "-k", *update, "-f", str(new), "-"], f"{key}\n".encode())
        if done.returncode != 0:
            raise SigningError(
                f"writing {revoked}", _said(done), "name a list that ssh-keygen -k has made, or a new one"
            )
        new.replace(revoked)
    finally:
        new.unlink(missing_ok=True)
    return fingerprint


def lines(allowed: Path, revoked: Path | None = None) -> list[Line]:
    """The keys of an allowed-signers file, in its order. Raises SigningError with the number of a line without one."""
    if not allowed.exists():
        return []
    found: list[Line] = []
    for number, text in enumerate(allowed.read_text(encoding="utf-8").splitlines(), 1):
        if not text.strip() or text.lstrip().startswith("#"):
            continue
        words = text.split()
        at = next((i for i, word in enumerate(words) if word.startswith("AAAA")), 0)
        if at < 2:
            raise SigningError(
                f"{allowed}, line {number}", "no key stands there", "write it with `moteferry signers add`"
            )
        key = " ".join(words[at - 1 : at + 1])
        try:
            fingerprint = _fingerprint(key)
        except SigningError as error:
            raise SigningError(f"{allowed}, line {number}", error.why, error.mend) from error
        gone = revoked is not None and _is_revoked(revoked, key)
        found.append(Line(words[0], " ".join(words[1 : at - 1]), key, fingerprint, gone))
    return found


def _public(path: Path) -> tuple[str, str]:
    """Type and body of a public key file, and its fingerprint."""
    words = path.read_text(encoding="utf-8", errors="replace").split()
    if len(words) < 2 or not words[1].startswith("AAAA"):
        raise SigningError(f"reading {path}", "it is no public key", "name the .pub file")
    key = " ".join(words[:2])
    return key, _fingerprint(key)


def _fingerprint(key: str) -> str:
    done = _keygen(["-l", "-f", "-"], f"{key}\n".encode())
    words = done.stdout.decode("utf-8", "replace").split()
    if done.returncode != 0 or len(words) < 2:
        raise SigningError("reading a key", "ssh-keygen cannot read it", "name the .pub file")
    return words[1]


def _is_revoked(revoked: Path, key: str) -> bool:
    with tempfile.NamedTemporaryFile("w", suffix=".pub") as file:  # for this, ssh-keygen reads no standard input
        file.write(key + "\n")
        file.flush()
        done = _keygen(["-Q", "-f", str(revoked), file.name], b"")
    if "REVOKED" not in done.stdout.decode("utf-8", "replace") and done.returncode != 0:
        raise SigningError(f"reading {revoked}", _said(done), "name a list that ssh-keygen -k has made")
    return done.returncode != 0


def _keygen(words: Sequence[str], text: bytes) -> subprocess.CompletedProcess[bytes]:
    try:
        return subprocess.run(  # noqa: S603 (fixed words and files of the caller)
            ["ssh-keygen", *words],  # noqa: S607 (the operator's PATH)
            input=text,
            capture_output=True,
            timeout=PATIENCE_S,
            check=False,
        )
    except FileNotFoundError as error:
        raise SigningError("asking ssh-keygen", "there is none", "install the OpenSSH client") from error


def _said(done: subprocess.CompletedProcess[bytes]) -> str:
    said = (done.stderr or done.stdout).decode("utf-8", "replace").strip().splitlines()
    return said[-1][:200] if said else "ssh-keygen says no more"


def _write(path: Path, data: bytes) -> None:
    new = path.with_name(f".{path.name}.new")
    new.write_bytes(data)
    new.chmod(0o644)
    new.replace(path)
