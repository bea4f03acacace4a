"""Who may sign calibration documents: `ssh-keygen` asked, with the allowed-signers file and the revocation list.

Owns the question and the words of a refusal. `ssh-keygen` alone decides, on the exact bytes, before anything of them is
parsed; what is read here beside its verdict only explains it. Knows nothing of what a document says.

Nothing from outside becomes a file name or an argument: the document goes in by standard input, the signature through a
file that has no name and lives in memory, so that a full disk is no reason to refuse.
"""

import os
import re
import shutil
import subprocess
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import NamedTuple

from motekeep.edges import sshsig
from motekeep.errors import OfferRefusedError, SignersError
from motekeep.measure.document_text import LARGEST_BYTES

NAMESPACE = "calibration@motekeep"
IN_FOLDER_ALLOWED, IN_FOLDER_REVOKED = "allowed_signers", "revoked"

# 5 ms on a workstation; a small board with a busy card takes a second. What takes longer hangs.
TIMEOUT_S = 15.0
# A principals field may list several; documents are signed by one person.
MOST_PRINCIPALS = 8
# Lines of one key with other dates: each asks once more while no clock can say which one holds.
MOST_DATES = 6
# A unit has no login's PATH; where distributions put it.
PROGRAM = "ssh-keygen"
PATH = "/usr/bin:/bin:/usr/local/bin:/opt/homebrew/bin"

EXPIRED = re.compile(r"key has expired: .*valid-before (\S+)")
EARLY = re.compile(r"key is not yet valid: .*valid-after (\S+)")
KEY = re.compile(r"key (SHA256:[A-Za-z0-9+/]{43})\s*$")


@dataclass(frozen=True, slots=True)
class Signer:
    """Who signed: the name that the allowed-signers file gives, and the key's fingerprint."""

    principal: str
    key: str


class Answer(NamedTuple):
    """What `ssh-keygen` said: both outputs are needed, since its verdict is on one and its reason on the other."""

    good: bool
    out: str
    why: str


