"""The examination of an offered calibration document: every check before it may come into force, each refusal by name.

Owns the order of the checks, cheapest and most decisive first: nothing of a document is parsed before its signature is
accepted over its exact bytes, nothing is rehearsed before everything else holds. Changes nothing. Must not know how an
offer came here, nor what becomes of one that passes.

Dates decide only while somebody vouches for the clock: both those of the signer and those of the document.
"""

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from typing import Protocol

import structlog

from motekeep.errors import DocumentError, OfferRefusedError
from motekeep.instant import Instant, rfc3339
from motekeep.measure.document import CalibrationDocument
from motekeep.measure.document_text import LARGEST_BYTES, parse
from motekeep.message.calibration_record import CalibrationRecord, Guard, check_issue
from motekeep.message.compose import Place
from motekeep.message.documents import ReadingDocument
from motekeep.message.rehearsal import Shift, rehearse, shift

log = structlog.get_logger()

# With fewer stored readings, on a gateway's first minutes, a median says nothing; the soak is left to judge.
FEW_READINGS = 3


class Signer(Protocol):
    @property
    def principal(self) -> str: ...

    @property
    def key(self) -> str: ...


class Signers(Protocol):
    """Who may sign, as `edges/signers.py` knows."""

    @property
    def exist(self) -> bool: ...

    @property
    def stamp(self) -> tuple[object, ...]: ...

    def verify(self, text: bytes, signature: bytes, utc: float | None) -> Signer: ...


@dataclass(frozen=True, slots=True)
class Candidate:
    """A document that passed: with its exact bytes, who signed it, and value over raw by channel in the rehearsal."""

    document: CalibrationDocument
    text: bytes
    signature: bytes
    signer: Signer
    ratios: Mapping[str, float]
    rehearsed: int


class Examination:
    """Of documents for the sensors of one gateway. `last_day` gives a sensor's stored readings of the last day."""

    def __init__(
        self,
        place: Place,
        signers: Signers,
        last_day: Callable[[str], Iterable[ReadingDocument]],
        max_shift: float,
    ) -> None:
        self._place = place
        self._signers = signers
        self._last_day = last_day
        self._max_shift = max_shift

    @property
    def trust(self) -> tuple[object, ...]:
        """Changes when those who may sign do."""
        return self._signers.stamp

    def examine(self, sensor: str, text: bytes, signature: bytes, record: CalibrationRecord, at: Instant) -> Candidate:
        """Raises OfferRefusedError with what is wrong; SignersError or StoreError when it could not be told."""
        if len(text) > LARGEST_BYTES:
            raise OfferRefusedError("too-large", f"it has {len(text)} bytes", f"{LARGEST_BYTES} are possible")
        signer = self._signers.verify(text, signature, at.utc if at.trusted else None)
        document = _parsed(text)
        self._check_place(document, sensor)
        check_issue(document.issue, document.digest, record, record.highest(self.trusts))
        if at.trusted:
            _check_dates(document, at.utc)
        moved = self._rehearse(document, sensor)
        return Candidate(document, text, signature, signer, _ratios(moved), moved.judged)

    def trusts(self, guard: Guard) -> bool:
        """Whether the signer of an accepted document is one still; that a key has expired since changes nothing."""
        return self.why_not_trusted(guard.document.encode(), guard.signature.encode()) is None

    def why_not_trusted(self, text: bytes, signature: bytes) -> OfferRefusedError | None:
        """Why the signer of what was accepted is no longer trusted: taken out, or revoked. An expired key is."""
        try:
            self._signers.verify(text, signature, None)
        except OfferRefusedError as refusal:
            return refusal
        return None

    def _check_place(self, document: CalibrationDocument, sensor: str) -> None:
        for what, own, here in (
            ("site", document.site, self._place.site),
            ("gateway", document.gateway, self._place.gateway),
            ("sensor", document.sensor, sensor),
        ):
            if own != here:
                raise OfferRefusedError(f"other-{what}", f"it is for {what} {own!r}, not {here!r}", "offer it there")

    def _rehearse(self, document: CalibrationDocument, sensor: str) -> Shift:
        try:
            moved = shift(document, rehearse(document, self._last_day(sensor)))
        except ArithmeticError as error:
            # a step that raises is a bug of ours; a retained offer must not bring the daemon down again and again by it
            log.exception("calibration.rehearsal_failed", sensor=sensor, digest=document.digest)
            raise OfferRefusedError(
                "bad-document", f"its steps fail on the sensor's own readings: {error}", "use other parameters"
            ) from error
        if moved.offered >= FEW_READINGS and moved.judged == 0:
            raise OfferRefusedError(
                "corrects-nothing",
                f"none of the last {moved.offered} readings has what its steps need",
                "give the sensor a climate source, or use a model without humidity",
            )
        if moved.judged >= FEW_READINGS and moved.most > self._max_shift:
            name, move = max(moved.moves.items(), key=lambda item: item[1].most)
            raise OfferRefusedError(
                "moves-too-far",
                f"it moves {name} of the last {move.readings} readings by {move.most:.2f} of raw"
                f" (median {move.typical:.2f}, mean {move.mean:.2f}); max_shift is {self._max_shift:g}",
                "look at it with `moteferry rehearse`; where it is right, raise [calibration] max_shift",
            )
        return moved


def _parsed(text: bytes) -> CalibrationDocument:
    try:
        return parse(text)
    except DocumentError as error:
        raise OfferRefusedError("bad-document", f"{error.path} {error.why}", error.mend) from error


def _check_dates(document: CalibrationDocument, utc: float) -> None:
    if utc >= document.valid_until:
        raise OfferRefusedError("expired", f"it is valid until {rfc3339(document.valid_until)}", "sign a newer one")
    if utc < document.valid_from:
        raise OfferRefusedError(
            "not-yet-valid", f"it is valid from {rfc3339(document.valid_from)}", "offer it again then"
        )


def _ratios(moved: Shift) -> dict[str, float]:
    return {name: move.ratio for name, move in moved.moves.items()}
