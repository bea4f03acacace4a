"""A signed document on its way to one sensor, and the reading of it from two files.

Owns the offer and the checks that need no device: that it parses, that a signature lies beside it and is one of
exactly these bytes, that no two are for one sensor. Must not know who is trusted: that is for the devices.
"""

import json
from collections.abc import Iterable, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path
from typing import NamedTuple

from moteferry.signing import SigningError, fingerprint_of, signature_path
from motekeep.errors import MotekeepError
from motekeep.measure.document import CalibrationDocument
from motekeep.measure.document_text import parse

# A signature of the longest RSA key is 3 kB in its armour.
SIGNATURE_BYTES = 16 * 1024
# `ssh-keygen` is a process of some 5 ms, most of it waiting.
VERIFIERS = 8


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


def read_offer(path: Path) -> Offer:
    """Raises RollError for a missing signature or a document that no device would take."""
    beside = signature_path(path)
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
        for _ in pool.map(_check_signature, offers):
            pass


def _check_signature(offer: Offer) -> None:
    try:
        fingerprint_of(offer.document.encode(), offer.signature.encode())
    except SigningError as error:
        raise RollError(
            f"checking the signature of issue {offer.issue} for {offer.target}",
            error.why,
            "was the document changed after it was signed, or signed for something else? " + error.mend,
        ) from error
