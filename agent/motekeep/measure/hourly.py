"""Hourly values: means of what was measured in each clock hour, and what follows from them. For information only.

Owns the rules by which readings make an hour. Must not know messages or the journal: it is fed, again after a restart.

The rules.
- An hour is complete with three quarters of its due seconds measured. Seconds that the sensor slept by duty are not
  due. A reading measured its length times its share of good frames. Without completeness there is no mean.
- Readings that fail, and figures without a value, are left out. Suspect ones are used.
- Corrected and raw figures are never averaged together: the kind that covers more of the hour is used.
- The flag: 9 when no channel is complete; else 3 when more than a quarter of what was used is suspect, or when anything
  censored was in the hour, since the missing highest minutes make its mean a lower bound; else 2 when more than a
  quarter of it was not evaluated; else 1. Reasons are listed from frequent to rare.
- u: the random parts of the readings add in quadrature, their common parts linearly (JCGM 100:2008, 5.2.2), and where
  the hour was not measured through, the scatter of its readings counts for the part not seen (Cochran 1977, Sampling
  Techniques, 2.3).
"""

import json
from base64 import b64decode, b64encode
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from math import hypot, isnan, nan, sqrt
from struct import Struct
from typing import Self

from motekeep.measure.air_quality import (
    DAY_HOURS,
    NOWCAST_HOURS,
    TABLES,
    Index,
    air_quality_index,
    complete,
    cut,
    day_mean,
    nowcast,
)
from motekeep.measure.document import CHANNELS
from motekeep.measure.reading import FAIL, MISSING, NOT_EVALUATED, PASS, SUSPECT, Reading, Value, worst

HOUR_S = 3600.0

# An amendment reaches back this far, and a day's mean of the oldest hour it touches still has its hours. At one reading
# a minute this is 2,880 samples of 160 bytes.
WINDOW_HOURS = 48

# Readings of an hour at most: one a second. A longer list of the same hour is a clock that runs mad.
MOST_SAMPLES = 3600

# Reasons for which the figures left in an hour are too small.
CENSORING = frozenset({"counts-saturated", "coincidence-censored", "mass-clipped"})

# Reasons of an hour that are listed; a document must stay small.
MOST_REASONS = 12

# Distinct combinations of reasons that are kept apart before the rarest are given up; each costs some 100 bytes.
MOST_COMBINATIONS = 512


@dataclass(frozen=True, slots=True)
class Sample:
    """What an hour needs of one reading. `start` is Unix seconds of a clock that is trusted; `figures` has the mass
    channels by name; `measured_s` and `asleep_s` are seconds of its length."""

    start: float
    seconds: float
    measured_s: float
    asleep_s: float
    flag: int
    reasons: tuple[str, ...]
    figures: Mapping[str, Value]


@dataclass(frozen=True, slots=True)
class HourFigure:
    """One channel of an hour, ug/m3. Whatever is None had not enough to stand on."""

    mean: float | None
    u: float | None
    completeness: float
    nowcast: float | None
    aqi: Index | None
    mean_24h: float | None
    hours_24h: int


@dataclass(frozen=True, slots=True)
class Hour:
    """One full clock hour, starting at `start` (Unix seconds)."""

    start: float
    flag: int
    reasons: tuple[str, ...]
    figures: Mapping[str, HourFigure]


@dataclass(frozen=True, slots=True)
class Summary:
    """What an hour is by itself, before its neighbours come in."""

    flag: int
    reasons: tuple[str, ...]
    means: Mapping[str, tuple[float | None, float | None, float]]


def sample_of(reading: Reading) -> Sample:
    """The sample that a reading makes; `sample_of_document` in `message` gives the same from its document."""
    frames = reading.interval.frames
    return make_sample(
        reading.interval.start.utc,
        reading.interval.seconds,
        (frames.good, frames.good + frames.bad + frames.missing),
        reading.flag,
        reading.reasons,
        reading.values,
    )


def make_sample(
    start: float,
    seconds: float,
    good_of_due: tuple[int, int],
    flag: int,
    reasons: Sequence[str],
    figures: Mapping[str, Value],
) -> Sample:
    """A sample from what a reading and its document have in common; `good_of_due` counts frames."""
    good, due = good_of_due
    measured = seconds * good / due if due else 0.0
    asleep = seconds if "asleep" in reasons else 0.0
    return Sample(start, seconds, measured, asleep, flag, tuple(reasons), figures)


