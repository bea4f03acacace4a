"""The health document: what is open, on which sensor, and by when the next one is due.

Owns its composition from findings; store and link come as the parts they are published as.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from motekeep.health.finding import Finding
from motekeep.health.verdict import status_of
from motekeep.instant import Instant, rfc3339
from motekeep.message.compose import Place, open_findings
from motekeep.message.documents import CalibrationState, HealthDocument, LinkHealth, SensorHealth, StoreHealth


@dataclass(frozen=True, slots=True)
class Life:
    """This run of the daemon: how many there were, since when (boot seconds), and the version."""

    number: int
    since_s: float
    version: str


@dataclass(frozen=True, slots=True)
class SensorAccount:
    """What a sensor has been through: laser hours, dust drawn through since it was cleaned (ug), and its calibration:
    issue and end of validity (Unix seconds), None without one."""

    laser_hours: float
    dust_dose_ug: float
    calibration: tuple[int, float] | None


def _sensor_health(account: SensorAccount, findings: Sequence[Finding]) -> SensorHealth:
    document: dict[str, object] = {
        "status": status_of(findings),
        "laser_hours": round(account.laser_hours, 1),
        "dust_dose_ug": round(account.dust_dose_ug, 2),
        "findings": open_findings(findings),
    }
    if account.calibration is not None:
        issue, valid_until = account.calibration
        document["calibration"] = CalibrationState(issue=issue, valid_until=rfc3339(valid_until))
    return SensorHealth.model_validate(document)


def health_document(  # noqa: PLR0913 (the parts of one document; a class for them would be the document again)
    place: Place,
    at: Instant,
    next_by_s: float,
    *,
    life: Life,
    findings: Mapping[str | None, Sequence[Finding]],
    sensors: Mapping[str, SensorAccount],
    store: StoreHealth,
    link: LinkHealth,
) -> HealthDocument:
    """Everything open now, by sensor and for the gateway (key None). Overdue after `next_by_s` from now: a retained
    document past that moment is stale, whatever it says."""
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
        sensors={name: _sensor_health(account, findings.get(name, [])) for name, account in sensors.items()},
        findings=open_findings(findings.get(None, [])),
    )
