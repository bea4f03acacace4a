"""The record of the sensor: stored readings, as newline-delimited JSON or as the CSV that `motekeep export` writes.

Owns which readings count as a measurement of the air, and their raw figures. Must not know the reference.

Left out, and counted by cause: readings that failed or are missing, readings with a censored count or a clipped mass
(their mean is only a lower bound), readings without a raw figure, and readings whose time nobody vouched for. A reading
that was suspect stays: what made it so may have been the very correction that is to be replaced.
"""

import csv
from collections import Counter
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field
from itertools import chain
from pathlib import Path
from typing import IO

import numpy as np
from pydantic import ValidationError

from moteferry.fit.record import Floats, RecordError, check_columns, number_of, utc_of
from motekeep.commands.export import HEAD, SIZES_UM, TAIL
from motekeep.measure.document import CHANNELS
from motekeep.measure.hourly import CENSORING
from motekeep.measure.reading import FAIL, MISSING
from motekeep.message.compose import size_key
from motekeep.message.documents import ReadingDocument, ValueDocument

NEEDED = ("site", "gateway", "sensor", "start", "seconds", "flag")
KNOWN = (
    *HEAD,
    *(f"{channel}{part}" for channel in CHANNELS for part in ("", "_u", "_raw", "_from_counts")),
    *(f"count_{size_key(size)}_per_dL" for size in SIZES_UM),
    *TAIL,
)
# Clocks by which a reading cannot be laid beside an hour of the reference.
VAGUE_CLOCKS = frozenset({"unsynced", "bounded"})
EVERY_LINES = 2000  # between two calls of `told`


@dataclass(frozen=True, slots=True)
class DeviceRecord:
    """Usable readings of one sensor in order of time, arrays of one length.

    `start` is Unix seconds; `measured_s` the length times the share of good frames; `raw` in ug/m3; `rh` in % and `t`
    in degC are NaN where they were not measured. `asleep` holds (start, seconds) of the spans slept by duty, which are
    not due. `left_out` counts readings by the cause for which they are not here.
    """

    site: str
    gateway: str
    sensor: str
    channel: str
    start: Floats
    seconds: Floats
    measured_s: Floats
    raw: Floats
    rh: Floats
    t: Floats
    asleep: Floats
    left_out: Mapping[str, int]


@dataclass(frozen=True, slots=True)
class Row:
    """One reading as either form states it. `where` names file and line."""

    where: str
    place: tuple[str, str, str]
    start: float
    seconds: float
    clock: str
    raw: float | None
    rh: float | None
    t: float | None
    good: float
    due: float
    flag: int
    reasons: tuple[str, ...]


@dataclass(slots=True)
class Gathered:
    """What was read so far. Readings are keyed by their start: a later line of the same start takes its place."""

    rows: dict[float, Row] = field(default_factory=dict)
    asleep: dict[float, float] = field(default_factory=dict)
    left_out: Counter[str] = field(default_factory=Counter)


def read_device(
    path: Path, channel: str = "pm2_5", sensor: str | None = None, told: Callable[[int], None] = lambda _size: None
) -> DeviceRecord:
    """Read a record. `sensor` picks one where there are several; `told` gets the characters read, now and then.

    Raises RecordError naming file and line, OSError where the file cannot be opened.
    """
    gathered, places = Gathered(), set()
    with path.open(encoding="utf-8-sig", newline="") as file:
        try:
            for row in _rows(file, path.name, channel, told):
                if sensor is not None and row.place[2] != sensor:
                    places.add(row.place)
                    continue
                places.add(row.place)
                _take(row, gathered)
        except UnicodeDecodeError as error:
            raise RecordError(path.name, "is not text in UTF-8", "give readings.ndjson or an exported csv") from error
    place = _one_place(places, sensor, path.name)
    return _record(place, channel, gathered, path.name)


def _one_place(places: set[tuple[str, str, str]], sensor: str | None, name: str) -> tuple[str, str, str]:
    mine = sorted(p for p in places if sensor in (None, p[2]))
    if not places:
        raise RecordError(name, "has no readings", "export the days beside the reference again")
    if not mine:
        known = ", ".join(sorted({p[2] for p in places}))
        raise RecordError(name, f"has no reading of sensor {sensor!r}", f"there are {known}")
    if len({p[:2] for p in mine}) > 1:
        listed = ", ".join(sorted({"/".join(p[:2]) for p in mine}))
        raise RecordError(name, f"mixes gateways ({listed})", "a document is for one gateway: split the file")
    if len(mine) > 1:
        raise RecordError(name, f"holds sensors {', '.join(p[2] for p in mine)}", "pick one with --sensor")
    return mine[0]


