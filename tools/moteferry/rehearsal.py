"""`moteferry rehearse`: what a document would have made of recorded readings, before anybody signs it.

Owns the files and the summary. The rehearsal itself is the device's own (`motekeep.message.rehearsal`), so that
operator and device judge by the same figures. One pass; memory holds a few figures a reading and channel.
"""

import json
import statistics
from array import array
from collections import Counter, deque
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, TextIO

import click
from pydantic import ValidationError

from motekeep.commands.progress import bytes_bar
from motekeep.errors import MotekeepError
from motekeep.measure.document import CalibrationDocument
from motekeep.measure.document_text import parse
from motekeep.message.documents import ReadingDocument
from motekeep.message.rehearsal import Shift, rehearse, shift


class RehearsalError(MotekeepError):
    """The readings cannot be rehearsed on. Exit code 2."""


@dataclass(slots=True)
class Moved:
    """How the figures of one channel moved, ug/m3: value minus raw. `most_at` is the start of the reading of `most`."""

    shifts: "array[float]" = field(default_factory=lambda: array("d"))
    most: float = 0.0
    most_at: str = ""

    def add(self, moved: float, start: str) -> None:
        self.shifts.append(moved)
        if not self.most_at or abs(moved) > abs(self.most):
            self.most, self.most_at = moved, start


@dataclass(slots=True)
class Summary:
    """What came of a rehearsal. `flags` counts (before, after)."""

    readings: int = 0
    others: int = 0
    flags: Counter[tuple[int, int]] = field(default_factory=Counter)
    channels: dict[str, Moved] = field(default_factory=dict)
    source: str = ""

    def add(self, before: ReadingDocument, after: ReadingDocument, channels: Iterator[str]) -> None:
        self.readings += 1
        self.flags[before.flag, after.flag] += 1
        for name in channels:
            figure = getattr(after, name)
            if figure is not None and figure.raw is not None and figure.value is not None and figure.u is not None:
                self.channels.setdefault(name, Moved()).add(figure.value - figure.raw, after.start)

    @property
    def flags_changed(self) -> int:
        return sum(count for (before, after), count in self.flags.items() if before != after)


def rehearsal(path: Path, device: Path, out: Path, sensor: str | None, max_shift: float, *, as_json: bool) -> bool:
    """Write the rehearsed readings and print the summary; whether a device with this `max_shift` would let it pass.

    Raises DocumentError, RehearsalError.
    """
    document = parse(path.read_bytes())
    summary = Summary()
    part = out.with_name(out.name + ".part")
    try:
        with part.open("w", encoding="utf-8") as sink, bytes_bar("rehearsing", [device]) as advance:
            moved = shift(document, _through(document, device, sensor, sink, summary, advance))
        if not summary.readings:
            wanted = f" of sensor {sensor!r}" if sensor else ""
            raise RehearsalError(f"reading {device}", f"it holds no reading{wanted}", "look at --device and --sensor")
        part.replace(out)
    finally:
        part.unlink(missing_ok=True)
    if as_json:
        click.echo(json.dumps(_json(document, summary, moved, max_shift), indent=1))
    else:
        _print(document, summary, moved, max_shift)
    return moved.judged > 0 and moved.most <= max_shift


def _through(
    document: CalibrationDocument,
    device: Path,
    sensor: str | None,
    sink: TextIO,
    summary: Summary,
    advance: Callable[[int], None],
) -> Iterator[ReadingDocument]:
    """The rehearsed readings, each written and counted on its way past. `rehearse` gives one for one, in order."""
    before: deque[ReadingDocument] = deque()

    def kept() -> Iterator[ReadingDocument]:
        for reading in _readings(device, sensor, summary, advance):
            before.append(reading)
            yield reading

    for after in rehearse(document, kept()):
        summary.add(before.popleft(), after, iter(document.residual))
        sink.write(after.json_text() + "\n")
        yield after


def _readings(
    device: Path, sensor: str | None, summary: Summary, advance: Callable[[int], None]
) -> Iterator[ReadingDocument]:
    """Of one sensor. A file that holds more than one needs to be told which: to mix them would say nothing."""
    with device.open("rb") as lines:
        for number, line in enumerate(lines, 1):
            advance(len(line))
            if not line.strip():
                continue
            try:
                reading = ReadingDocument.model_validate_json(line)
            except ValidationError as error:
                first = error.errors()[0]
                key = ".".join(str(part) for part in first["loc"]) or "the line"
                raise RehearsalError(
                    f"reading {device}, line {number}",
                    f"{key}: {first['msg']}",
                    "it takes readings as motekeep made them",
                ) from error
            if sensor is not None and reading.sensor != sensor:
                summary.others += 1
                continue
            source = f"{reading.site}/{reading.gateway}/{reading.sensor}"
            if summary.source and source != summary.source:
                raise RehearsalError(
                    f"reading {device}, line {number}",
                    f"it holds readings of {summary.source} and of {source}",
                    "name one with --sensor",
                )
            summary.source = source
            yield reading


def _print(document: CalibrationDocument, summary: Summary, moved: Shift, max_shift: float) -> None:
    target = f"{document.site}/{document.gateway}/{document.sensor}"
    click.echo(f"issue {document.issue} for {target} on {summary.readings} readings of {summary.source}")
    if summary.source != target:
        click.echo("  these are not readings of the sensor that the document is for")
    for name, channel in summary.channels.items():
        median = statistics.median(channel.shifts)
        most = f"at most {channel.most:+.1f} at {channel.most_at}"
        click.echo(f"  {name:<6} median shift {median:+.2f} ug/m3, {most}; {len(channel.shifts)} corrected")
    for name, move in moved.moves.items():
        click.echo(f"  {name:<6} moves by {move.typical:.0%} typically, its mean by {move.mean:.0%}")
    changes = ", ".join(f"{b} to {a}: {n}" for (b, a), n in sorted(summary.flags.items()) if a != b)
    click.echo(f"  flags changed: {summary.flags_changed} of {summary.readings}" + (f" ({changes})" if changes else ""))
    if not moved.judged:
        click.echo("  no reading could be judged: nothing is known of what the document does")
    elif moved.most > max_shift:
        click.echo(f"  it moves readings by {moved.most:.0%}: a device with max_shift {max_shift:g} refuses it")


def _json(document: CalibrationDocument, summary: Summary, moved: Shift, max_shift: float) -> dict[str, Any]:
    return {
        "issue": document.issue,
        "digest": document.digest,
        "readings": summary.readings,
        "source": summary.source,
        "flags_changed": summary.flags_changed,
        "flags": [{"before": b, "after": a, "readings": n} for (b, a), n in sorted(summary.flags.items())],
        "channels": {
            name: {
                "median_shift": round(statistics.median(channel.shifts), 3),
                "most_shift": round(channel.most, 3),
                "most_at": channel.most_at,
                "corrected": len(channel.shifts),
            }
            for name, channel in summary.channels.items()
        },
        "moves": {name: {"typical": round(m.typical, 4), "mean": round(m.mean, 4)} for name, m in moved.moves.items()},
        "max_shift": max_shift,
        "within": moved.judged > 0 and moved.most <= max_shift,
    }
