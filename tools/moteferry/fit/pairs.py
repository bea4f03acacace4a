"""Pairs: what the sensor said in each span of the reference, and what the reference said of it.

Owns the alignment. Must not know files or models.

The rules.
- Samplings of the reference shorter than an hour are pooled to clock hours; those of an hour or longer (filters) stay
  as they are. A span, of either record, stands for itself with three quarters of it measured (`COMPLETENESS`).
- A reading belongs to the span that it lies in whole. What the sensor slept by duty is not due.
- The readings of a span are kept one by one beside each other: a correction bends within the hour, and the mean of
  corrected readings is what a device makes, not the correction of a mean.
- Where the record has a climate, spans of which a quarter has none are left out, and so are those of which a quarter
  was above `RH_HIGH`: there is no growth law for fog, and no candidate is to be bent by it.
"""

from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from moteferry.fit.device import DeviceRecord
from moteferry.fit.record import Floats, RecordError
from moteferry.fit.reference import ReferenceRecord
from motekeep.instant import rfc3339
from motekeep.measure.reading import COMPLETENESS

HOUR_S = 3600.0
# Where `humidity-growth` is valid unless told otherwise; see measure/steps/humidity_growth.py.
RH_LOW, RH_HIGH = 30.0, 85.0
# The EU guide asks 40 pairs of a campaign (EC Working Group, Guide to the Demonstration of Equivalence, 2010; from
# memory). With fewer, blocks of days that have not been seen cannot be told from chance.
LEAST = 40
# What a printed figure moves at the least when it is not stuck, relative to its mean.
STUCK = 1e-9


@dataclass(frozen=True, slots=True)
class Pairs:
    """n spans with up to m readings each.

    (n,): `start` in Unix seconds, `reference` in ug/m3 with the random and the common part of its standard uncertainty,
    `raw_mean`, `rh_mean`, `t_mean`. (n, m): `raw`, `rh`, `t` of each reading and its `weight` in the mean of its span;
    the weights of a span sum to 1, padding has weight 0. Without a climate `rh` is NaN throughout, as is `t`.
    `left_out` counts spans by cause.
    """

    start: Floats
    seconds: float
    reference: Floats
    u_random: Floats
    u_common: Floats
    raw: Floats
    rh: Floats
    t: Floats
    weight: Floats
    left_out: Mapping[str, int]

    def __len__(self) -> int:
        return len(self.start)

    @property
    def raw_mean(self) -> Floats:
        return self.mean(self.raw)

    @property
    def rh_mean(self) -> Floats:
        return self.mean(self.rh)

    @property
    def t_mean(self) -> Floats:
        return self.mean(self.t)

    @property
    def humid(self) -> bool:
        """Whether RH is known."""
        return bool(np.isfinite(self.rh).all())

    @property
    def warm(self) -> bool:
        """Whether temperature is known."""
        return bool(np.isfinite(self.t).all())

    @property
    def hours(self) -> float:
        return len(self) * self.seconds / HOUR_S

    def mean(self, values: Floats) -> Floats:
        """Of each span, of one value a reading."""
        return np.asarray((self.weight * values).sum(axis=1))

    def of(self, rows: NDArray[np.bool_] | NDArray[np.int64]) -> "Pairs":
        """These spans only."""
        own = ("start", "reference", "u_random", "u_common", "raw", "rh", "t", "weight")
        return replace(self, **{name: getattr(self, name)[rows] for name in own})


def align(device: DeviceRecord, reference: ReferenceRecord) -> Pairs:
    """Lay the two records over each other. Raises RecordError where that gives nothing to fit."""
    left_out: Counter[str] = Counter()
    spans = _pooled(reference, left_out)
    _check_overlap(device, spans)
    pairs, completeness = _matrix(device, spans)
    touched = completeness > 0.0
    complete = completeness >= COMPLETENESS
    left_out["incomplete at the sensor"] += int((touched & ~complete).sum())
    left_out["without any reading of the sensor"] += int((~touched).sum())
    pairs = _with_climate(pairs.of(complete), left_out)
    pairs = replace(pairs, left_out={cause: n for cause, n in left_out.items() if n})
    _check_enough(pairs)
    return pairs


def _pooled(reference: ReferenceRecord, left_out: Counter[str]) -> ReferenceRecord:
    """Samplings of an hour or more as they are, shorter ones by the clock hour."""
    lengths = reference.seconds
    if lengths.min() >= HOUR_S:
        usual = float(np.median(lengths))
        odd = np.abs(lengths - usual) > 0.01 * usual
        left_out["of another length at the reference"] += int(odd.sum())
        keep = ~odd
        return replace(
            reference,
            **{name: getattr(reference, name)[keep] for name in ("start", "seconds", "value", "u_random", "u_common")},
        )
    hour = np.floor(reference.start / HOUR_S)
    within = reference.start + lengths <= (hour + 1.0) * HOUR_S + 1.0
    left_out["across two hours at the reference"] += int((~within).sum())
    hours, number = np.unique(hour[within], return_inverse=True)
    w = lengths[within]

    def sums(values: Floats) -> Floats:
        return np.asarray(np.bincount(number, values, len(hours)), dtype=np.float64)

    measured = sums(w)
    complete = measured >= COMPLETENESS * HOUR_S
    left_out["incomplete at the reference"] += int((~complete).sum())
    if not complete.any():
        raise RecordError("the reference", "no hour is measured to three quarters", "give a record with fewer gaps")
    means = sums(w * reference.value[within]) / measured
    random = np.sqrt(sums((w * reference.u_random[within]) ** 2)) / measured
    common = sums(w * reference.u_common[within]) / measured
    return replace(
        reference,
        start=hours[complete] * HOUR_S,
        seconds=np.full(int(complete.sum()), HOUR_S),
        value=means[complete],
        u_random=random[complete],
        u_common=common[complete],
    )


