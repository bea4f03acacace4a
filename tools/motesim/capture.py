"""Captures of an emulated site: raw frames as text, with the truth and a reference instrument beside them.

Owns the files that a scenario becomes. Must not know ports. The capture format is the one that `motekeep replay` reads:
`T SENSOR frame HEX`, `T SENSOR climate RH TEMP`, `T SENSOR service KIND`, `T SENSOR line asleep|awake`, `#` before a
comment; T is Unix seconds.
"""

import gzip
import json
from bisect import bisect_left
from collections.abc import Callable, Iterator, Sequence
from contextlib import ExitStack, contextmanager
from dataclasses import asdict, dataclass, replace
from pathlib import Path
from typing import TextIO

import numpy as np

from motekeep.instant import rfc3339
from motesim.aerosol import Floats
from motesim.air import AirPlan
from motesim.events import Event
from motesim.faults import Fault
from motesim.plan import Probe, SensorPlan, SitePlan
from motesim.relaxation import generators
from motesim.site import Block, SensorCourse, Site, truths, turns

# zlib level 1 costs a quarter of the time of the default and a tenth more bytes on these lines
_GZIP_LEVEL = 1
HOUR_S = 3600.0


@dataclass(frozen=True, slots=True)
class Reference:
    """A reference instrument beside the sensors: dry PM2.5 by the hour, with the errors it really has.

    `gain_u` is relative and drawn once, `noise_u` in ug/m3 and `relative_u` are drawn by the hour.
    """

    gain_u: float = 0.02
    noise_u: float = 0.4
    relative_u: float = 0.03

    def u(self, value: Floats) -> Floats:
        """The standard uncertainty it would state, ug/m3."""
        return np.sqrt(self.noise_u**2 + (self.relative_u**2 + self.gain_u**2) * value**2)


Told = Callable[[float, int], None]


def write_capture(
    plan: SitePlan,
    out: Path,
    *,
    truth: Path | None = None,
    reference: Path | None = None,
    told: Told | None = None,
) -> int:
    """Write the whole scenario as fast as it goes; returns the number of frames.

    `truth` becomes lines of JSON, one an interval of 60 s and sensor (fields of `site.Truth`); `reference` a CSV with
    the header `start,seconds,pm2_5,u`. `told(share, frames)` is called after every stretch of some hours.
    """
    site = Site(plan)
    courses = site.courses()
    with ExitStack() as stack:
        text = stack.enter_context(_opened(out))
        true = stack.enter_context(_opened(truth)) if truth else None
        text.write(f"# emulated: {plan.name}, seed {plan.seed}, from {rfc3339(plan.start)}, {plan.seconds:.0f} s\n")
        hours, lines = _Hours(), _Lines()
        for air in site.air():
            blocks = [(course, block) for course in courses if (block := course.block(air)) is not None]
            text.writelines(lines.until(float(air.times[-1]), blocks))
            hours.add(air.times[:-1], air.dry_masses()[1, :-1])
            if true is not None:
                true.writelines(_truth_line(course, block) for course, block in blocks)
            if told is not None:
                told(min((float(air.times[-1]) - plan.start) / plan.seconds, 1.0), lines.frames)
        text.writelines(lines.rest())
        if reference is not None:
            stack.enter_context(_opened(reference)).writelines(hours.csv(plan, Reference()))
    return lines.frames


def capture_lines(plan: SitePlan) -> Iterator[str]:
    """The lines of a capture without a file, each with its line end."""
    site = Site(plan)
    courses = site.courses()
    lines = _Lines()
    for air in site.air():
        blocks = [(course, block) for course in courses if (block := course.block(air)) is not None]
        yield from lines.until(float(air.times[-1]), blocks)
    yield from lines.rest()


def emulated_capture(  # noqa: PLR0913 # each is one keyword of a test; a record of them would be SitePlan
    out: Path,
    *,
    seconds: float = 3600.0,
    dialect: str = "bm",
    seed: int = 1,
    start: float = 1_796_083_200.0,
    period_s: float = 1.0,
    sensors: Sequence[str] = ("north",),
    faults: Sequence[Fault] = (),
    events: Sequence[Event] = (),
    air: AirPlan | None = None,
    probe: Probe | None = None,
    truth: Path | None = None,
) -> int:
    """The quick way for tests: one capture of sensors that are twins; `faults` are laid on the first of them.

    Returns the number of frames. Times of faults and events are Unix seconds, as `start` is.
    """
    base = SensorPlan(name="", dialect=dialect, period_s=period_s, probe=probe)
    plans = [
        replace(base, name=name, seed=1000 * seed + index, faults=tuple(faults) if index == 0 else ())
        for index, name in enumerate(sensors)
    ]
    site = SitePlan("emulated", seed, start, seconds, tuple(plans), air or AirPlan(), tuple(events))
    return write_capture(site, out, truth=truth)


