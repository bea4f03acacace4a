"""Signatures held against `ssh-keygen` itself, as verifier and as forger.

Source: OpenSSH, PROTOCOL.sshsig (the form of a signature) and ssh-keygen(1), "ALLOWED SIGNERS"; RFC 4251, section 5.
"""

import base64
import random
import subprocess
from pathlib import Path

import pytest

from keys import NAMESPACE, Key, make_key
from motekeep.edges import sshsig
from motekeep.edges.signers import Signers
from motekeep.errors import OfferRefusedError

pytestmark = pytest.mark.whole

TEXT = b"issue = 1\n" * 20
NOW = 1_796_126_400.0


@pytest.fixture(scope="module")
def keys(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Key]:
    folder = tmp_path_factory.mktemp("keys")
    return {kind: make_key(folder, kind, kind) for kind in ("ed25519", "rsa", "ecdsa")}


@pytest.fixture(scope="module")
def allowed(keys: dict[str, Key]) -> Path:
    path = keys["rsa"].path.parent / "signers"
    path.write_text("".join(key.line() for key in keys.values()))
    return path


def by_hand(allowed: Path, text: bytes, signature: bytes, principal: str, folder: Path) -> bool:
    """What ssh-keygen says when a person asks it."""
    file = folder / "signature"
    file.write_bytes(signature)
    words = ["ssh-keygen", "-Y", "verify", "-f", allowed, "-I", principal, "-n", NAMESPACE, "-s", file]
    return subprocess.run(words, input=text, capture_output=True, check=False).returncode == 0


def ours(allowed: Path, text: bytes, signature: bytes) -> bool:
    try:
        Signers(allowed).verify(text, signature, NOW)
    except OfferRefusedError:
        return False
    return True


def armoured(blob: bytes) -> bytes:
    body = base64.b64encode(blob).decode()
    lines = [body[i : i + 70] for i in range(0, len(body), 70)]
    return "\n".join([sshsig.BEGIN.decode(), *lines, sshsig.END.decode(), ""]).encode()


def blob_of(signature: bytes) -> bytes:
    return base64.b64decode(b"".join(signature.split(b"\n")[1:-2]))


@pytest.mark.parametrize("kind", ["ed25519", "rsa", "ecdsa"])
def test_what_ssh_keygen_signs_is_accepted_with_the_key_that_it_names(
    keys: dict[str, Key], allowed: Path, kind: str
) -> None:
    signature = keys[kind].sign(TEXT)
    signer = Signers(allowed).verify(TEXT, signature, NOW)
    assert (signer.principal, signer.key) == (keys[kind].principal, keys[kind].fingerprint)
    assert sshsig.read(signature).fingerprint == keys[kind].fingerprint
    assert sshsig.read(signature).namespace == NAMESPACE
    assert armoured(blob_of(signature)) == signature


@pytest.mark.parametrize("kind", ["ed25519", "ecdsa"])
def test_no_flipped_bit_of_a_signature_is_accepted(
    keys: dict[str, Key], allowed: Path, tmp_path: Path, kind: str
) -> None:
    """The parts that are only carried along, like the hash's name, included; and ssh-keygen agrees on each."""
    rng = random.Random(5)
    blob = blob_of(keys[kind].sign(TEXT))
    for _ in range(12):
        at = rng.randrange(len(blob))
        forged = armoured(blob[:at] + bytes([blob[at] ^ (1 << rng.randrange(8))]) + blob[at + 1 :])
        assert not ours(allowed, TEXT, forged), at
        assert not by_hand(allowed, TEXT, forged, keys[kind].principal, tmp_path), at


def test_a_signature_cut_short_lengthened_or_of_another_key_is_none(
    keys: dict[str, Key], allowed: Path, tmp_path: Path
) -> None:
    signature = keys["ed25519"].sign(TEXT)
    blob = blob_of(signature)
    other = blob_of(keys["ecdsa"].sign(TEXT))
    length = int.from_bytes(blob[10:14], "big")
    stranger = blob_of(make_key(tmp_path / "keys", "mallory").sign(TEXT))
    forgeries = [
        armoured(blob[:-1]),
        armoured(blob[: len(blob) // 2]),
        armoured(other[:14] + blob[14:]),
        # the trusted key named in front of a stranger's signature
        armoured(stranger[:14] + blob[14 : 14 + length] + stranger[14 + length :]),
        signature.replace(sshsig.BEGIN, b"-----BEGIN SSH SIGNATUR-----"),
        signature[: len(signature) // 2],
    ]
    for forged in forgeries:
        assert not ours(allowed, TEXT, forged)
        assert not by_hand(allowed, TEXT, forged, "ed25519@example", tmp_path)


@pytest.mark.parametrize("algorithm", ["sha256", "sha512"])
def test_both_hashes_of_the_protocol_are_taken(keys: dict[str, Key], allowed: Path, algorithm: str) -> None:
    words = ["ssh-keygen", "-q", "-Y", "sign", "-O", f"hashalg={algorithm}", "-n", NAMESPACE]
    made = subprocess.run([*words, "-f", keys["ed25519"].path], input=TEXT, capture_output=True, check=True).stdout
    assert ours(allowed, TEXT, made)


def test_a_certificate_of_a_trusted_authority_is_taken_for_its_principal_only(
    keys: dict[str, Key], tmp_path: Path
) -> None:
    authority, person = keys["ed25519"], make_key(tmp_path / "keys", "carl")
    certify = ["ssh-keygen", "-q", "-s", authority.path, "-I", "carl", "-n", "carl@example", f"{person.path}.pub"]
    subprocess.run(certify, check=True)
    certificate = person.path.with_name("carl-cert.pub")
    words = ["ssh-keygen", "-q", "-Y", "sign", "-n", NAMESPACE, "-f", certificate]
    made = subprocess.run(words, input=TEXT, capture_output=True, check=True).stdout
    allowed = tmp_path / "signers"
    allowed.write_text(f"carl@example cert-authority {authority.public}\n")
    assert Signers(allowed).verify(TEXT, made, None).principal == "carl@example"
    allowed.write_text(f"dora@example cert-authority {authority.public}\n")
    assert not ours(allowed, TEXT, made)
