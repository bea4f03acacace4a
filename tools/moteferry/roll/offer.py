"""A signed document on its way to one sensor, and the reading of it from two files.

Owns the offer and the checks that need no device: that it parses, that a signature lies beside it and is one of
exactly these bytes, that no two are for one sensor. Must not know who is trusted: that is for the devices.
"""

import json
import subprocess
import tempfile
from collections.abc import Iterable, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path
from typing import NamedTuple

from motekeep.errors import MotekeepError
from motekeep.measure.document import CalibrationDocument
from motekeep.measure.document_text import parse

NAMESPACE = "calibration@motekeep"
# A signature of the longest RSA key is 3 kB in its armour.
SIGNATURE_BYTES = 16 * 1024
# `ssh-keygen` is a process of some 5 ms, most of it waiting.
VERIFIERS = 8
KEYGEN_LIMIT_S = 60.0


class RollError(MotekeepError):
    """A roll cannot begin or go on. Exit code 2."""


class Target(NamedTuple):
    """One sensor of the fleet."""

    site: str
    gateway: str
    sensor: str

    def __str__(self) -> str:
        return "/".join(self)


@dataclass(frozen=True, slots=True)
class Offer:
    """A document and its detached signature, exact; dates are Unix seconds."""

    target: Target
    issue: int
    digest: str
    document: str
    signature: str
    valid_from: float
    valid_until: float

    @property
    def body(self) -> str:
        """The payload of `calibration/<sensor>/offer`."""
        return json.dumps({"document": self.document, "signature": self.signature}, separators=(",", ":"))


def offer_of(document: bytes, signature: str) -> Offer:
    """Raises DocumentError."""
    parsed: CalibrationDocument = parse(document)
    target = Target(parsed.site, parsed.gateway, parsed.sensor)
    return Offer(
        target, parsed.issue, parsed.digest, document.decode(), signature, parsed.valid_from, parsed.valid_until
    )


def signature_file(document: Path) -> Path:
    """`x.toml.sig`, where `ssh-keygen -Y sign` puts it."""
    return document.with_name(document.name + ".sig")


def read_offer(path: Path) -> Offer:
    """Raises RollError for a missing signature or a document that no device would take."""
    beside = signature_file(path)
    try:
        signature = beside.read_bytes()
    except FileNotFoundError as error:
        raise RollError(f"reading {path}", f"there is no {beside.name} beside it", "sign it: moteferry sign") from error
    if len(signature) > SIGNATURE_BYTES or not signature.startswith(b"-----BEGIN SSH SIGNATURE-----"):
        raise RollError(f"reading {beside}", "it is no SSH signature", "sign the document again: moteferry sign")
    try:
        return offer_of(path.read_bytes(), signature.decode("ascii"))
    except UnicodeDecodeError as error:
        raise RollError(f"reading {beside}", "it is no SSH signature", "sign the document: moteferry sign") from error
    except MotekeepError as error:
        raise RollError(f"reading {path}", str(error), "") from error


def check_apart(offers: Iterable[Offer]) -> None:
    """Raises RollError when two documents are for one sensor: the device would take both, the higher issue last."""
    seen: dict[Target, Offer] = {}
    for offer in offers:
        other = seen.setdefault(offer.target, offer)
        if other is not offer:
            raise RollError(
                f"planning for {offer.target}",
                f"issue {other.issue} and issue {offer.issue} are both for it",
                "give one document a sensor",
            )


def check_signatures(offers: Sequence[Offer]) -> None:
    """That each signature is one of these exact bytes in our namespace, whoever made it. Raises RollError."""
    with ThreadPoolExecutor(VERIFIERS) as pool:
        for offer, whole in zip(offers, pool.map(_is_of, offers), strict=True):
            if not whole:
                raise RollError(
                    f"checking the signature of issue {offer.issue} for {offer.target}",
                    f"it is not one of this document in the namespace {NAMESPACE}",
                    "the document was changed after it was signed, or signed for something else: sign it again",
                )


def _is_of(offer: Offer) -> bool:
    """`check-novalidate` asks for no list of signers: a temporary file is all that it needs."""
    with tempfile.NamedTemporaryFile("w", suffix=".sig") as file:
        file.write(offer.signature)
        file.flush()
        try:
            done = subprocess.run(  # noqa: S603 (fixed words; the only argument is a file of ours)
                ["ssh-keygen", "-Y", "check-novalidate", "-n", NAMESPACE, "-s", file.name],  # noqa: S607 (the operator's PATH)
                input=offer.document.encode(),
                capture_output=True,
                timeout=KEYGEN_LIMIT_S,
                check=False,
            )
        except FileNotFoundError as error:
            raise RollError("checking signatures", "there is no ssh-keygen", "install the OpenSSH client") from error
    return done.returncode == 0