class Signers:
    """Verifies detached signatures of documents. Files are read anew each time: a key taken out is out at once."""

    def __init__(self, allowed: Path, revoked: Path | None = None) -> None:
        # `ssh-keygen` is asked from `/`: relative to where the caller stands, not to there
        self._configured = allowed.absolute(), None if revoked is None else revoked.absolute()

    @property
    def _allowed(self) -> Path:
        return trust_files(*self._configured)[0]

    @property
    def _revoked(self) -> Path | None:
        return trust_files(*self._configured)[1]

    @property
    def exist(self) -> bool:
        """Whether documents have to be signed here: there is an allowed-signers file."""
        return self._allowed.exists()

    @property
    def stamp(self) -> tuple[object, ...]:
        """Changes when either file does: what was accepted before may have lost its signer."""
        return _stamp(self._allowed), _stamp(self._revoked)

    def verify(self, text: bytes, signature: bytes, utc: float | None) -> Signer:
        """Who signed exactly these bytes, at the moment `utc`; with None dates decide nothing.

        Raises OfferRefusedError with one of the reasons unsigned, bad-signature, other-namespace, no-signers,
        unknown-signer, expired-signer, revoked-signer, too-large; SignersError when nobody could be asked.
        """
        if len(text) > LARGEST_BYTES:
            raise OfferRefusedError("too-large", f"it has {len(text)} bytes", f"{LARGEST_BYTES} are possible")
        if not signature.strip():
            raise OfferRefusedError("unsigned", "there is no signature with it", "sign it with `moteferry sign`")
        try:
            stated = sshsig.read(signature)
        except sshsig.NotASignatureError as error:
            raise OfferRefusedError("bad-signature", f"the signature {error}", "sign it anew") from error
        if stated.namespace != NAMESPACE:
            raise OfferRefusedError(
                "other-namespace",
                f"it is signed for {_shown(stated.namespace)}, not for {NAMESPACE}",
                "sign it with `moteferry sign`",
            )
        if not self.exist:
            raise OfferRefusedError(
                "no-signers", f"there is no {self._allowed}", "put the allowed signers there, then offer it again"
            )
        with _unnamed(signature) as file:
            return self._decide(text, file, stated, utc)

    def _decide(self, text: bytes, file: int, stated: sshsig.StatedSignature, utc: float | None) -> Signer:
        moment, principals = self._principals(file, stated, utc)
        answer = Answer(False, "", "no principal can be asked for")
        for principal in principals:
            answer = self._verified(text, file, principal, moment, self._revoked)
            if answer.good:
                found = KEY.search(answer.out.strip())
                return Signer(principal, found.group(1) if found else stated.fingerprint)
        if self._revoked is not None and any(self._verified(text, file, p, moment, None).good for p in principals):
            raise OfferRefusedError(
                "revoked-signer",
                f"{principals[0]} with key {stated.fingerprint} stands in {self._revoked}, or that list cannot be read",
                "sign it with a key that is trusted here",
            )
        if "not permitted" in answer.why:
            raise OfferRefusedError(
                "unknown-signer",
                f"key {stated.fingerprint} of {principals[0]} is allowed for other namespaces only",
                f"allow it for {NAMESPACE} in {self._allowed}",
            )
        raise OfferRefusedError(
            "bad-signature",
            f"the signature by key {stated.fingerprint} is not over these bytes{_because(answer)}",
            "transfer document and signature again, byte for byte",
        )

    def _principals(self, file: int, stated: sshsig.StatedSignature, utc: float | None) -> tuple[float, list[str]]:
        """Whose key it is by the file, and the moment at which that holds."""
        moment = datetime.now(UTC).timestamp() if utc is None else utc
        tried: set[float] = set()
        for _ in range(MOST_DATES):
            answer = self._ask(["find-principals", "-s", _path(file), "-f", str(self._allowed)], file, moment, b"")
            names = [n for n in answer.out.splitlines()[:MOST_PRINCIPALS] if n and not n.startswith("!")]
            if answer.good and names:
                return moment, names
            tried.add(moment)
            others = [m for m in _moments(answer.why) if m not in tried]
            if utc is not None or not others:
                break
            moment = others[0]
        expired, early = EXPIRED.search(answer.why), EARLY.search(answer.why)
        if expired or early:
            said = f"expired {expired.group(1)}" if expired else f"holds from {early[1] if early else 0} on,"
            raise OfferRefusedError(
                "expired-signer",
                f"key {stated.fingerprint} {said} UTC",
                f"sign with a key in its dates, or change them in {self._allowed}",
            )
        raise OfferRefusedError(
            "unknown-signer",
            f"key {stated.fingerprint} is not in {self._allowed}",
            "sign with a key that is trusted here, or add this one",
        )

    def _verified(self, text: bytes, file: int, principal: str, moment: float, revoked: Path | None) -> Answer:
        words = ["verify", "-f", str(self._allowed), "-I", principal, "-n", NAMESPACE, "-s", _path(file)]
        if revoked is not None:
            words += ["-r", str(revoked)]
        return self._ask(words, file, moment, text)

    def _ask(self, words: list[str], file: int, moment: float, text: bytes) -> Answer:
        at = datetime.fromtimestamp(moment, UTC).strftime("%Y%m%d%H%M%S")
        try:
            done = subprocess.run(  # noqa: S603 (fixed words, and paths and names of files of ours)
                [PROGRAM, "-Y", *words, "-O", f"verify-time={at}"],
                input=text,
                capture_output=True,
                timeout=TIMEOUT_S,
                pass_fds=(file,),
                # its words are looked at, and dates without a zone are meant as UTC wherever a gateway stands
                env={"PATH": PATH, "LC_ALL": "C", "TZ": "UTC"},
                cwd="/",
                check=False,
            )
        except FileNotFoundError as error:
            raise SignersError("asking ssh-keygen", "it is not installed", "install openssh-client") from error
        except subprocess.TimeoutExpired as error:
            raise SignersError("asking ssh-keygen", f"no answer in {TIMEOUT_S:g} s", "it is tried again") from error
        except OSError as error:
            raise SignersError("asking ssh-keygen", str(error)[:200], "it is tried again") from error
        return Answer(done.returncode == 0, done.stdout.decode("utf-8", "replace"), _tail(done.stderr))


