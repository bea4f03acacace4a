"""The record of the reference: `start,seconds,<channel>` and optionally `u`, one line a sampling.

Owns the reading of it and its refusals. Must not know the device.

`u` is the combined standard uncertainty that the instrument states for one sampling, k = 1, in ug/m3. It does not say
which part of it is drawn anew each time and which is the same all along (a wrong flow, a wrong filter constant), and
only the first shows in a comparison. `random` is the share of its variance that is taken to be of the first kind.
"""

import csv
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path

import numpy as np

from moteferry.fit.record import Floats, RecordError, check_columns, number_of, utc_of

# Common practice, no source: in means of an hour the noise of a monitor is larger than what it is off by all along. For
# filters of a day the second is: state less then.
RANDOM_SHARE = 0.75

# Instruments print a little below zero in clean air, and leaving that out would bend the fit upwards there. Further
# below than this many of its own u it is a fault.
NEGATIVE_U = 3.0

LONGEST_S = 7 * 86_400.0  # a weekly filter


@dataclass(frozen=True, slots=True)
class ReferenceRecord:
    """Samplings in order of time: start in Unix seconds, length in s, ug/m3, and the random and the common part of u.

    Both parts are zero where none is stated; `stated` tells. `negative` counts figures below zero that were kept.
    """

    start: Floats
    seconds: Floats
    value: Floats
    u_random: Floats
    u_common: Floats
    stated: bool
    negative: int


def read_reference(path: Path, channel: str = "pm2_5", random: float = RANDOM_SHARE) -> ReferenceRecord:
    """Read a record. An empty figure is a gap. Raises RecordError naming file and line, OSError on a bad path."""
    rows: list[tuple[float, float, float, float | None, int]] = []
    with path.open(encoding="utf-8-sig", newline="") as file:
        reader = csv.DictReader(file)
        try:
            if not reader.fieldnames:
                raise RecordError(
                    path.name, "is empty", f"its first line is start,seconds,{channel} or ...,{channel},u"
                )
            needed = ("start", "seconds", channel)
            check_columns(reader.fieldnames, needed, (*needed, "u"), f"{path.name}, line 1")
            for cells in reader:
                where = f"{path.name}, line {reader.line_num}"
                if None in cells or None in cells.values():
                    raise RecordError(where, "has more or fewer cells than the first line", "mend or remove the line")
                if not cells[channel].strip():
                    continue
                rows.append(_row(cells, channel, where, reader.line_num))
        except (UnicodeDecodeError, csv.Error) as error:
            raise RecordError(path.name, f"is no CSV in UTF-8 ({error})", "save it as plain CSV") from error
    if not rows:
        raise RecordError(path.name, "has no figures", f"give lines of start,seconds,{channel}")
    _check_order(rows, path.name)
    return _record(rows, path.name, random)


def _row(cells: dict[str, str], channel: str, where: str, line: int) -> tuple[float, float, float, float | None, int]:
    seconds = number_of(cells["seconds"], where, "seconds")
    if not 0.0 < seconds <= LONGEST_S:
        raise RecordError(where, f"lasts {seconds:g} s", f"more than 0 and at most {LONGEST_S:.0f} s are possible")
    u = None
    if cells.get("u"):
        u = number_of(cells["u"], where, "u")
        if u <= 0.0:
            raise RecordError(where, f"u is {u:g}", "state a standard uncertainty above 0 or leave the column out")
    return utc_of(cells["start"], where), seconds, number_of(cells[channel], where, channel), u, line


def _check_order(rows: list[tuple[float, float, float, float | None, int]], name: str) -> None:
    for (start, seconds, *_), (following, *_, line) in pairwise(rows):
        where = f"{name}, line {line}"
        if following == start:
            raise RecordError(where, "has the start of the line before", "leave one of both")
        if following < start:
            raise RecordError(where, "starts before the line above it", "sort the record by start")
        if following < start + seconds - 1e-3:
            raise RecordError(where, "starts before the line above it has ended", "mend start or seconds")


def _record(rows: list[tuple[float, float, float, float | None, int]], name: str, random: float) -> ReferenceRecord:
    start, seconds, value = (np.array(column, dtype=np.float64) for column in list(zip(*rows, strict=True))[:3])
    stated = [u for *_, u, _ in rows if u is not None]
    if stated and len(stated) != len(rows):
        line = next(line for *_, u, line in rows if u is None)
        raise RecordError(f"{name}, line {line}", "states no u where other lines do", "state it everywhere or nowhere")
    u = np.array(stated or [0.0] * len(rows), dtype=np.float64)
    below = value < -NEGATIVE_U * u
    if below.any():
        first = int(np.argmax(below))
        noise = f"further below zero than {NEGATIVE_U:g} u" if stated else "and no u says that this is noise"
        raise RecordError(
            f"{name}, line {rows[first][-1]}", f"a figure is negative ({value[first]:g}), {noise}", "mend the record"
        )
    return ReferenceRecord(
        start,
        seconds,
        value,
        u * np.sqrt(random),
        u * np.sqrt(1.0 - random),
        bool(stated),
        int((value < 0.0).sum()),
    )
