"""The switch: which signed document is in force for each sensor, and the change from one to another.

Owns the records of the sensors, the soak of what is new, and the order of a change:

    1. the document and its signature are put on the shelf, durable, beside the others     (nothing refers to them yet)
    2. the journal commits the record that says which one is in force, with its issue      (this is the change)
    3. the pipeline gets it: it acts on the interval under way, whole, so that none mixes two
    4. the pair in front of the folder follows, and what is no longer needed goes

A cut before 2 leaves the old one in force, whole, and a file that the next change drops; after 2 the new one: at the
start the record decides, and the pair in front is made to follow it. So at no moment is it neither. Must not know who
is trusted, nor examine anything. Belongs to the main thread, whose the journal is.
"""

from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass
from typing import Protocol

import structlog

from motekeep.errors import DocumentError, OfferRefusedError, StoreError
from motekeep.instant import Instant, rfc3339
from motekeep.loops.examination import Candidate
from motekeep.loops.intake import Intake
from motekeep.loops.soak import Soak
from motekeep.measure.document import CalibrationDocument
from motekeep.measure.document_text import parse
from motekeep.message.calibration_record import Accepted, By, CalibrationRecord, Guard, recalled, record_name
from motekeep.message.documents import ReadingDocument

log = structlog.get_logger()

Pair = tuple[bytes, bytes]


class Shelf(Protocol):
    """The calibration folder as `edges/shelf.py` keeps it."""

    def changed(self, sensor: str) -> bool: ...

    def in_force(self, sensor: str) -> CalibrationDocument | None: ...

    def shown(self, sensor: str) -> Pair | None: ...

    def kept(self, sensor: str, wanted: str) -> Pair | None: ...

    def all_kept(self, sensor: str) -> list[Pair]: ...

    def keep(self, sensor: str, text: bytes, signature: bytes) -> None: ...

    def show(self, sensor: str, text: bytes, signature: bytes) -> None: ...

    def hide(self, sensor: str) -> None: ...

    def set_aside(self, sensor: str) -> None: ...

    def prune(self, sensor: str, digests: Collection[str]) -> None: ...


class Ledger(Protocol):
    """The journal's key-value side, by way of the recorder."""

    @property
    def opened(self) -> bool: ...

    def recall(self, name: str) -> str | None: ...

    def keep(self, values: Mapping[str, str], at: Instant) -> None: ...


@dataclass(frozen=True, slots=True)
class SoakRule:
    """`seconds` of measuring, in which no reading lies further than `max_shift` from what is expected."""

    max_shift: float
    seconds: float


