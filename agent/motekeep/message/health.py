"""The health document: what is open, on which sensor, and by when the next one is due.

Owns its composition from findings; store and link come as the parts they are published as.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from motekeep.health.finding import Finding
from motekeep.health.verdict import status_of
from motekeep.instant import Instant, rfc3339
from motekeep.message.compose import Place, open_findings
from motekeep.message.documents import HealthDocument, LinkHealth, SensorHealth, StoreHealth


@dataclass(frozen=True, slots=True)
class Life:
    """This run of the daemon: how many there were, since when (boot seconds), and the version."""

    number: int
    since_s: float
    version: str


def health_document(  # noqa: PLR0913 (the parts of one document; a class for them would be the document again)
    place: Place,
    at: Instant,
    next_by_s: float,
    *,
    life: Life,
    findings: Mapping[str | None, Sequence[Finding]],
    store: StoreHealth,
    link: LinkHealth,
) -> HealthDocument:
    """Everything open now, by sensor and for the gateway (key None). Overdue after `next_by_s` from now: a retained
    document past that moment is stale, whatever it says."""
    sensors = {
        name: SensorHealth(status=status_of(open_), findings=open_findings(open_))
        for name, open_ in findings.items()
        if name is not None
    }
    return HealthDocument(
        schema="motekeep/health/1",
        site=place.site,
        gateway=place.gateway,
        status=status_of([f for open_ in findings.values() for f in open_]),
        at=rfc3339(at.utc),
        next_by=rfc3339(at.utc + next_by_s),
        boot=at.boot_id,
        life=life.number,
        version=life.version,
        uptime_s=round(at.boot_s - life.since_s, 1),
        clock="synced" if at.trusted else "unsynced",
        store=store,
        link=link,
        sensors=sensors,
        findings=open_findings(findings.get(None, [])),
    )
