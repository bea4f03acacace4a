"""Replay: captures through the very pipeline of the daemon, in the captures' own time, as fast as it can.

Owns the reading of capture files and the writing of the four result files. Only these edges differ from `run`.
"""

import gzip
import heapq
import json
from collections import Counter
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import ExitStack
from dataclasses import dataclass, field
from pathlib import Path
from typing import IO

from motekeep.capture import ClimateRecord, FrameRecord, LineRecord, Record, ServiceRecord, parse_line
from motekeep.edges.capture_folder import CaptureFolder
from motekeep.errors import CaptureError
from motekeep.instant import Instant, rfc3339
from motekeep.measure.document import CalibrationDocument
from motekeep.measure.dose import ServiceKind
from motekeep.measure.interval import Climate
from motekeep.message.compose import Place
from motekeep.message.health import SensorAccount
from motekeep.pipeline import Harvest, Pipeline, SensorSetup

HARVEST_EVERY_S = 600.0  # of capture time: keeps memory flat without a call a frame


@dataclass(slots=True)
class Summary:
    """What a replay saw, written as summary.json."""

    first: float | None = None
    last: float | None = None
    frames: Counter[str] = field(default_factory=Counter)
    readings: Counter[str] = field(default_factory=Counter)
    findings: Counter[str] = field(default_factory=Counter)
    unknown_sensors: Counter[str] = field(default_factory=Counter)
    accounts: Mapping[str, SensorAccount] = field(default_factory=dict)

    def as_dict(self) -> dict[str, object]:
        return {
            "schema": "motekeep/summary/1",
            "from": None if self.first is None else rfc3339(self.first),
            "to": None if self.last is None else rfc3339(self.last),
            "bursts": dict(self.frames),
            "readings": dict(self.readings),
            "findings_opened": dict(self.findings),
            "unknown_sensors": dict(self.unknown_sensors),
            "dust_dose_ug": {name: round(account.dust_dose_ug, 3) for name, account in self.accounts.items()},
            "laser_hours": {name: round(account.laser_hours, 3) for name, account in self.accounts.items()},
        }


class Results:
    """The result files while they grow. Hours are kept until the end: an amendment may still change one."""

    def __init__(self, readings: IO[str], findings: IO[str], summary: Summary, captures: CaptureFolder) -> None:
        self._readings = readings
        self._findings = findings
        self._summary = summary
        self._captures = captures
        self._hours: dict[tuple[str, str], str] = {}  # start and sensor to the line; 9,000 a sensor and year

    def write(self, harvest: Harvest) -> None:
        for reading in harvest.readings:
            self._readings.write(reading.json_text() + "\n")
            self._summary.readings[reading.sensor] += 1
        for finding in harvest.findings:
            line = finding.model_dump(mode="json", exclude={"schema_", "remedy", "capture"})
            self._findings.write(json.dumps(line) + "\n")
            if finding.event == "opened":
                self._summary.findings[finding.code] += 1
        for capture in harvest.captures:
            self._captures.keep(capture.name, capture.text)
        for hour in harvest.hours:
            self._hours[hour.start, hour.sensor] = hour.json_text()

    def write_hours(self, path: Path) -> None:
        path.write_text("".join(f"{line}\n" for _, line in sorted(self._hours.items())), encoding="utf-8")


@dataclass(frozen=True, slots=True)
class Plan:
    """What captures are replayed as: the gateway, its sensors, and the calibration documents to read them with."""

    place: Place
    interval_s: int
    sensors: list[SensorSetup]
    documents: Sequence[CalibrationDocument] = ()


def replay(
    captures: list[Path], out: Path, plan: Plan, progress: Callable[[int], None] = lambda _size: None
) -> Summary:
    """Run captures through the pipeline and write readings.ndjson, hourly.ndjson, findings.ndjson and summary.json.

    An hour stands once in hourly.ndjson, as it ended. Lines of several captures are merged by time; within a file time
    must not run backwards. `progress` is told the bytes of text consumed. Raises CaptureError naming file and line.
    """
    summary = Summary()
    names = {s.name for s in plan.sensors}
    out.mkdir(parents=True, exist_ok=True)
    with ExitStack() as stack:
        readings = stack.enter_context((out / "readings.ndjson").open("w", encoding="utf-8"))
        findings = stack.enter_context((out / "findings.ndjson").open("w", encoding="utf-8"))
        results = Results(readings, findings, summary, CaptureFolder(out))
        streams = [_records(stack, path, progress) for path in captures]
        merged = streams[0] if len(streams) == 1 else heapq.merge(*streams, key=lambda r: r.t)
        pipeline: Pipeline | None = None
        harvest_at = at = _instant(0.0)
        for record in merged:
            if record.sensor not in names:
                summary.unknown_sensors[record.sensor] += 1
                continue
            at = _instant(record.t)
            if pipeline is None:
                pipeline = Pipeline(plan.place, plan.interval_s, plan.sensors, at)
                pipeline.resume(dict.fromkeys(names, 1), {}, at)
                for document in plan.documents:
                    pipeline.calibrate(document.sensor, document)
                summary.first, harvest_at = record.t, at
            if isinstance(record, FrameRecord):
                summary.frames[record.sensor] += 1
            _tell(pipeline, record, at)
            if at.boot_s - harvest_at.boot_s >= HARVEST_EVERY_S:
                harvest_at = at
                results.write(pipeline.harvest())
        if pipeline is not None:
            pipeline.finish(at)
            results.write(pipeline.harvest())
            summary.last, summary.accounts = at.utc, pipeline.accounts()
        results.write_hours(out / "hourly.ndjson")
    (out / "summary.json").write_text(json.dumps(summary.as_dict(), indent=1) + "\n", encoding="utf-8")
    return summary


def _tell(pipeline: Pipeline, record: Record, at: Instant) -> None:
    match record:
        case FrameRecord(data=data):
            pipeline.receive(record.sensor, data, at)
        case ClimateRecord(rh_pct=rh_pct, temperature_c=temperature_c):
            pipeline.climate(record.sensor, Climate(rh_pct, temperature_c, "capture"), at)
        case ServiceRecord(kind=kind):
            pipeline.service(record.sensor, ServiceKind(kind), record.t, at)
        case LineRecord(state=state):
            pipeline.line(record.sensor, state, at)


def _instant(t: float) -> Instant:
    """In replay both clocks are the capture's own time, and it is trusted."""
    return Instant(t, t, "replay", trusted=True)


def _records(stack: ExitStack, path: Path, progress: Callable[[int], None]) -> Iterator[Record]:
    try:
        # SIM115: the stack closes it
        opened = gzip.open(path, "rt") if path.suffix == ".gz" else path.open(encoding="ascii")  # noqa: SIM115
        raw = stack.enter_context(opened)
    except OSError as error:
        raise CaptureError(f"opening {path}", str(error), "name a capture file") from error
    return _lines(raw, path.name, progress)


def _lines(lines: IO[str], name: str, progress: Callable[[int], None]) -> Iterator[Record]:
    last, done = 0.0, 0
    try:
        for number, line in enumerate(lines, 1):
            done += len(line)
            if done >= 1 << 20:
                progress(done)
                done = 0
            record = parse_line(line, name, number)
            if record is None:
                continue
            if record.t < last:
                raise CaptureError(
                    f"{name}, line {number}", "time runs backwards", "sort the capture by its first column"
                )
            last = record.t
            yield record
    except (UnicodeDecodeError, EOFError, gzip.BadGzipFile) as error:
        raise CaptureError(name, f"not a capture ({error})", "give a text capture or its .gz") from error
    progress(done)
