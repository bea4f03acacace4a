"""`export`: readings of the journal as CSV, CSV with CF names, NDJSON or SenML.

Owns the columns of the plain CSV. Streams: memory does not grow with the range.
"""

import csv
import sys
from collections.abc import Iterable, Iterator, Mapping
from contextlib import ExitStack
from pathlib import Path
from typing import IO

import click

from motekeep.config import Config
from motekeep.edges.journal_view import JournalView
from motekeep.errors import ConfigError, StoreError
from motekeep.instant import from_rfc3339
from motekeep.measure.amendment import Amendments
from motekeep.measure.closure import mass_from_counts
from motekeep.measure.document import CHANNELS
from motekeep.message import cf, senml
from motekeep.message.compose import size_key
from motekeep.message.documents import ReadingDocument, ValueDocument
from motekeep.pipeline import amendments_name

SIZES_UM = (0.3, 0.5, 1.0, 2.5, 4.0, 5.0, 10.0)  # of all dialects; a column stays empty where a sensor has no such size
HEAD = ("site", "gateway", "sensor", "seq", "from_seq", "start", "seconds", "clock")
TAIL = ("rh", "t", "frames_good", "frames_bad", "frames_missing", "calibration_issue", "flag", "reasons")


def export(config: Config, span: tuple[str, str], form: str, sensors: tuple[str, ...], out: Path | None) -> None:
    """Write all readings that start in the span. Raises ConfigError for a bad time or sensor, StoreError otherwise."""
    from_utc, to_utc = (_time(text, option) for text, option in zip(span, ("--from", "--to"), strict=True))
    for name in sensors:
        if config.sensor_named(name) is None:
            raise ConfigError(
                "--sensor", f"no sensor {name!r}", f"known are {', '.join(s.name for s in config.sensor)}"
            )
    with ExitStack() as stack:
        view = stack.enter_context(JournalView(config.store.path))
        try:
            file = sys.stdout if out is None else stack.enter_context(out.open("w", encoding="utf-8", newline=""))
        except OSError as error:
            raise ConfigError(f"writing {out}", str(error), "name a file in a folder that exists") from error
        stored = _stored(view, from_utc, to_utc, sensors)
        WRITERS[form](stored, file)


def _time(text: str, option: str) -> float:
    try:
        return from_rfc3339(text)
    except ValueError as error:
        raise ConfigError(option, str(error), "write it like 2026-12-01T09:15:00Z") from error


def _stored(view: JournalView, from_utc: float, to_utc: float, sensors: tuple[str, ...]) -> Iterator[ReadingDocument]:
    """The readings with what was found out about them later."""
    wanted = set(sensors)
    amendments = {s.sensor: _amendments(view, s.sensor) for s in view.sensors()}
    for reading in view.readings(from_utc, to_utc):
        if wanted and reading.sensor not in wanted:
            continue
        document = ReadingDocument.model_validate_json(reading.body)
        reasons = tuple(document.reasons)
        flag, amended = amendments[reading.sensor].amended(reading.start, document.flag, reasons)
        if (flag, amended) != (document.flag, reasons):
            document = document.model_copy(update={"flag": flag, "reasons": list(amended)})
        yield document


def _amendments(view: JournalView, sensor: str) -> Amendments:
    try:
        return Amendments.restored(view.kept(amendments_name(sensor)) or "[]")
    except ValueError as error:
        raise StoreError(f"reading the amendments of {sensor}", str(error), "keep the file for an expert") from error


def _ndjson(stored: Iterable[ReadingDocument], file: IO[str]) -> None:
    for document in stored:
        file.write(document.json_text() + "\n")


def _csv(stored: Iterable[ReadingDocument], file: IO[str]) -> None:
    masses = [f"{channel}{part}" for channel in CHANNELS for part in ("", "_u", "_raw", "_from_counts")]
    counts = [f"count_{size_key(size)}_per_dL" for size in SIZES_UM]
    writer = csv.DictWriter(file, [*HEAD, *masses, *counts, *TAIL])
    writer.writeheader()
    for document in stored:
        writer.writerow(_row(document))


def _row(document: ReadingDocument) -> Mapping[str, object]:
    row: dict[str, object] = document.model_dump(include=set(HEAD))
    by_count = _closure(document)
    for channel in CHANNELS:
        value: ValueDocument | None = getattr(document, channel)
        if value is not None:
            row |= {channel: value.value, f"{channel}_u": value.u, f"{channel}_raw": value.raw}
        if channel in by_count:
            row[f"{channel}_from_counts"] = round(by_count[channel], 2)
    for size, count in (document.counts_per_dL or {}).items():
        row[f"count_{size}_per_dL"] = count
    if document.climate is not None:
        row |= {"rh": document.climate.rh, "t": document.climate.t}
    if document.calibration is not None:
        row["calibration_issue"] = document.calibration.issue
    frames = document.frames
    row |= {"frames_good": frames.good, "frames_bad": frames.bad, "frames_missing": frames.missing}
    return row | {"flag": document.flag, "reasons": " ".join(document.reasons)}


def _closure(document: ReadingDocument) -> dict[str, float]:
    """The independent mass from the counts; what it assumes stands in `measure/closure.py`."""
    counts = document.counts_per_dL
    if not counts:
        return {}
    masses = mass_from_counts([float(size) for size in counts], list(counts.values()))
    return {channel: mass.mass for channel, mass in masses.items()}


def _cf(stored: Iterable[ReadingDocument], file: IO[str]) -> None:
    columns = cf.columns(SIZES_UM)
    writer = csv.writer(file)
    writer.writerow([column.header for column in columns])
    for document in stored:
        cells = cf.row(document)
        writer.writerow([cells.get(column.key) for column in columns])


def _senml(stored: Iterable[ReadingDocument], file: IO[str]) -> None:
    """One pack, written as it grows. A time before 1978 cannot be told from a relative one in SenML: left out, told."""
    undated = 0
    separator = "["
    for document in stored:
        pack = senml.pack([document])
        if pack == "[]":
            undated += 1
            continue
        file.write(separator + pack[1:-1])
        separator = ","
    file.write("]\n" if separator == "," else "[]\n")
    if undated:
        click.echo(f"motekeep: {undated} readings without a usable date left out", err=True)


WRITERS = {"csv": _csv, "cf": _cf, "ndjson": _ndjson, "senml": _senml}