class Hourly:
    """The hours of one sensor, fed in any order with samples; a sample with the same start takes the other's place."""

    def __init__(self) -> None:
        self._hours: dict[int, dict[float, bytes]] = {}
        self._reasons: list[tuple[str, ...]] = [()]
        self._summaries: dict[int, Summary] = {}
        self._closed = -(2**62)
        self._changed: set[int] = set()

    def add(self, sample: Sample) -> bool:
        """Take in a sample; False when its hour is too old to be changed, or too full."""
        hour = int(sample.start // HOUR_S)
        if hour < self._closed - WINDOW_HOURS:
            return False
        samples = self._hours.setdefault(hour, {})
        if len(samples) >= MOST_SAMPLES and sample.start not in samples:
            return False
        samples[sample.start] = _pack(sample, self._number(sample.reasons))
        self._touch(hour)
        self._prune()
        return True

    def amend(self, from_utc: float, to_utc: float, flag: int, reasons: Iterable[str]) -> int:
        """Readings that start in [from, to) are at best `flag` from now on, for these reasons as well; their number."""
        added, amended = tuple(reasons), 0
        for hour, samples in self._hours.items():
            if not from_utc - HOUR_S < hour * HOUR_S < to_utc:
                continue
            for start in [s for s in samples if from_utc <= s < to_utc]:
                sample = _unpack(samples[start], self._reasons)
                all_reasons = tuple(dict.fromkeys((*sample.reasons, *added)))
                changed = Sample(
                    start,
                    sample.seconds,
                    sample.measured_s,
                    sample.asleep_s,
                    worst([sample.flag, flag]),
                    all_reasons,
                    sample.figures,
                )
                samples[start] = _pack(changed, self._number(all_reasons))
                self._touch(hour)
                amended += 1
        return amended

    def due(self, utc: float) -> list[Hour]:
        """Hours that ended by `utc` and are new or have changed since they were last given out, oldest first."""
        closed = int(utc // HOUR_S)
        if closed < self._closed:  # the clock was put back: what it stamped with times yet to come was wrong
            for hour in [h for h in self._hours if h > closed]:
                self._forget(hour)
        self._changed.update(h for h in self._hours if self._closed <= h < closed)
        self._closed = closed
        self._prune()
        given = [self.hour(h) for h in sorted(self._changed) if h in self._hours and h < self._closed]
        self._changed.clear()
        return given

    def hour(self, number: int) -> Hour:
        """The hour that starts at `number` * 3600 s, from what is known now."""
        own = self._summary(number)
        return Hour(number * HOUR_S, own.flag, own.reasons, {c: self._figure(number, c) for c in own.means})

    def _figure(self, number: int, channel: str) -> HourFigure:
        mean, u, completeness = self._summary(number).means[channel]
        past = [self._mean(number - age, channel) for age in range(DAY_HOURS)]
        table = TABLES.get(channel)
        now = nowcast(past[:NOWCAST_HOURS]) if table else None
        return HourFigure(
            mean=mean,
            u=u,
            completeness=completeness,
            nowcast=cut(now, table.step) if table and now is not None else None,
            aqi=air_quality_index(now, table) if table and now is not None else None,
            mean_24h=day_mean(past),
            hours_24h=sum(c is not None for c in past),
        )

    def _mean(self, number: int, channel: str) -> float | None:
        if number not in self._hours:
            return None
        return self._summary(number).means.get(channel, (None, None, 0.0))[0]

    def _summary(self, number: int) -> Summary:
        if number not in self._summaries:
            packed = self._hours.get(number, {})
            self._summaries[number] = summarise([_unpack(packed[start], self._reasons) for start in sorted(packed)])
        return self._summaries[number]

    def _touch(self, hour: int) -> None:
        """This hour, and all whose NowCast or day it is in, may be different from what was given out."""
        self._summaries.pop(hour, None)
        self._changed.update(h for h in range(hour, min(hour + DAY_HOURS, self._closed)) if h in self._hours)

    def _number(self, reasons: tuple[str, ...]) -> int:
        if reasons in self._reasons:
            return self._reasons.index(reasons)
        if len(self._reasons) >= MOST_COMBINATIONS:
            return 0
        self._reasons.append(reasons)
        return len(self._reasons) - 1

    def _prune(self) -> None:
        """Give up hours that have left the window, the oldest first if a clock made more of them than it holds."""
        for hour in sorted(self._hours):
            if hour >= self._closed - WINDOW_HOURS and len(self._hours) <= WINDOW_HOURS + 2:
                break
            self._forget(hour)

    def _forget(self, hour: int) -> None:
        self._hours.pop(hour)
        self._summaries.pop(hour, None)
        self._changed.discard(hour)

    def state(self) -> str:
        """Everything, as JSON text: about 10 kB for an hour of minutes."""
        hours = {str(h): b64encode(b"".join(s.values())).decode() for h, s in self._hours.items()}
        return json.dumps({"version": 1, "closed": self._closed, "reasons": self._reasons, "hours": hours})

    @classmethod
    def restored(cls, state: str) -> Self:
        """The object whose `state` this is. Raises ValueError on any other text: start anew and feed it then."""
        hourly = cls()
        try:
            items = json.loads(state)
            if items["version"] != 1:
                raise ValueError(f"state of version {items['version']}")
            hourly._reasons = [tuple(reasons) for reasons in items["reasons"]]
            hourly._closed = int(items["closed"])
            for hour, text in items["hours"].items():
                records = _records(b64decode(text, validate=True))
                hourly._hours[int(hour)] = {_unpack(r, hourly._reasons).start: r for r in records}
        except (KeyError, TypeError, IndexError, AttributeError, RecursionError) as error:
            raise ValueError(f"no state of hourly values: {error!r}") from error
        return hourly


# start, seconds, measured, asleep, flag, channels as bits, number of reasons; then value, u, u_random of each channel,
# NaN for None.
_FORMAT = Struct("<dfffBBH" + "ddd" * len(CHANNELS))


def _pack(sample: Sample, reasons: int) -> bytes:
    numbers: list[float] = []
    present = 0
    for i, channel in enumerate(CHANNELS):
        figure = sample.figures.get(channel)
        present |= (figure is not None) << i
        parts = (figure.value, figure.u, figure.u_random) if figure else (None, None, None)
        numbers += [nan if part is None else part for part in parts]
    return _FORMAT.pack(
        sample.start, sample.seconds, sample.measured_s, sample.asleep_s, sample.flag, present, reasons, *numbers
    )


def _unpack(record: bytes, reasons: Sequence[tuple[str, ...]]) -> Sample:
    start, seconds, measured_s, asleep_s, flag, present, number, *numbers = _FORMAT.unpack(record)
    figures: dict[str, Value] = {}
    for i, channel in enumerate(CHANNELS):
        if present >> i & 1:
            value, u, u_random = [None if isnan(n) else n for n in numbers[3 * i : 3 * i + 3]]
            figures[channel] = Value(None, value, u, u_random)
    return Sample(start, seconds, measured_s, asleep_s, flag, reasons[number], figures)


def _records(packed: bytes) -> list[bytes]:
    size = _FORMAT.size
    if len(packed) % size:
        raise ValueError("an hour is cut short")
    return [packed[i : i + size] for i in range(0, len(packed), size)]


def summarise(samples: Sequence[Sample]) -> Summary:
    """An hour by itself; the rules stand at the top of the file."""
    due = HOUR_S - sum(s.asleep_s for s in samples)
    sound = [s for s in samples if s.flag not in (FAIL, MISSING)]
    means: dict[str, tuple[float | None, float | None, float]] = {}
    used: dict[float, Sample] = {}
    for channel in CHANNELS:
        if not any(channel in s.figures for s in samples):
            continue
        kept, evaluated = _one_kind([s for s in sound if _has_value(s, channel)], channel)
        measured = sum(s.measured_s for s in kept)
        if not complete(measured, due):
            means[channel] = (None, None, min(measured / due, 1.0) if due > 0.0 else 0.0)
            continue
        mean = sum(s.measured_s * _value(s, channel) for s in kept) / measured
        u = _uncertainty(kept, channel, mean) if evaluated else None
        means[channel] = (mean, u, min(measured / due, 1.0))
        used.update((s.start, s) for s in kept)
    listed = Counter(reason for s in samples for reason in s.reasons)
    reasons = tuple([reason for reason, _ in listed.most_common(MOST_REASONS)])
    return Summary(_flag(list(used.values()), CENSORING.isdisjoint(listed)), reasons, means)


def _one_kind(samples: Sequence[Sample], channel: str) -> tuple[list[Sample], bool]:
    """The samples of the kind, corrected or raw, that covers more; whether it is the corrected one."""
    corrected = [s for s in samples if s.figures[channel].u is not None]
    raw = [s for s in samples if s.figures[channel].u is None]
    evaluated = sum(s.measured_s for s in corrected) >= sum(s.measured_s for s in raw) and bool(corrected)
    return (corrected if evaluated else raw), evaluated


def _has_value(sample: Sample, channel: str) -> bool:
    figure = sample.figures.get(channel)
    return figure is not None and figure.value is not None


def _value(sample: Sample, channel: str) -> float:
    return sample.figures[channel].value or 0.0


def _uncertainty(samples: Sequence[Sample], channel: str, mean: float) -> float:
    total = sum(s.measured_s for s in samples)
    random = common = scatter = 0.0
    for s in samples:
        figure, share = s.figures[channel], s.measured_s / total
        u, u_random = figure.u or 0.0, figure.u_random or 0.0
        random += (share * u_random) ** 2
        common += share * sqrt(max(u * u - u_random * u_random, 0.0))
        scatter += (_value(s, channel) - mean) ** 2
    n = len(samples)
    unseen = max(1.0 - total / HOUR_S, 0.0)
    missed = scatter / (n - 1) / n * unseen if n > 1 else 0.0
    return hypot(sqrt(random + missed), common)


def _flag(used: Sequence[Sample], uncensored: bool) -> int:
    if not used:
        return MISSING
    quarter = 0.25 * sum(s.measured_s for s in used)
    if not uncensored or sum(s.measured_s for s in used if s.flag == SUSPECT) > quarter:
        return SUSPECT
    return NOT_EVALUATED if sum(s.measured_s for s in used if s.flag == NOT_EVALUATED) > quarter else PASS