def _check_overlap(device: DeviceRecord, spans: ReferenceRecord) -> None:
    ends = float(device.start[-1] + device.seconds[-1]), float(spans.start[-1] + spans.seconds[-1])
    if device.start[0] >= ends[1] or spans.start[0] >= ends[0]:
        raise RecordError(
            "the two records",
            f"do not overlap: the sensor has {rfc3339(device.start[0])} to {rfc3339(ends[0])}, "
            f"the reference {rfc3339(spans.start[0])} to {rfc3339(ends[1])}",
            "give the same days of both",
        )


def _matrix(device: DeviceRecord, spans: ReferenceRecord) -> tuple[Pairs, Floats]:
    """All spans with their readings, and the share of each that was measured of what was due."""
    n = len(spans.start)
    end = spans.start + spans.seconds
    span = np.searchsorted(spans.start, device.start + 1e-3, side="right") - 1
    inside = (span >= 0) & (device.start + device.seconds <= end[np.maximum(span, 0)] + 1.0)
    span, rows = span[inside], np.flatnonzero(inside)
    counts = np.bincount(span, minlength=n)
    place = np.arange(len(span)) - (np.cumsum(counts) - counts)[span]
    shape = (n, max(int(counts.max(initial=0)), 1))

    def laid(values: Floats) -> Floats:
        out = np.zeros(shape)
        out[span, place] = values[rows]
        return out

    measured = laid(device.measured_s)
    total = measured.sum(axis=1)
    due = spans.seconds - _slept(device, spans)
    completeness = np.divide(total, due, out=np.zeros(n), where=due > 0.0)
    weight = np.divide(measured, total[:, None], out=np.zeros(shape), where=total[:, None] > 0.0)
    pairs = Pairs(
        spans.start,
        float(spans.seconds[0]),
        spans.value,
        spans.u_random,
        spans.u_common,
        laid(device.raw),
        laid(device.rh),
        laid(device.t),
        weight,
        {},
    )
    return pairs, completeness


def _slept(device: DeviceRecord, spans: ReferenceRecord) -> Floats:
    slept = np.zeros(len(spans.start))
    if len(device.asleep):
        start, seconds = device.asleep.T
        span = np.searchsorted(spans.start, start + 1e-3, side="right") - 1
        inside = (span >= 0) & (start < (spans.start + spans.seconds)[np.maximum(span, 0)])
        np.add.at(slept, span[inside], seconds[inside])
    return slept


def _with_climate(pairs: Pairs, left_out: Counter[str]) -> Pairs:
    """Readings without a climate get that of their span; spans that lack it, or were too humid, are left out."""
    if not len(pairs):
        return pairs
    known = (pairs.weight * np.isfinite(pairs.rh)).sum(axis=1)
    if (known >= COMPLETENESS).mean() < COMPLETENESS:
        nothing = np.full_like(pairs.raw, np.nan)
        return replace(pairs, rh=nothing, t=nothing)
    keep = known >= COMPLETENESS
    left_out["without a climate"] += int((~keep).sum())
    pairs = pairs.of(keep)
    rh = _filled(pairs.rh, pairs.weight)
    warm = ((pairs.weight * np.isfinite(pairs.t)).sum(axis=1) >= COMPLETENESS).all()
    t = _filled(pairs.t, pairs.weight) if warm else np.full_like(rh, np.nan)
    dry = (pairs.weight * (rh <= RH_HIGH)).sum(axis=1) >= COMPLETENESS
    left_out[f"more humid than {RH_HIGH:g} %"] += int((~dry).sum())
    return replace(pairs, rh=rh, t=t).of(dry)


def _filled(values: Floats, weight: Floats) -> Floats:
    """Gaps and padding take the mean of their span."""
    good = np.isfinite(values) & (weight > 0.0)
    held = np.where(good, weight, 0.0)
    means = (held * np.where(good, values, 0.0)).sum(axis=1) / np.maximum(held.sum(axis=1), 1e-300)
    return np.where(good, values, means[:, None])


def _check_enough(pairs: Pairs) -> None:
    what = "hours" if pairs.seconds == HOUR_S else f"spans of {pairs.seconds / HOUR_S:g} h"
    if len(pairs) < LEAST:
        why = ", ".join(f"{n} {cause}" for cause, n in pairs.left_out.items()) or "nothing was left out"
        raise RecordError(
            "the two records", f"share {len(pairs)} complete {what} ({why})", f"at least {LEAST} are needed"
        )
    for name, values in (("sensor", pairs.raw_mean), ("reference", pairs.reference)):
        if np.ptp(values) <= STUCK * max(abs(float(values[0])), 1.0):
            raise RecordError(
                f"the {name}", f"says {values[0]:g} ug/m3 in all {len(pairs)} {what}", "a stuck figure fits nothing"
            )