def trust_files(allowed: Path, revoked: Path | None) -> tuple[Path, Path | None]:
    """The two files where `signers` of the configuration names the folder that the installer makes for them."""
    if not allowed.is_dir():
        return allowed, revoked
    inside = allowed / IN_FOLDER_REVOKED
    return allowed / IN_FOLDER_ALLOWED, inside if revoked is None and inside.exists() else revoked


def why_no_program() -> str | None:
    """Why nobody can be asked, None when `ssh-keygen` is there."""
    return None if shutil.which(PROGRAM, path=PATH) else "there is no ssh-keygen; install openssh-client"


def check_files(allowed: Path, revoked: Path | None) -> str | None:
    """What is wrong with the files of trust themselves, None when nothing is: who can change them can sign anything."""
    for path in (allowed, *([revoked] if revoked is not None else [])):
        for place in (path, path.resolve().parent):
            try:
                mode = place.stat().st_mode
            except OSError as error:
                return f"{place}: {error.strerror}; make it readable for motekeep"
            if mode & 0o022:
                return f"{place} can be written by others than its owner; chmod go-w it"
        if not os.access(path, os.R_OK):
            return f"{path} is not readable for this user; make it readable for motekeep"
    return None


def count_keys(allowed: Path) -> int:
    """How many keys the allowed-signers file holds. Raises SignersError naming the first line without a sound key."""
    lines = [
        (n, line)
        for n, line in enumerate(allowed.read_text(encoding="utf-8", errors="replace").splitlines(), 1)
        if line.strip() and not line.lstrip().startswith("#")
    ]
    for number, line in lines:
        blob = next((word for word in line.split() if word.startswith("AAAA")), None)
        if blob is None or not _is_key(line, blob):
            raise SignersError(
                f"{allowed}, line {number}", "no key can be read there", "write it with `moteferry signers`"
            )
    return len(lines)


def _is_key(line: str, blob: str) -> bool:
    words = line.split()
    kind = words[words.index(blob) - 1]
    done = subprocess.run(  # noqa: S603 (fixed words)
        [PROGRAM, "-l", "-f", "-"],
        input=f"{kind} {blob}\n".encode(),
        capture_output=True,
        timeout=TIMEOUT_S,
        env={"PATH": PATH, "LC_ALL": "C"},
        check=False,
    )
    return done.returncode == 0


def _moments(why: str) -> Iterator[float]:
    """Moments at which a line would hold that does not now: a second inside of the date that it failed by."""
    for pattern, inside in ((EXPIRED, -1.0), (EARLY, 1.0)):
        for said in pattern.findall(why):
            try:
                yield datetime.fromisoformat(said).replace(tzinfo=UTC).timestamp() + inside
            except ValueError:
                continue


def _because(answer: Answer) -> str:
    return f" ({answer.why})" if answer.why and "incorrect signature" not in answer.why else ""


def _tail(said: bytes) -> str:
    """The last lines, printable: they go into a log and onto a topic."""
    text = said[-2000:].decode("utf-8", "replace")
    return "\n".join("".join(c if c.isprintable() else "?" for c in line) for line in text.splitlines()[-8:])


def _shown(text: str) -> str:
    return repr(text[:60])


def _stamp(path: Path | None) -> tuple[int, int, int] | None:
    try:
        state = path.stat() if path is not None else None
    except OSError:
        return None
    return None if state is None else (state.st_mtime_ns, state.st_ino, state.st_size)


def _path(file: int) -> str:
    return f"/proc/self/fd/{file}"


@contextmanager
def _unnamed(data: bytes) -> Iterator[int]:
    """A file in memory that only its descriptor leads to."""
    try:
        file = os.memfd_create("signature")
    except OSError as error:
        raise SignersError("asking ssh-keygen", str(error), "it is tried again") from error
    try:
        os.write(file, data)
        yield file
    finally:
        os.close(file)