def _record(place: tuple[str, str, str], channel: str, gathered: Gathered, name: str) -> DeviceRecord:
    rows = [gathered.rows[start] for start in sorted(gathered.rows)]
    if not rows:
        causes = ", ".join(f"{n} {cause}" for cause, n in gathered.left_out.most_common())
        raise RecordError(name, f"no reading can be used ({causes})", "look at the flags and reasons of the readings")

    def column(values: Iterator[float | None]) -> Floats:
        return np.array([np.nan if value is None else value for value in values], dtype=np.float64)

    return DeviceRecord(
        *place,
        channel=channel,
        start=column(r.start for r in rows),
        seconds=column(r.seconds for r in rows),
        measured_s=column(r.seconds * r.good / r.due if r.due else 0.0 for r in rows),
        raw=column(r.raw for r in rows),
        rh=column(r.rh for r in rows),
        t=column(r.t for r in rows),
        asleep=np.array(sorted(gathered.asleep.items()), dtype=np.float64).reshape(-1, 2),
        left_out=dict(gathered.left_out),
    )


def _take(row: Row, gathered: Gathered) -> None:
    cause = _unusable(row)
    if cause is None:
        gathered.rows[row.start] = row
        return
    gathered.left_out[cause] += 1
    if "asleep" in row.reasons:
        gathered.asleep[row.start] = row.seconds


def _unusable(row: Row) -> str | None:
    if row.flag in (FAIL, MISSING):
        return "failed or missing"
    if not CENSORING.isdisjoint(row.reasons):
        return "saturated"
    if row.clock in VAGUE_CLOCKS:
        return "without a sure time"
    if row.raw is None:
        return "without a raw figure"
    if row.raw < 0.0:
        raise RecordError(row.where, f"a raw figure is negative ({row.raw:g})", "no sensor prints that: mend the file")
    return None


def _rows(file: IO[str], name: str, channel: str, told: Callable[[int], None]) -> Iterator[Row]:
    first = file.readline()
    if not first.strip():
        raise RecordError(name, "is empty", "export the days beside the reference again")
    lines = _told(chain([first], file), told)
    if first.lstrip().startswith("{"):
        yield from _ndjson(lines, name, channel)
    else:
        yield from _csv(lines, name, channel)


def _told(lines: Iterator[str], told: Callable[[int], None]) -> Iterator[str]:
    size = 0
    for number, line in enumerate(lines, 1):
        size += len(line)
        if number % EVERY_LINES == 0:
            told(size)
            size = 0
        yield line
    told(size)


def _ndjson(lines: Iterator[str], name: str, channel: str) -> Iterator[Row]:
    for number, line in enumerate(lines, 1):
        if not line.strip():
            continue
        where = f"{name}, line {number}"
        try:
            reading = ReadingDocument.model_validate_json(line)
        except ValidationError as error:
            first = error.errors(include_url=False)[0]
            key = ".".join(map(str, first["loc"])) or "<line>"
            raise RecordError(where, f"is no reading ({key}: {first['msg']})", "give readings only") from error
        figure: ValueDocument | None = getattr(reading, channel)
        frames, climate = reading.frames, reading.climate
        yield Row(
            where,
            (reading.site, reading.gateway, reading.sensor),
            utc_of(reading.start, where),
            float(reading.seconds),
            reading.clock,
            None if figure is None else figure.raw,
            None if climate is None else climate.rh,
            None if climate is None else climate.t,
            frames.good,
            frames.good + frames.bad + frames.missing,
            reading.flag,
            tuple(reading.reasons),
        )


def _csv(lines: Iterator[str], name: str, channel: str) -> Iterator[Row]:
    reader = csv.DictReader(lines)
    check_columns(reader.fieldnames, (*NEEDED, f"{channel}_raw"), KNOWN, f"{name}, line 1")
    for cells in reader:
        where = f"{name}, line {reader.line_num}"
        if None in cells or None in cells.values():
            raise RecordError(where, "has more or fewer cells than the first line", "mend or remove the line")
        yield _csv_row(cells, where, channel)


def _csv_row(cells: Mapping[str, str], where: str, channel: str) -> Row:
    def optional(column: str) -> float | None:
        text = cells.get(column)
        return number_of(text, where, column) if text else None

    good, bad, missing = (optional(f"frames_{kind}") for kind in ("good", "bad", "missing"))
    return Row(
        where,
        (cells["site"], cells["gateway"], cells["sensor"]),
        utc_of(cells["start"], where),
        number_of(cells["seconds"], where, "seconds"),
        cells.get("clock", "synced"),
        optional(f"{channel}_raw"),
        optional("rh"),
        optional("t"),
        1.0 if good is None else good,
        1.0 if good is None else good + (bad or 0.0) + (missing or 0.0),
        int(number_of(cells["flag"], where, "flag")),
        tuple(cells.get("reasons", "").split()),
    )
