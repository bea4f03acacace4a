"""A reading: an interval after correction, with values, uncertainty, quality and provenance.

Owns the roll-up of quality. Must not know messages. Correction itself is a `Correction`, handed in: `uncorrected`
is what applies without a calibration document.

Quality is a QARTOD primary flag (QARTOD Flags Manual 1.2, 2020). Roll-up rule: the reading gets the worst of what was
found, 9 worse than 4 worse than 3; without any of these it is 1 when corrected by a document and 2 when not.
"""

from collections.abc import Callable
from dataclasses import dataclass, field

from motekeep.measure.interval import Channel, Interval

PASS, NOT_EVALUATED, SUSPECT, FAIL, MISSING = 1, 2, 3, 4, 9
SEVERITY = {PASS: 1, NOT_EVALUATED: 0, SUSPECT: 2, FAIL: 3, MISSING: 4}

# 40 CFR 50 App. N and common practice: a mean stands for its span with three quarters of it measured.
COMPLETENESS = 0.75


@dataclass(frozen=True, slots=True)
class Value:
    """One published figure in ug/m3: as the sensor gave it, after correction, and its standard uncertainty.

    `raw` and `value` are None when nothing was measured; `u` is None when it was not evaluated. `u_random` is the part
    of `u` that is independent from one interval to the next and so averages out; the rest of `u` does not.
    """

    raw: float | None
    value: float | None
    u: float | None
    u_random: float | None = None


@dataclass(frozen=True, slots=True)
class Provenance:
    """The calibration document a reading was made with: its issue number and the digest of its bytes."""

    issue: int
    digest: str


@dataclass(frozen=True, slots=True)
class Corrected:
    """What a correction makes of an interval: a value a mass channel, a flag of its own (PASS, SUSPECT, FAIL or
    NOT_EVALUATED), and the reasons for it."""

    values: tuple[Value, ...]
    flag: int
    reasons: tuple[str, ...]
    calibration: Provenance | None = None


Correction = Callable[[Interval], Corrected]


@dataclass(frozen=True, slots=True)
class Reading:
    """An interval after correction; what is stored and published, but for its sequence number."""

    interval: Interval
    values: dict[str, Value]
    flag: int
    reasons: tuple[str, ...]
    calibration: Provenance | None = field(default=None)


def uncorrected(interval: Interval) -> Corrected:
    """No document in force: raw passes through, its uncertainty not evaluated, flag 2 and reason `uncalibrated`."""
    values = tuple([Value(c.mean, c.mean, None) if c.n else Value(None, None, None) for c in interval.mass])
    return Corrected(values, NOT_EVALUATED, ("uncalibrated",))


def refused(interval: Interval) -> Corrected:
    """There is a document and it must not be used: raw passes through, and the reading says so."""
    plain = uncorrected(interval)
    return Corrected(plain.values, SUSPECT, (*plain.reasons, "calibration-refused"))


def worst(flags: list[int]) -> int:
    """The roll-up rule above over any number of flags; NOT_EVALUATED of none."""
    return max(flags, key=SEVERITY.__getitem__, default=NOT_EVALUATED)


def make_reading(interval: Interval, correction: Correction, findings: dict[str, int]) -> Reading:
    """Correct an interval and roll up its quality.

    `findings` maps the codes of findings that hold in this span to the flag each one gives.
    """
    layout = interval.layout
    if layout is None:
        return Reading(interval, {}, MISSING, tuple(dict.fromkeys((_why_empty(interval), *findings))))
    corrected = correction(interval)
    flags, reasons = [corrected.flag], list(corrected.reasons)
    if interval.warming_frames:
        reasons.append("warming-up")
    if interval.completeness < COMPLETENESS:
        flags.append(SUSPECT)
        reasons.append("incomplete")
    if any(saturated(c) for c in interval.counts):
        flags.append(SUSPECT)
        reasons.append("counts-saturated")
    for code, flag in findings.items():
        flags.append(flag)
        if code not in reasons:
            reasons.append(code)
    values = dict(zip(layout.mass, corrected.values, strict=True))
    return Reading(interval, values, worst(flags), tuple(reasons), corrected.calibration)


def _why_empty(interval: Interval) -> str:
    if interval.warming_frames:
        return "warming-up"
    return "asleep" if interval.asleep_s >= interval.seconds - 1.0 else "no-frames"


def saturated(counts: Channel) -> bool:
    """A channel of which even one frame was censored has no mean that could be stated."""
    return counts.censored > 0