class _Lines:
    """The lines of all sensors in order of time. What falls just behind a stretch waits for the next one."""

    def __init__(self) -> None:
        self.frames = 0
        self._waiting: list[tuple[float, str]] = []  # a few of each sensor

    def until(self, end: float, blocks: list[tuple[SensorCourse, Block]]) -> list[str]:
        """The lines before `end`, with one more stretch."""
        entries = self._waiting
        for course, block in blocks:
            head = f" {course.plan.name} frame "
            spoken = course.line.speak(block.printed)
            self.frames += len(spoken)
            entries += [(at, f"{at:.3f}{head}{data.hex()}\n") for at, data in spoken]
            entries += _beside(course, block)
        entries.sort()
        split = bisect_left(entries, (end, ""))
        self._waiting = entries[split:]
        return [line for _, line in entries[:split]]

    def rest(self) -> list[str]:
        return [line for _, line in self._waiting]


def _beside(course: SensorCourse, block: Block) -> Iterator[tuple[float, str]]:
    """What stands in the capture beside the frames: the probe, the service records, sleep and wake."""
    name, probe, state = course.plan.name, course.plan.probe, block.state
    first, last = float(state.times[0]), float(state.times[-1])
    if probe is not None:
        slots = np.flatnonzero(np.diff(np.floor(state.times / probe.every_s), prepend=-1.0) > 0)
        for index in slots.tolist():
            rh = min(max(float(state.rh[index]) + probe.rh_error, 0.0), 100.0)
            temperature = float(state.temperature[index]) + probe.temperature_error
            at = float(state.times[index])
            yield at, f"{at:.3f} {name} climate {rh:.1f} {temperature:.1f}\n"
    for service in course.plan.services:
        if first <= service.at < last + course.plan.period_s:
            yield service.at, f"{service.at:.3f} {name} service {service.kind}\n"
    for at, turned in turns(block):
        yield at, f"{at:.3f} {name} line {turned}\n"


def _truth_line(course: SensorCourse, block: Block) -> str:
    rows = []
    for truth in truths(block, course.faults):
        row = asdict(truth)
        for key, value in row.items():
            if isinstance(value, float) and key not in ("start", "seconds"):
                row[key] = round(value, 4)
        for key in ("dry", "wet"):
            row[key] = dict(zip(("pm1", "pm2_5", "pm10"), (round(v, 4) for v in row[key]), strict=True))
        rows.append(json.dumps(row, separators=(",", ":")) + "\n")
    return "".join(rows)


class _Hours:
    """Sums of the true dry PM2.5 by the hour; 24 numbers a day is what it holds."""

    def __init__(self) -> None:
        self._sums: dict[float, list[float]] = {}

    def add(self, times: Floats, pm2_5: Floats) -> None:
        hours = np.floor(times / HOUR_S) * HOUR_S
        for hour in np.unique(hours).tolist():
            inside = hours == hour
            entry = self._sums.setdefault(hour, [0.0, 0.0])
            entry[0] += float(pm2_5[inside].sum())
            entry[1] += float(inside.sum())

    def csv(self, plan: SitePlan, instrument: Reference) -> Iterator[str]:
        """What the reference printed: whole hours inside the scenario only."""
        rng = generators(plan.seed, ["reference"])["reference"]
        gain = 1.0 + instrument.gain_u * float(rng.standard_normal())
        yield "start,seconds,pm2_5,u\n"
        for hour, (total, n) in sorted(self._sums.items()):
            if hour < plan.start or hour + HOUR_S > plan.start + plan.seconds:
                continue
            true = np.array([total / n])
            spread = np.hypot(instrument.noise_u, instrument.relative_u * true)
            value = gain * true + spread * rng.standard_normal(1)
            yield f"{rfc3339(hour)},{HOUR_S:.0f},{value[0]:.3f},{instrument.u(true)[0]:.3f}\n"


@contextmanager
def _opened(path: Path) -> Iterator[TextIO]:
    """A text file to write, compressed when its name says so."""
    if path.suffix == ".gz":
        # no name and no time in the header: the same scenario gives the same file
        with path.open("wb") as raw, gzip.GzipFile("", "wb", _GZIP_LEVEL, raw, mtime=0) as packed:
            yield _Packed(packed)  # type: ignore[misc] # a writer of text is all that is used of it
    else:
        with path.open("w", encoding="ascii", newline="\n") as text:
            yield text


class _Packed:
    """Text lines into a gzip stream, joined first: one call of zlib a stretch instead of one a line."""

    def __init__(self, packed: gzip.GzipFile) -> None:
        self._packed = packed

    def write(self, text: str) -> int:
        return self._packed.write(text.encode("ascii"))

    def writelines(self, lines: Iterator[str] | list[str]) -> None:
        self._packed.write("".join(lines).encode("ascii"))
