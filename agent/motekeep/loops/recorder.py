"""From the pipeline to the journal: what is finished becomes durable, then the publisher is told.

Owns the order (durable before published), the one transaction an interval, and when a health document is due. It has
no thread of its own: the supervisor turns it, because the journal's writing connection belongs to the main thread.

Without a journal at the start (no disk) it keeps trying to open one. Until then health is judged and told, but no
reading is made: without the journal nobody knows which sequence numbers were used.
"""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from threading import Event
from typing import Protocol

import structlog

from motekeep.edges.ports import Batch, CaptureStore, JournalWriter, NewReading, NewService, Notice, StoreState
from motekeep.errors import StoreError
from motekeep.health.finding import Finding
from motekeep.health.gateway import GatewayFacts
from motekeep.instant import Instant, from_rfc3339, rfc3339
from motekeep.loops.backoff import Backoff
from motekeep.loops.intake import Intake
from motekeep.message.compose import Place
from motekeep.message.documents import LinkHealth, ReadingDocument, ServiceDocument, StoreHealth
from motekeep.message.health import Life, health_document
from motekeep.message.topics import Topics
from motekeep.pipeline import Harvest

log = structlog.get_logger()

FACTS_EVERY_S = 5.0
FLUSH_MARKS = 2000  # marks waiting in memory beyond this get a commit of their own: they bound what a crash repeats
KEEP_EVERY_S = 600.0
HEALTH = "health-document"  # the name under which the journal keeps the last health document
GRACE_S = 30.0  # on top of two periods before a health document counts as stale


class Outlet(Protocol):
    """What the recorder needs of the publisher."""

    def wake(self) -> None: ...

    def post(self, topic: str, body: str) -> None: ...


@dataclass(frozen=True, slots=True)
class RecorderSettings:
    """`life` gets its number from the journal, once that is open."""

    place: Place
    topics: Topics
    health_every_s: float
    life: Life


