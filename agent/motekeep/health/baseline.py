"""What is learnt of a unit in its first days, lesson by lesson, and when it is forgotten.

Owns the shape of a lesson, what makes a period unfit to learn from, versions, and keeping. Must not know any lesson's
physics: each part says itself what is plausible.

A lesson hears intervals, hours and wakes of sound periods only: none in which a finding that casts doubt on the
sensor's numbers is open. When it has heard enough it gives its part, a small frozen dataclass of plain numbers; a part
that physics rules out is never given, so that a unit that is broken on its first day does not teach its fault as
normal. A part then stands still until a service record says that its subject was changed: slow drifts are measured
against the first days, not against last week.
"""

from abc import ABC, abstractmethod
from collections.abc import Mapping, Sequence
from typing import Any, ClassVar

from motekeep.health.check import LineState
from motekeep.health.hour import Hour
from motekeep.health.wake import Wake
from motekeep.instant import Instant
from motekeep.measure.dose import ServiceKind
from motekeep.measure.interval import Interval
from motekeep.wire.frame import Observation

# Plain numbers by name, fit for JSON, of one part or of what a lesson has gathered so far.
Notes = Mapping[str, float | Sequence[float]]


class Lesson(ABC):
    """One thing to learn. `name` is what its part is called in `Baseline.parts`.

    `begun_again_by`: kinds of service after which it is learnt anew; `begun_again_by_twin`: those at the twin.
    Overrides the hooks it needs.
    """

    name: ClassVar[str]
    begun_again_by: ClassVar[frozenset[ServiceKind]]
    begun_again_by_twin: ClassVar[frozenset[ServiceKind]] = frozenset()

    def interval(self, interval: Interval) -> None:  # noqa: B027 (empty on purpose, as in Check)
        """A sound interval was closed."""

    def hour(self, hour: Hour) -> None:  # noqa: B027
        """An hour is over; look at `hour.sound` and `hour.pair`."""

    def observe(self, observation: Observation) -> None:  # noqa: B027
        """A good frame came, warm-up included, sound or not."""

    def line(self, state: LineState, at: Instant) -> None:  # noqa: B027
        """The line changed its state."""

    def wake(self, wake: Wake) -> None:  # noqa: B027
        """The sensor was woken and looked at while nothing was wrong with it."""

    @abstractmethod
    def part(self) -> Any:
        """What was learnt, once there is enough of it and it is plausible; else None. Any: each lesson has its own."""

    @abstractmethod
    def notes(self) -> Notes:
        """What has been gathered, or the part: enough for `recall` in the daemon's next life. A few hundred numbers."""

    @abstractmethod
    def recall(self, notes: Notes) -> None:
        """Take up what `notes` gave. Must ignore what it cannot use: it may be of another version, or edited."""

    @abstractmethod
    def forget(self) -> None:
        """Begin again."""


def hears(lesson: Lesson, hook: str) -> bool:
    """Whether `lesson` overrides this hook; found once, so that an unused hook is never called."""
    return getattr(type(lesson), hook) is not getattr(Lesson, hook)


class Baseline:
    """The parts learnt so far, by the names of their lessons. `version` rises with every change of them."""

    def __init__(self, lessons: Sequence[Lesson]) -> None:
        self._lessons = tuple(lessons)
        self.version = 0
        self.learnt_utc: dict[str, float] = {}
        self.parts: dict[str, Any] = {}

    @property
    def lessons(self) -> tuple[Lesson, ...]:
        return self._lessons

    def review(self, at: Instant) -> bool:
        """Take in what the lessons have to give; whether anything changed."""
        changed = False
        for lesson in self._lessons:
            part = lesson.part()
            if part == self.parts.get(lesson.name):
                continue
            changed = True
            if part is None:
                del self.parts[lesson.name]
                self.learnt_utc.pop(lesson.name, None)
            else:
                self.parts[lesson.name] = part
                self.learnt_utc.setdefault(lesson.name, at.utc)
        self.version += changed
        return changed

    def service(self, kind: ServiceKind, at: Instant) -> bool:
        """Forget what the service has changed; whether that was anything."""
        for lesson in self._lessons:
            if kind in lesson.begun_again_by:
                lesson.forget()
        return self.review(at)

    def twin_service(self, kind: ServiceKind, at: Instant) -> bool:
        """The same of a service of the twin."""
        for lesson in self._lessons:
            if kind in lesson.begun_again_by_twin:
                lesson.forget()
        return self.review(at)

    def dump(self) -> dict[str, Any]:
        """What `restore` needs, fit for JSON."""
        lessons = {lesson.name: dict(lesson.notes()) for lesson in self._lessons}
        return {"version": self.version, "learnt_utc": dict(self.learnt_utc), "lessons": lessons}

    def restore(self, kept: Mapping[str, Any], at: Instant) -> None:
        """Take up what `dump` gave; what cannot be read is learnt anew."""
        lessons = kept.get("lessons")
        for lesson in self._lessons:
            notes = lessons.get(lesson.name) if isinstance(lessons, dict) else None
            if isinstance(notes, dict):
                lesson.recall(notes)
        learnt, version = kept.get("learnt_utc"), kept.get("version")
        if isinstance(learnt, dict):
            self.learnt_utc = {k: float(v) for k, v in learnt.items() if isinstance(v, int | float)}
        self.review(at)
        if isinstance(version, int):
            self.version = max(version, 0)
