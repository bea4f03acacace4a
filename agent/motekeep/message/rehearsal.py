"""Rehearsal: what a calibration document would have made of readings that were stored without it, and how far it moves
them.

Owns the way back from a stored reading to the interval it was made of, and the measure of a move. The device judges an
offer by it, the operator a document before it is signed; both run this file. Must not know how a document came here.

What a stored reading does not hold limits it, and this is how:
- Raw figures and counts are the published ones, rounded to 0.01 ug/m3 and 0.1 per dL.
- Dates decide nothing: a document is rehearsed on days before it was made. Nor does the revision, which is not stored.
- The spread of the frames is gone, so `u` is without its counting part, and `u_random` is left out. In a minute at 1 Hz
  that part is a few percent of `u`; in an hour it is nothing.
- A merged hour is one interval of its means: what bends within the hour is lost.
"""

from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from math import inf, isfinite
from statistics import median

from motekeep.health.finding import KINDS
from motekeep.instant import Instant, from_rfc3339
from motekeep.measure.correction import compile_document
from motekeep.measure.document import CHANNELS, CalibrationDocument
from motekeep.measure.interval import EMPTY, Channel, Climate, FrameCount, Interval
from motekeep.measure.reading import FAIL, MISSING, NOT_EVALUATED, SUSPECT, Value, worst
from motekeep.message.documents import ProvenanceDocument, ReadingDocument, ValueDocument
from motekeep.wire.frame import Layout

# Below this a move is measured against this: an offset of 1 ug/m3 on a clean night is no doubling of anything.
FLOOR_UG_M3 = 5.0

# What a correction says of itself (`measure/correction.py` and its steps). All else a reading says is of its measuring,
# and stays.
OF_CORRECTION = frozenset(
    {
        "calibration-early",
        "calibration-expired",
        "calibration-missing",
        "calibration-of-other-revision",
        "calibration-out-of-range",
        "calibration-refused",
        "climate-implausible",
        "climate-missing",
        "climate-stale",
        "coincidence-censored",
        "coincidence-high",
        "counts-missing",
        "floored",
        "fog",
        "humidity-high",
        "limits-fail",
        "limits-suspect",
        "not-finite",
        "piecewise-beyond",
        "uncalibrated",
    }
)
FLAGS_OF_MEASURING = {"incomplete": SUSPECT, "counts-saturated": SUSPECT, "warming-up": None, "merged": None}


def rehearse(document: CalibrationDocument, readings: Iterable[ReadingDocument]) -> Iterator[ReadingDocument]:
    """Each reading as `document` would have made it, in the same order and under the same number.

    Whose readings they are is the caller's business: those of a unit that was brought home are of the bench.
    A reading without figures comes back as it was.
    """
    correction = compile_document(document)
    for reading in readings:
        interval = _interval(reading)
        if interval is None or interval.layout is None:
            yield reading
            continue
        corrected = correction(interval)
        flags, reasons = [corrected.flag], list(corrected.reasons)
        for reason in reading.reasons:
            if of_correction(reason):
                continue
            flags.append(_flag(reason, reading.flag))
            if reason not in reasons:
                reasons.append(reason)
        changed: dict[str, object] = {"flag": worst(flags), "reasons": reasons}
        for name, value in zip(interval.layout.mass, corrected.values, strict=True):
            changed[name] = _document(value)
        if corrected.calibration is not None:
            provenance = corrected.calibration
            changed["calibration"] = ProvenanceDocument(issue=provenance.issue, digest=provenance.digest)
        kept = reading if corrected.calibration is not None else _without_provenance(reading)
        yield kept.model_copy(update=changed)


def of_correction(reason: str) -> bool:
    """Whether this reason of a reading is of its correction, and not of its measuring."""
    return reason in OF_CORRECTION or reason.startswith(("uncalibrated:", "uncorrected:"))


@dataclass(frozen=True, slots=True)
class Move:
    """How far readings of one channel move: `typical`, the median over readings of |value - raw| against raw, and
    `mean`, the same of the mean value against the mean raw, in which peaks weigh by their mass. `readings` were judged.

    Raw below 5 ug/m3 counts as 5. A value that the document cannot state moves without end. `ratio` is the mean value
    over the mean raw, 1 where either is nothing.
    """

    typical: float
    mean: float
    readings: int
    ratio: float = 1.0

    @property
    def most(self) -> float:
        """What `max_shift` is held against."""
        return max(self.typical, self.mean)


