"""An armoured SSH signature as a file of bytes: what it says of itself.

Owns the form (OpenSSH's PROTOCOL.sshsig) as far as an explanation needs it. Nothing here decides whether a signature is
good: that is for `ssh-keygen`, in `signers.py`. It costs no process, so rubbish is refused for nothing.
"""

from base64 import b64decode, b64encode
from binascii import Error as Base64Error
from dataclasses import dataclass
from hashlib import sha256

# An RSA key of 16384 bits with a certificate stays below; the usual signature has 310 bytes.
LARGEST_BYTES = 16 * 1024
BEGIN, END = b"-----BEGIN SSH SIGNATURE-----", b"-----END SSH SIGNATURE-----"
MAGIC = b"SSHSIG"
VERSION = 1


class NotASignatureError(ValueError):
    """The bytes are no SSH signature; the text says where they stop being one."""


@dataclass(frozen=True, slots=True)
class StatedSignature:
    """What a signature states, none of it proven: the key that it says it was made with, and for which namespace."""

    key: bytes
    namespace: str

    @property
    def fingerprint(self) -> str:
        """The key as `ssh-keygen -l` names it: `SHA256:...`."""
        return "SHA256:" + b64encode(sha256(self.key).digest()).decode().rstrip("=")


def read(armoured: bytes) -> StatedSignature:
    """Raises NotASignatureError, and nothing else, on any bytes."""
    if len(armoured) > LARGEST_BYTES:
        raise NotASignatureError(f"has {len(armoured)} bytes, {LARGEST_BYTES} are possible")
    text = armoured.strip()
    if not (text.startswith(BEGIN) and text.endswith(END)) or len(text) < len(BEGIN) + len(END):
        raise NotASignatureError("does not begin and end like an SSH signature")
    try:
        blob = b64decode(b"".join(text[len(BEGIN) : -len(END)].split()), validate=True)
    except (Base64Error, ValueError) as error:
        raise NotASignatureError("is not base64 between its first and last line") from error
    if not blob.startswith(MAGIC):
        raise NotASignatureError("does not hold an SSH signature")
    version, rest = _number(blob[len(MAGIC) :])
    if version != VERSION:
        raise NotASignatureError(f"is of version {version}, only {VERSION} is known")
    key, rest = _string(rest)
    namespace, _ = _string(rest)
    return StatedSignature(key, namespace.decode("utf-8", "replace"))


def _number(blob: bytes) -> tuple[int, bytes]:
    if len(blob) < 4:
        raise NotASignatureError("ends too early")
    return int.from_bytes(blob[:4], "big"), blob[4:]


def _string(blob: bytes) -> tuple[bytes, bytes]:
    """A string of the SSH wire form: its length in four bytes, then itself (RFC 4251, section 5)."""
    length, rest = _number(blob)
    if length > len(rest):
        raise NotASignatureError("ends too early")
    return rest[:length], rest[length:]