class Switch:
    def __init__(self, shelf: Shelf, intake: Intake, ledger: Ledger, rule: SoakRule) -> None:
        self._shelf = shelf
        self._intake = intake
        self._ledger = ledger
        self._rule = rule
        self._records: dict[str, CalibrationRecord] = {}
        self._soaks: dict[str, Soak] = {}

    def record(self, sensor: str) -> CalibrationRecord:
        """Of any thread: it is replaced whole, never changed."""
        return self._records.get(sensor, NOTHING)

    def soak_left_s(self, sensor: str) -> float | None:
        """Seconds of measuring until the one in force has proven itself; None once it has."""
        soak = self._soaks.get(sensor)
        return None if soak is None else max(soak.left_s, 0.0)

    def pair(self, sensor: str, digest: str) -> Pair | None:
        """Text and signature of an accepted document; the journal has those of the highest issues too."""
        if (kept := self._shelf.kept(sensor, digest)) is not None:
            return kept
        guard = next((g for g in self.record(sensor).guards if g.digest == digest), None)
        if guard is None:
            return None
        pair = guard.document.encode(), guard.signature.encode()
        try:
            self._shelf.keep(sensor, *pair)
        except StoreError as error:
            log.warning("calibration.not_kept", sensor=sensor, error=str(error))
        return pair

    def load(self, sensor: str, at: Instant) -> bool:
        """Put into force what the record says; whether there is a record at all. What was lost of it or can no longer
        be read is gone back from."""
        record = recalled(self._ledger.recall(record_name(sensor)))
        self._records[sensor] = record or NOTHING
        if record is None:
            return False
        if record.in_force is None:
            self._intake.calibrate(sensor, None)
        elif not self._begin(sensor):
            self.withdraw(sensor, "file-lost: the accepted document is gone or damaged", at)
        self._shelf.prune(sensor, self._records[sensor].digests)
        return True

    def accept(self, sensor: str, candidate: Candidate, by: By, at: Instant) -> None:
        """Raises OfferRefusedError when it cannot be stored; then nothing has changed."""
        document, signer = candidate.document, candidate.signer
        entry = Accepted(
            issue=document.issue,
            digest=document.digest,
            signer=signer.principal,
            key=signer.key,
            valid_until=rfc3339(document.valid_until),
            at=rfc3339(at.utc),
            ratios=dict(candidate.ratios),
            proven=self._rule.seconds <= 0.0,
        )
        text, signature = candidate.text, candidate.signature
        guard = Guard(
            issue=document.issue,
            digest=document.digest,
            key=signer.key,
            document=text.decode(),
            signature=signature.decode("ascii"),
        )
        try:
            self._shelf.keep(sensor, text, signature)
        except StoreError as error:
            raise OfferRefusedError("cannot-store", error.why, error.mend) from error
        self._commit(sensor, self.record(sensor).accept(entry, guard, by), at)
        self._use(sensor, document, entry)
        self.front(sensor)
        self._shelf.prune(sensor, self.record(sensor).digests)

    def restore(self, sensor: str, digest: str, at: Instant) -> None:
        """An accepted one is in force again. Its issue, and the highest one, stay what they are."""
        self._commit(sensor, self.record(sensor).restore(digest, rfc3339(at.utc)), at)
        self._begin(sensor)
        self.front(sensor)

    def withdraw(self, sensor: str, why: str, at: Instant) -> None:
        """Back to the newest earlier one that can be read, or to none."""
        record = self.record(sensor)
        gone = record.current
        back = [entry.digest for entry in record.before(record.in_force or "") if self._readable(sensor, entry.digest)]
        self._commit(sensor, record.withdraw(why, back[0] if back else None, rfc3339(at.utc)), at)
        log.error(
            "calibration.withdrawn", sensor=sensor, issue=gone.issue if gone else None, why=why, back=back[:1] or None
        )
        if not back or not self._begin(sensor):
            self._none(sensor)
        self.front(sensor)

    def take_out(self, sensor: str, at: Instant) -> None:
        """A person has removed the file in front: none is in force."""
        self._commit(sensor, self.record(sensor).take_out(rfc3339(at.utc)), at)
        self._none(sensor)

    def soak(self, made: Sequence[ReadingDocument], at: Instant) -> list[str]:
        """Judge new readings; the sensors of which something changed: withdrawn, or proven."""
        changed: list[str] = []
        for reading in made:
            soak = self._soaks.get(reading.sensor)
            if soak is None:
                continue
            if (why := soak.see(reading)) is not None:
                self.withdraw(reading.sensor, why, at)
                changed.append(reading.sensor)
            elif soak.over:
                del self._soaks[reading.sensor]
                self._commit(reading.sensor, self.record(reading.sensor).prove(), at)
                log.info("calibration.proven", sensor=reading.sensor, digest=soak.digest)
                changed.append(reading.sensor)
        return changed

    def front(self, sensor: str) -> None:
        """Make the pair in front that of the one in force. One that cannot be written is tried again with the next."""
        record = self.record(sensor)
        pair = None if record.in_force is None else self.pair(sensor, record.in_force)
        try:
            if pair is None:
                self._shelf.hide(sensor)
            elif self._shelf.shown(sensor) != pair:
                self._shelf.show(sensor, *pair)
        except StoreError as error:
            log.warning("calibration.not_shown", sensor=sensor, error=str(error))

    def _commit(self, sensor: str, record: CalibrationRecord, at: Instant) -> None:
        self._ledger.keep({record_name(sensor): record.json_text()}, at)
        self._records[sensor] = record

    def _begin(self, sensor: str) -> bool:
        """Use what the record says is in force; False when that cannot be read."""
        entry = self.record(sensor).current
        document = None if entry is None else self._readable(sensor, entry.digest)
        if entry is None or document is None:
            return False
        self._use(sensor, document, entry)
        return True

    def _use(self, sensor: str, document: CalibrationDocument, entry: Accepted) -> None:
        self._intake.calibrate(sensor, document)
        self._soaks.pop(sensor, None)
        if not entry.proven:
            self._soaks[sensor] = Soak(entry.digest, entry.ratios, self._rule.max_shift, self._rule.seconds)
        log.info("calibration.in_force", sensor=sensor, issue=entry.issue, digest=entry.digest, signer=entry.signer)

    def _none(self, sensor: str) -> None:
        self._soaks.pop(sensor, None)
        self._intake.calibrate(sensor, None)

    def _readable(self, sensor: str, digest: str) -> CalibrationDocument | None:
        pair = self.pair(sensor, digest)
        try:
            return None if pair is None else parse(pair[0])
        except DocumentError:
            return None


NOTHING = CalibrationRecord()