class Recorder:
    """`turn` once a second; at the end `finish`, then `close` when nobody marks rows any more.

    `opener` gives the journal, or raises StoreError. `remember` reads earlier readings again, for the hours that they
    are part of, as soon as the clock can be trusted and they have got their times.
    """

    def __init__(  # noqa: PLR0913 (its neighbours, each of which it talks to)
        self,
        settings: RecorderSettings,
        intake: Intake,
        opener: Callable[[], JournalWriter],
        outlet: Outlet,
        remember: Callable[[], None],
        facts: Callable[[StoreState, Instant], tuple[GatewayFacts, LinkHealth]],
        *,
        captures: CaptureStore,
    ) -> None:
        self._settings = settings
        self._life = settings.life
        self._intake = intake
        self._opener = opener
        self._journal: JournalWriter | None = None
        self._open_at = float("-inf")
        self._trouble = Backoff(log, "journal")
        self._why_closed = ""
        self._outlet = outlet
        self._remember = remember
        self._facts = facts
        self._captures = captures
        self._facts_at = self._health_at = self._kept_at = float("-inf")
        self._ending = False
        self._told: object = None
        self._health = ""
        self._vouched = False
        self._prune_due = Event()
        self._posted_hours: dict[str, str] = {}  # by sensor, RFC 3339: these sort by time

    def turn(self, at: Instant) -> tuple[ReadingDocument, ...]:
        """The readings that were recorded."""
        if self._journal is None and at.boot_s >= self._open_at:
            self._open(at)
        facts = None
        if at.boot_s - self._facts_at >= FACTS_EVERY_S:
            self._facts_at = at.boot_s
            self._store = self._state()
            facts, self._link = self._facts(self._store, at)
        harvest = self._intake.harvest(at, facts)
        if facts is not None or harvest.findings:
            self._tell_health(at)
        self._record(harvest, at)
        if self._journal is not None and self._prune_due.is_set():
            self._prune_due.clear()
            self._journal.prune(at)
        return harvest.readings

    def prune_soon(self) -> None:
        """Prune at the next turn; from any thread."""
        self._prune_due.set()

    def has_service(self, id_: str) -> bool | None:
        """Whether the journal has this service record; None while there is no journal."""
        return None if self._journal is None else self._journal.has_service(id_)

    @property
    def opened(self) -> bool:
        """Whether there is a journal."""
        return self._journal is not None

    def recall(self, name: str) -> str | None:
        """What the journal keeps under a name; None also without one."""
        return None if self._journal is None else self._journal.kept(name)

    def keep(self, values: Mapping[str, str], at: Instant) -> None:
        """A transaction of its own, durable when this returns; only once there is a journal."""
        if self._journal is None:
            raise StoreError("keeping " + ", ".join(values), "the journal is not open", "check disk and [store] path")
        self._journal.commit(Batch(keep=values), at)

    def _open(self, at: Instant) -> None:
        try:
            journal = self._opener()
        except StoreError as error:
            self._why_closed = str(error)
            self._open_at = at.boot_s + self._trouble.failed(error, at.boot_s)
            return
        self._trouble.recovered()
        self._journal = journal
        self._life = replace(self._life, number=journal.life)
        self._intake.resume(journal.next_seq, journal.kept, at)
        self._outlet.wake()

    def _state(self) -> StoreState:
        if self._journal is not None:
            return self._journal.state()
        return StoreState(0, None, 0, None, {}, self._why_closed, full=False, in_memory=0)

    def finish(self, at: Instant) -> None:
        """Store what was measured of the span under way, short as it is."""
        self._ending = True
        self._record(self._intake.finish(at), at)

    def close(self, at: Instant) -> None:
        """Write the last marks and close the journal."""
        if self._journal is not None:
            self._journal.flush(at)
            self._journal.close()
            self._journal = None

    def _record(self, harvest: Harvest, at: Instant) -> None:
        self._commit(harvest, at)
        for capture in harvest.captures:
            try:
                self._captures.keep(capture.name, capture.text)
            except StoreError as error:  # it only helps to understand a finding that is durable already
                log.warning("capture.not_kept", error=str(error))

    def _commit(self, harvest: Harvest, at: Instant) -> None:
        if self._journal is None:
            return
        if at.trusted and not self._vouched:
            self._journal.restamp(at)
            self._remember()
            self._outlet.wake()
        self._vouched = at.trusted
        if harvest:
            readings = [_row(r) for r in harvest.readings]
            services = [_service_row(s) for s in harvest.services]
            self._journal.commit(Batch(readings, self._notices(harvest), self._kept(harvest, at), services), at)
            self._post_hours(harvest)
            self._outlet.wake()
        elif self._journal.pending_marks() > FLUSH_MARKS:
            self._journal.flush(at)

    def _post_hours(self, harvest: Harvest) -> None:
        """The last full hour of each sensor stays retained: an older one that was amended must not replace it."""
        for hour in harvest.hours:
            if hour.start >= self._posted_hours.get(hour.sensor, ""):
                self._posted_hours[hour.sensor] = hour.start
                self._outlet.post(self._settings.topics.hourly(hour.sensor), hour.json_text())

    def _kept(self, harvest: Harvest, at: Instant) -> Mapping[str, str]:
        """What the next life needs, and the health document for `motekeep status`.

        Written when something opened or closed, at the end, and every ten minutes: with each minute's transaction these
        few kilobytes would be a fifth of all that wears the card, for sums that change by a thousandth.
        """
        pressing = harvest.findings or harvest.services or self._ending
        if not pressing and at.boot_s - self._kept_at < KEEP_EVERY_S:
            return harvest.notes
        self._kept_at = at.boot_s
        keep = {**harvest.keep, **harvest.notes}
        return {**keep, HEALTH: self._health} if self._health else keep

    def _notices(self, harvest: Harvest) -> list[Notice]:
        topics = self._settings.topics
        done = [Notice(topics.service, s.json_text()) for s in harvest.services]
        found = [Notice(topics.finding, f.json_text()) for f in harvest.findings]
        return done + found + [Notice(topics.amend(a.sensor), a.json_text()) for a in harvest.amendments]

    def _tell_health(self, at: Instant) -> None:
        """A health document when what is open changed, or when the next one is due."""
        findings = self._intake.findings()
        now = (_gist(findings), at.trusted)
        if now == self._told and at.boot_s - self._health_at < self._settings.health_every_s:
            return
        self._told, self._health_at = now, at.boot_s
        store, settings = self._store, self._settings
        oldest = None if store.oldest_waiting is None else rfc3339(store.oldest_waiting)
        document = health_document(
            settings.place,
            at,
            2 * settings.health_every_s + GRACE_S,
            life=self._life,
            findings=findings,
            sensors=self._intake.accounts(),
            store=StoreHealth(
                waiting=store.waiting,
                oldest_waiting=oldest,
                bytes=store.bytes,
                disk_free=store.disk_free,
                lost=dict(store.lost),
            ),
            link=self._link,
        )
        self._health = document.json_text()
        self._outlet.post(settings.topics.health, self._health)


def _gist(findings: Mapping[str | None, Sequence[Finding]]) -> frozenset[tuple[str | None, str]]:
    return frozenset((sensor, f.code) for sensor, open_ in findings.items() for f in open_)


def _service_row(record: ServiceDocument) -> NewService:
    return NewService(record.id, record.sensor, from_rfc3339(record.at), record.kind, record.json_text())


def _row(reading: ReadingDocument) -> NewReading:
    return NewReading(
        sensor=reading.sensor,
        seq=reading.seq,
        boot_id=reading.boot,
        boot_s=reading.boot_s,
        start=from_rfc3339(reading.start),
        seconds=reading.seconds,
        clock=reading.clock,
        flag=reading.flag,
        body=reading.json_text(),
    )
