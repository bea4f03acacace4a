"""From readings and findings to the documents that leave the device.

Owns names, rounding and units of what is published. Knows no sensor state and no store.
"""

from collections.abc import Iterable, Mapping
from dataclasses import dataclass

from motekeep.health.finding import Finding, FindingEvent
from motekeep.instant import rfc3339
from motekeep.measure.interval import Channel
from motekeep.measure.reading import Reading, Value
from motekeep.message.documents import (
    AmendDocument,
    ClimateDocument,
    FindingDocument,
    FramesDocument,
    OpenFinding,
    ProvenanceDocument,
    ReadingDocument,
    ValueDocument,
)


@dataclass(frozen=True, slots=True)
class Place:
    """Where a gateway stands: the two names that every document of it carries."""

    site: str
    gateway: str


def reading_document(reading: Reading, place: Place, seq: int) -> ReadingDocument:
    """The reading as published. Mass to 0.01 ug/m3, counts to 0.1 per dL; a censored count is null."""
    interval = reading.interval
    start = interval.start
    document: dict[str, object] = {
        "schema": "motekeep/reading/1",
        "site": place.site,
        "gateway": place.gateway,
        "sensor": interval.sensor,
        "seq": seq,
        "start": rfc3339(start.utc),
        "seconds": _plain(interval.seconds),
        "clock": "synced" if start.trusted else "unsynced",
        "boot": start.boot_id,
        "boot_s": round(start.boot_s, 1),
        "unit": "ug/m3",
        "k": 1,
        "frames": FramesDocument(good=interval.frames.good, bad=interval.frames.bad, missing=interval.frames.missing),
        "flag": reading.flag,
        "reasons": list(reading.reasons),
    }
    for name, value in reading.values.items():
        document[name] = _value(value)
    if interval.layout is not None and interval.counts:
        sizes = interval.layout.sizes_um
        document["counts_per_dL"] = {
            size_key(size): _count(count) for size, count in zip(sizes, interval.counts, strict=True)
        }
    if interval.climate is not None:
        climate = interval.climate
        document["climate"] = ClimateDocument(
            rh=round(climate.rh_pct, 1),
            t=None if climate.temperature_c is None else round(climate.temperature_c, 1),
        )
    if reading.calibration is not None:
        document["calibration"] = ProvenanceDocument(issue=reading.calibration.issue, digest=reading.calibration.digest)
    return ReadingDocument.model_validate(document)


def size_key(size_um: float) -> str:
    """The key of a count channel: `0.3`, `1.0`, `10`."""
    return f"{size_um:g}" if size_um >= 10 else f"{size_um:.1f}"


def finding_document(event: FindingEvent, capture: str | None = None) -> FindingDocument:
    """A finding as it opens or closes; `capture` names the file of what the sensor said before."""
    finding = event.finding
    document: dict[str, object] = {
        "schema": "motekeep/finding/1",
        "at": rfc3339(event.at),
        "event": "opened" if event.opened else "closed",
        "code": finding.code,
        "category": finding.category.value,
        "since": rfc3339(finding.since),
        "confidence": round(finding.confidence, 3),
        "evidence": finding.evidence,
        "remedy": finding.remedy,
    }
    if finding.sensor is not None:
        document["sensor"] = finding.sensor
    if capture is not None:
        document["capture"] = capture
    return FindingDocument.model_validate(document)


def open_findings(findings: Iterable[Finding]) -> list[OpenFinding]:
    return [
        OpenFinding(
            code=f.code,
            category=f.category.value,
            since=rfc3339(f.since),
            confidence=round(f.confidence, 3),
            evidence=f.evidence,
            remedy=f.remedy,
        )
        for f in findings
    ]


def amend_document(sensor: str, from_utc: float, to_utc: float, flags: Mapping[str, int]) -> AmendDocument:
    """Readings of [from, to) get the worst of `flags` (code to flag) and its codes as reasons."""
    return AmendDocument.model_validate(
        {
            "schema": "motekeep/amend/1",
            "sensor": sensor,
            "from": rfc3339(from_utc),
            "to": rfc3339(to_utc),
            "flag": max(flags.values()),
            "reasons": list(flags),
        }
    )


def _value(value: Value) -> ValueDocument:
    figure = {"raw": _rounded(value.raw), "value": _rounded(value.value), "u": _rounded(value.u)}
    if value.u_random is not None:
        figure["u_random"] = _rounded(value.u_random)
    return ValueDocument.model_validate(figure)


def _rounded(number: float | None) -> float | None:
    return None if number is None else round(number, 2)


def _count(count: Channel) -> float | None:
    return None if count.censored or not count.n else round(count.mean, 1)


def _plain(seconds: float) -> int | float:
    rounded = round(seconds, 1)
    return int(rounded) if rounded.is_integer() else rounded
