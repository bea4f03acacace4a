"""SSH keys and signatures made by `ssh-keygen` itself, for the tests of what accepts them."""

import subprocess
from dataclasses import dataclass
from pathlib import Path

NAMESPACE = "calibration@motekeep"


@dataclass(frozen=True, slots=True)
class Key:
    """A key pair in a folder, without a passphrase."""

    path: Path
    principal: str

    @property
    def public(self) -> str:
        kind, blob = self.path.with_suffix(".pub").read_text().split()[:2]
        return f"{kind} {blob}"

    @property
    def fingerprint(self) -> str:
        done = subprocess.run(["ssh-keygen", "-l", "-f", self.path], capture_output=True, check=True, text=True)
        return done.stdout.split()[1]

    def line(self, options: str = "") -> str:
        """Its line of an allowed-signers file."""
        return f"{self.principal} {options + ' ' if options else ''}{self.public}\n"

    def sign(self, text: bytes, namespace: str = NAMESPACE) -> bytes:
        words = ["ssh-keygen", "-q", "-Y", "sign", "-n", namespace, "-f", str(self.path)]
        return subprocess.run(words, input=text, capture_output=True, check=True).stdout


def make_key(folder: Path, name: str = "anna", kind: str = "ed25519") -> Key:
    folder.mkdir(parents=True, exist_ok=True)
    path = folder / name
    words = ["ssh-keygen", "-q", "-t", kind, "-N", "", "-C", "", "-f", str(path)]
    subprocess.run([*words, *(["-b", "2048"] if kind == "rsa" else [])], check=True)
    return Key(path, f"{name}@example")


def revocation_list(path: Path, *keys: Key) -> Path:
    subprocess.run(["ssh-keygen", "-q", "-k", "-f", path, *[k.path.with_suffix(".pub") for k in keys]], check=True)
    return path
