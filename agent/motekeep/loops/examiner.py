"""The examiner: the thread in which calibration documents are looked at, so that neither measuring nor sending waits.

Owns what waits to be examined, the pace, and the verdicts until they are collected. Decides nothing itself (that is
`examination.py`) and changes nothing (that is `calibration.py`, in the main thread).

Limits. An offer from afar has one place a sensor: the newest replaces one that still waits, so that a flood costs the
memory of one. Offers are examined at most every two seconds: some twenty milliseconds of ssh-keygen, and on a small
board seconds for the rehearsal. What people ask at the gateway goes first, sixteen at the most.
"""

from collections import deque
from collections.abc import Callable
from dataclasses import dataclass
from hashlib import sha256
from threading import Event, Lock
from typing import Literal

import structlog
from pydantic import ValidationError

from motekeep.edges.ports import Clock
from motekeep.errors import MotekeepError, OfferRefusedError, SignersError, StoreError
from motekeep.instant import Instant
from motekeep.loops.examination import Candidate, Examination
from motekeep.measure.document import digest
from motekeep.message.calibration_record import By, CalibrationRecord
from motekeep.message.documents import CalibrationOfferRequest

log = structlog.get_logger()

TURN_S = 0.25
OFFERS_EVERY_S = 2.0
RETRY_S = 60.0
MOST_JOBS = 16
# 64 KiB of text, each quote and line break escaped, with a signature; nothing longer is read as JSON.
LARGEST_PAYLOAD = 256 * 1024
# A refusal of the same bytes is repeated from memory for so long: dates and readings may change it.
REMEMBER_S = 60.0


@dataclass(frozen=True, slots=True)
class Offered:
    """What came on the offer topic, as it came. `cut`: longer than is ever read, and no more of it kept."""

    sensor: str
    payload: bytes
    cut: bool = False


@dataclass(frozen=True, slots=True)
class Given:
    """Documents and signatures from the gateway itself; the first that passes is wanted."""

    sensor: str
    pairs: tuple[tuple[bytes, bytes], ...]
    by: By
    ticket: str | None = None


@dataclass(frozen=True, slots=True)
class Recheck:
    """Whether the signer of an accepted document is still trusted: to go back to it, or to leave it in force."""

    sensor: str
    text: bytes
    signature: bytes
    purpose: Literal["restore", "audit"]
    ticket: str | None = None


Request = Offered | Given | Recheck


@dataclass(frozen=True, slots=True)
class Verdict:
    """What came of a request. Neither candidate nor refusal: an offer that is in force already, or a signer still
    trusted. `record` is what it was judged against; `digest` is that of the document, as far as one was read."""

    request: Request
    record: CalibrationRecord
    digest: str
    candidate: Candidate | None = None
    refusal: MotekeepError | None = None
    by: By = "offer"


