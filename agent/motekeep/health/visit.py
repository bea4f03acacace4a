"""What a person's visit does to the record: readings with somebody at the case, and a unit that is another one.

Owns both checks that compare the record with what people entered. Must not know how a record comes here.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import ClassVar

from motekeep.health.check import Check
from motekeep.health.finding import Suspicion
from motekeep.health.memory import Memory, is_number
from motekeep.instant import Instant, rfc3339
from motekeep.measure.dose import ServiceKind
from motekeep.wire.frame import Observation

LAST_UTC = 253_402_300_800.0  # the year 10000, which no text of a time can name


@dataclass(slots=True)
class _Visit:
    """When it was done (boot seconds), what it was, and whether it has been told of."""

    done_s: float
    said: str
    told: bool = False


class ServiceVisit(Check):
    """service-visit: somebody is, or was, at the case: from 10 min before to 20 min after each service record.

    The span is ours. People enter a record when they are done or close to it, and before that they have opened the
    case, breathed on it and stirred the dust up; after it the case is closed, the unit warms up (half a minute), the
    air that came in is exchanged and the dust that was stirred settles (10 um falls a metre in some six minutes, 5 um
    in twenty; Stokes). A visit to the twin in the same enclosure is one here too; a `note` is none. A record of a visit
    that is over opens the finding once, for the span that it was, so that the readings of that span are amended.
    """

    code: ClassVar[str] = "service-visit"
    clear_s: ClassVar[float] = 0.0

    BEFORE_S = 600.0
    AFTER_S = 1200.0
    MOST = 16  # visits not yet told: more than a day of anybody's work; beyond that the oldest are dropped

    def __init__(self) -> None:
        self._visits: list[_Visit] = []
        self._pause = False  # between two findings of past visits
        self._offset = 0.0

    def service(self, kind: ServiceKind, done_utc: float, at: Instant) -> None:
        if kind is not ServiceKind.NOTE:
            self._add(done_utc, f"{kind.value} at {rfc3339(done_utc)}", at)

    def beside(self, kind: ServiceKind, done_utc: float, at: Instant) -> None:
        """It was the twin's record: whoever is at its case is at this one too."""
        if kind is not ServiceKind.NOTE:
            self._add(done_utc, f"the twin {kind.value} at {rfc3339(done_utc)}", at)

    def _add(self, done_utc: float, said: str, at: Instant) -> None:
        self._offset = at.offset
        self._visits = [*self._visits, _Visit(done_utc - at.offset, said)][-self.MOST :]

    def judge(self, at: Instant) -> Suspicion | None:
        if not self._visits:
            return None
        self._offset, now_s = at.offset, at.boot_s
        self._visits = [v for v in self._visits if not v.told or now_s < v.done_s + self.AFTER_S]
        under_way = [v for v in self._visits if -self.BEFORE_S <= now_s - v.done_s < self.AFTER_S]
        if under_way:
            for visit in under_way:
                visit.told = True
            since = min([v.done_s for v in under_way]) - self.BEFORE_S
            return Suspicion(since, 1.0, self._evidence([v.said for v in under_way]))
        # one past visit at a time, with a judgement between two of them in which nothing holds: each is a finding
        self._pause = not self._pause
        over = next((v for v in self._visits if not v.told and now_s >= v.done_s + self.AFTER_S), None)
        if over is None or not self._pause:
            return None
        over.told = True
        return Suspicion(
            over.done_s - self.BEFORE_S, 1.0, self._evidence([over.said]), until=over.done_s + self.AFTER_S
        )

    def memory(self) -> Memory | None:
        return {"done": [v.done_s + self._offset for v in self._visits]} if self._visits else None

    def recall(self, memory: Memory, at: Instant) -> None:
        done = memory.get("done")
        for done_utc in done if isinstance(done, list) else ():
            if is_number(done_utc) and 0.0 <= done_utc < LAST_UTC:
                self._add(done_utc, f"a visit at {rfc3339(done_utc)}, entered before a restart", at)

    def _evidence(self, said: Sequence[str]) -> str:
        span = f"{self.BEFORE_S / 60:.0f} min before to {self.AFTER_S / 60:.0f} min after"
        return f"service record: {'; '.join(said)}; readings from {span} were made with somebody at the case"


class UnitSwapped(Check):
    """unit-swapped: the unit calls itself another one than before, and nobody has said that it was replaced.

    Judged by the revision byte, or in `aa` the two id bytes, of its frames; a dialect without any is not judged. The
    weakest checksum lets one altered frame in some hundreds through, so a revision counts after five frames in a row
    that agree: half a minute at a frame each six seconds, after the warm-up that a new unit begins with. The last
    revision is remembered always, so that a swap while the gateway was off is seen too. It closes when `unit-replaced`
    is entered for it, or when the old unit is back. A record from up to a day before the swap speaks for it: people
    enter it when they pack the unit.
    """

    code: ClassVar[str] = "unit-swapped"
    clear_s: ClassVar[float] = 0.0
    again_s: ClassVar[float] = 1800.0  # a unit that sleeps between may not be heard of sooner
    settled: ClassVar[bool] = True

    IN_A_ROW = 5
    BEFORE_S = 86400.0

    def __init__(self) -> None:
        self._known: int | None = None
        self._replaced_utc = float("-inf")  # when a unit was last replaced, as entered
        self._run: tuple[int, int, float] | None = None  # revision, frames in a row up to five, since (boot seconds)

    def observe(self, observation: Observation) -> None:
        revision, at = observation.frame.revision, observation.at
        if revision is None:
            return
        if self._run is None or self._run[0] != revision:
            self._run = (revision, 1, at.boot_s)
        elif self._run[1] < self.IN_A_ROW:
            self._run = (revision, self._run[1] + 1, self._run[2])
            if self._run[1] == self.IN_A_ROW and (self._known is None or self._accounted(at)):
                self._known = revision

    def service(self, kind: ServiceKind, done_utc: float, at: Instant) -> None:
        if kind is ServiceKind.UNIT_REPLACED:
            self._replaced_utc = max(self._replaced_utc, done_utc)
            if self._run is not None and self._run[1] >= self.IN_A_ROW and self._accounted(at):
                self._known = self._run[0]

    def _accounted(self, at: Instant) -> bool:
        """Whether a record speaks for the revision that is heard now."""
        began = at.utc if self._run is None else self._run[2] + at.offset
        return self._replaced_utc >= began - self.BEFORE_S

    def judge(self, at: Instant) -> Suspicion | None:
        run = self._run
        if run is None or self._known is None or run[1] < self.IN_A_ROW or run[0] == self._known:
            return None
        evidence = f"revision or id 0x{self._known:02x} before, 0x{run[0]:02x} now; no record `unit-replaced` for it"
        return Suspicion(run[2], 0.95, evidence)

    def memory(self) -> Memory | None:
        if self._known is None:
            return None
        replaced = {} if self._replaced_utc == float("-inf") else {"replaced": self._replaced_utc}
        return {"revision": float(self._known), **replaced}

    def recall(self, memory: Memory, at: Instant) -> None:
        revision, replaced = memory.get("revision"), memory.get("replaced")
        if is_number(revision) and 0 <= revision <= 0xFFFF:
            self._known = int(revision)
        if is_number(replaced):
            self._replaced_utc = replaced