@dataclass(frozen=True, slots=True)
class Shift:
    """The move of every channel that the document corrects; `offered` readings carried a raw figure at all."""

    moves: dict[str, Move]
    offered: int

    @property
    def most(self) -> float:
        """The move of the channel that moves most, as a share: 0.5 is by half. 0 where nothing was judged."""
        return max((move.most for move in self.moves.values()), default=0.0)

    @property
    def judged(self) -> int:
        """Readings in which at least one channel could be judged."""
        return max((move.readings for move in self.moves.values()), default=0)


def shift(document: CalibrationDocument, rehearsed: Iterable[ReadingDocument]) -> Shift:
    """How far `document` moves the readings that `rehearse` made with it.

    Left out are readings that were no measurement of the air anyway (a finding or the measuring itself makes them
    fail), and channels that fell back to raw for want of climate or counts.
    """
    moves: dict[str, list[tuple[float, float]]] = {name: [] for name in document.residual}
    offered = 0
    for reading in rehearsed:
        if any(_flag(r, NOT_EVALUATED) in (FAIL, MISSING) for r in reading.reasons if not of_correction(r)):
            continue
        figures = {name: value for name in moves if (value := getattr(reading, name)) is not None}
        offered += any(value.raw is not None for value in figures.values())
        for name, value in figures.items():
            if value.raw is not None and (value.value is None or value.u is not None):
                moves[name].append((value.raw, inf if value.value is None else value.value))
    return Shift({name: _move(pairs) for name, pairs in moves.items() if pairs}, offered)


def relative_move(raw: float, value: float) -> float:
    """The move of one figure as a share of raw; without end where the value is not finite."""
    return abs(value - raw) / max(abs(raw), FLOOR_UG_M3) if isfinite(value) else inf


def _move(pairs: list[tuple[float, float]]) -> Move:
    typical = median(relative_move(raw, value) for raw, value in pairs)
    finite = [(raw, value) for raw, value in pairs if isfinite(value)]
    if not finite:
        return Move(typical, 0.0, len(pairs))
    raw, value = sum(r for r, _ in finite) / len(finite), sum(v for _, v in finite) / len(finite)
    return Move(typical, relative_move(raw, value), len(pairs), value / raw if raw > 0.0 else 1.0)


def _flag(reason: str, given: int) -> int:
    """What a reason of measuring does to the flag; for one that is not known here, what the reading was given."""
    if reason in FLAGS_OF_MEASURING:
        return FLAGS_OF_MEASURING[reason] or NOT_EVALUATED
    if reason in KINDS:
        return KINDS[reason].flag or NOT_EVALUATED
    return given if given in (SUSPECT, FAIL, MISSING) else NOT_EVALUATED


def _without_provenance(reading: ReadingDocument) -> ReadingDocument:
    """A copy that states no calibration. `model_copy` can only add: fields never set are what is left out."""
    return ReadingDocument.model_validate(
        reading.model_dump(by_alias=True, exclude_unset=True, exclude={"calibration"})
    )


def _interval(reading: ReadingDocument) -> Interval | None:
    """The interval that a stored reading was made of, as far as it still tells; None where it holds no figure."""
    masses = {name: value for name in CHANNELS if (value := getattr(reading, name)) is not None}
    if not any(value.raw is not None for value in masses.values()):
        return None
    n = max(reading.frames.good, 1)
    counts = reading.counts_per_dL or {}
    sizes = sorted(counts, key=float)
    layout = Layout("stored", tuple(masses), 0.0, inf, tuple([float(size) for size in sizes]))
    stale = "climate-stale" in reading.reasons
    return Interval(
        sensor=reading.sensor,
        start=Instant(from_rfc3339(reading.start), reading.boot_s, reading.boot, trusted=False),
        seconds=float(reading.seconds),
        frames=FrameCount(reading.frames.good, reading.frames.bad, reading.frames.missing),
        layout=layout,
        mass=tuple([_mass(value.raw, n) for value in masses.values()]),
        mass_ambient=(),
        counts=tuple([_count(counts[size], n) for size in sizes]),
        climate=None
        if reading.climate is None
        else Climate(reading.climate.rh, reading.climate.t, "stored", inf if stale else 0.0),
    )


def _mass(raw: float | None, n: int) -> Channel:
    return EMPTY if raw is None else Channel(n, raw, 0.0, raw, raw, 0.0, 0.0)


def _count(count: float | None, n: int) -> Channel:
    return Channel(0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, censored=1) if count is None else _mass(count, n)


def _document(value: Value) -> ValueDocument:
    return ValueDocument(raw=_rounded(value.raw), value=_rounded(value.value), u=_rounded(value.u))


def _rounded(number: float | None) -> float | None:
    return None if number is None else round(number, 2)