class Examiner:
    """`run` until the stop event. `record` gives a sensor's record as it stands."""

    def __init__(
        self, examination: Examination, record: Callable[[str], CalibrationRecord], clock: Clock, stop: Event
    ) -> None:
        self._examination = examination
        self._record = record
        self._clock = clock
        self._stop = stop
        self._lock = Lock()
        self._offers: dict[str, Offered] = {}
        self._jobs: deque[Given | Recheck] = deque()
        self._verdicts: deque[Verdict] = deque()
        self._offers_due_s = float("-inf")
        self._refused: dict[str, tuple[object, float, Verdict]] = {}
        self.replaced = 0
        self.ticked = clock.now().boot_s

    # -- for other threads ----------------------------------------------------------------------------------------

    def offer(self, sensor: str, payload: bytes) -> None:
        """From the inbox; keeps at most one a sensor, and of one too long nothing."""
        cut = len(payload) > LARGEST_PAYLOAD
        with self._lock:
            if sensor in self._offers:
                self.replaced += 1
                if self.replaced & (self.replaced - 1) == 0:
                    log.warning("calibration.offers_replaced", sensor=sensor, count=self.replaced)
            self._offers[sensor] = Offered(sensor, b"" if cut else payload, cut)

    def ask(self, job: Given | Recheck) -> bool:
        """Whether there was room for it."""
        with self._lock:
            if len(self._jobs) >= MOST_JOBS:
                return False
            self._jobs.append(job)
            return True

    def verdicts(self) -> list[Verdict]:
        """Those since the last call, in order."""
        with self._lock:
            found = list(self._verdicts)
            self._verdicts.clear()
            return found

    # -- its own thread -------------------------------------------------------------------------------------------

    def run(self) -> None:
        while not self._stop.is_set():
            now = self._clock.now()
            self.ticked = now.boot_s
            while (request := self._next(now.boot_s)) is not None and not self._stop.is_set():
                now = self._clock.now()
                self.ticked = now.boot_s
                self.work(request, now)
            self._clock.wait(self._stop, TURN_S)

    def turn(self, at: Instant) -> None:
        """All that is due, in the caller's thread: for tests, and for a gateway without a daemon."""
        while (request := self._next(at.boot_s)) is not None:
            self.work(request, at)

    def work(self, request: Request, at: Instant) -> None:
        """One request to its verdict. What could not be told waits a minute, if nothing newer comes."""
        verdict = self._judge(request, at)
        if isinstance(verdict.refusal, SignersError | StoreError) and isinstance(request, Offered):
            self._offers_due_s = at.boot_s + RETRY_S
            with self._lock:
                self._offers.setdefault(request.sensor, request)
        with self._lock:
            self._verdicts.append(verdict)

    def _next(self, boot_s: float) -> Request | None:
        with self._lock:
            if self._jobs:
                return self._jobs.popleft()
            # what was judged and not yet collected bounds what is judged next
            if boot_s < self._offers_due_s or not self._offers or len(self._verdicts) >= MOST_JOBS:
                return None
            self._offers_due_s = boot_s + OFFERS_EVERY_S
            return self._offers.pop(next(iter(self._offers)))

    def _judge(self, request: Request, at: Instant) -> Verdict:
        record = self._record(request.sensor)
        match request:
            case Recheck():
                why = None
                try:
                    why = self._examination.why_not_trusted(request.text, request.signature)
                except SignersError as error:
                    return Verdict(request, record, digest(request.text), refusal=error)
                return Verdict(request, record, digest(request.text), refusal=why)
            case Given():
                verdicts = (self._examined(request, pair, record, at, request.by) for pair in request.pairs)
                first = next(verdicts)
                return first if first.refusal is None else next((v for v in verdicts if v.refusal is None), first)
            case Offered():
                return self._offered(request, record, at)

    def _offered(self, request: Offered, record: CalibrationRecord, at: Instant) -> Verdict:
        if request.cut:
            refusal = OfferRefusedError(
                "too-large", f"the offer has more than {LARGEST_PAYLOAD} bytes", "65536 are possible for a document"
            )
            return Verdict(request, record, "", refusal=refusal)
        try:
            offer = CalibrationOfferRequest.model_validate_json(request.payload)
            pair = offer.document.encode(), offer.signature.encode()
        except (ValidationError, UnicodeEncodeError) as error:
            why = error.errors()[0]["msg"] if isinstance(error, ValidationError) else str(error)
            refusal = OfferRefusedError("bad-offer", str(why)[:200], "offer it with `moteferry roll`")
            return Verdict(request, record, digest(request.payload), refusal=refusal)
        mark = (sha256(request.payload).digest(), *self._examination.trust)
        known = self._refused.get(request.sensor)
        if known is not None and known[0] == mark and at.boot_s < known[1] and known[2].record is record:
            return known[2]
        verdict = self._examined(request, pair, record, at, "offer")
        if isinstance(verdict.refusal, OfferRefusedError):
            self._refused[request.sensor] = (mark, at.boot_s + REMEMBER_S, verdict)
        return verdict

    def _examined(
        self, request: Request, pair: tuple[bytes, bytes], record: CalibrationRecord, at: Instant, by: By
    ) -> Verdict:
        text, signature = pair
        own = digest(text)
        if own == record.in_force:
            return Verdict(request, record, own, by=by)  # no process, no rehearsal: it is
        try:
            candidate = self._examination.examine(request.sensor, text, signature, record, at)
        except (OfferRefusedError, SignersError, StoreError) as refusal:
            # its traceback holds every buffer on the way, and a verdict outlives the examination
            return Verdict(request, record, own, refusal=refusal.with_traceback(None), by=by)
        return Verdict(request, record, own, candidate, by=by)
