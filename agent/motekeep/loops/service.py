"""Takes up what people enter with `motekeep service add`: from the spool to pipeline and journal.

Owns the pace and that a record counts once. Has no thread: the supervisor turns it, before the recorder.

    waiting -- not in the journal ----> given to the pipeline, which the recorder commits with what it changes
            -- in the journal --------> removed from the spool
            -- cannot be used --------> refused, once, and kept aside

So a crash at any moment either leaves the file, or the record in the journal, or both; never neither, and never two.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Protocol

import structlog

from motekeep.errors import ServiceError
from motekeep.instant import Instant, from_rfc3339, rfc3339
from motekeep.loops.intake import Intake
from motekeep.message.compose import Place
from motekeep.message.documents import ServiceDocument

log = structlog.get_logger()

LOOK_EVERY_S = 2.0  # whoever enters a record sees it taken up before they have closed the case


class ServiceInbox(Protocol):
    """The spool as `edges/service_spool.py` keeps it."""

    def waiting(self) -> list[str]: ...

    def read(self, name: str) -> ServiceDocument: ...

    def remove(self, names: Sequence[str]) -> None: ...

    def refuse(self, name: str) -> None: ...


@dataclass(frozen=True, slots=True)
class ServiceFeedSettings:
    place: Place
    sensors: Sequence[str]


class ServiceFeed:
    """`durable` says whether the journal has a record of this id; None while there is no journal."""

    def __init__(
        self,
        settings: ServiceFeedSettings,
        inbox: ServiceInbox,
        intake: Intake,
        durable: Callable[[str], bool | None],
    ) -> None:
        self._settings = settings
        self._inbox = inbox
        self._intake = intake
        self._durable = durable
        self._due = float("-inf")
        self._given: dict[str, str] = {}  # id by file name, of those given and still in the spool; bounded by one look

    def turn(self, at: Instant) -> None:
        if at.boot_s < self._due:
            return
        self._due = at.boot_s + LOOK_EVERY_S
        waiting = self._inbox.waiting()
        self._given = {name: id_ for name, id_ in self._given.items() if name in waiting}
        for name in waiting:
            self._take(name, at)

    def _take(self, name: str, at: Instant) -> None:
        try:
            id_ = self._given.get(name)
            record = None if id_ else self._checked(name)
        except FileNotFoundError:
            return  # whoever entered it took it back
        except ServiceError as error:
            log.error("service.refused", error=str(error))
            self._inbox.refuse(name)
            return
        durable = self._durable(id_ or (record.id if record else ""))
        if durable is None:
            return  # without a journal there is nowhere to take it to; it waits where it is
        if durable:
            self._inbox.remove([name])
            return
        if record is not None:
            record = dated(record, at)
            self._given[name] = record.id
            self._intake.service(record, at)
            log.info("service.recorded", sensor=record.sensor, kind=record.kind, at=record.at, clock=record.clock)

    def _checked(self, name: str) -> ServiceDocument:
        record = self._inbox.read(name)
        place = self._settings.place
        attempted = f"taking up service record {record.id}"
        if (record.site, record.gateway) != (place.site, place.gateway):
            why = f"it is for {record.site}/{record.gateway}, not for {place.site}/{place.gateway}"
            raise ServiceError(attempted, why, "enter it at that gateway")
        if record.sensor not in self._settings.sensors:
            raise ServiceError(attempted, f"there is no sensor {record.sensor!r}", "enter it under a name in use")
        return record


def dated(record: ServiceDocument, at: Instant) -> ServiceDocument:
    """With its times by the clock of `at`, where they were read off a clock that nobody vouched for in this boot."""
    if record.clock != "unsynced" or record.boot != at.boot_id:
        return record
    moved_s = record.boot_s + at.offset - from_rfc3339(record.entered)
    return record.model_copy(
        update={
            "at": rfc3339(from_rfc3339(record.at) + moved_s),
            "entered": rfc3339(from_rfc3339(record.entered) + moved_s),
            "clock": "corrected" if at.trusted else "unsynced",
        }
    )
