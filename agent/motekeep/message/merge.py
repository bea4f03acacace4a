"""Many readings of one sensor made into one: what a full journal does with its oldest minutes.

Owns the rule of merging. Pure: knows no store, and does not choose what is merged.

The rule. Each reading weighs as the seconds it really measured: its length times its share of good frames. Raw values,
corrected values, climate and counts are means with these weights. `u` is the weighted mean of the `u`s: their errors
are taken as fully correlated (calibration, humidity and unit errors are the same in every minute), so that averaging
never makes a figure look better than it is (JCGM 100:2008, 5.2.2, note 1: correlation +1 adds linearly). A channel that
was censored in one reading is null: a mean of what ran full cannot be stated. Frames are summed. The flag is the worst
of the readings that carry figures, and 3 with reason `incomplete` when under three quarters of the frames due were
good; 9 only when none carries any. All reasons are kept, and `merged` is added.
"""

from collections.abc import Callable, Sequence

from motekeep.measure.reading import COMPLETENESS, MISSING, SUSPECT, worst
from motekeep.message.documents import ClimateDocument, FramesDocument, ReadingDocument, ValueDocument

MASS = ("pm1", "pm2_5", "pm4", "pm10")


def mergeable(earlier: ReadingDocument, later: ReadingDocument) -> bool:
    """Whether two neighbours may end up in one reading: nothing lies between them, they are of one boot and one kind of
    clock, and no mean would mix two calibrations."""
    return (
        earlier.sensor == later.sensor
        and earlier.seq + 1 == (later.from_seq or later.seq)
        and (earlier.boot, earlier.clock) == (later.boot, later.clock)
        and (earlier.calibration == later.calibration or not _measured(earlier) or not _measured(later))
    )


def merged(documents: Sequence[ReadingDocument]) -> ReadingDocument:
    """One reading that stands for all of `documents`, in order of their numbers. Raises ValueError on none."""
    if not documents:
        raise ValueError("nothing to merge")
    first, last = documents[0], documents[-1]
    figures = [d for d in documents if _measured(d)]
    frames = FramesDocument(
        good=sum(d.frames.good for d in documents),
        bad=sum(d.frames.bad for d in documents),
        missing=sum(d.frames.missing for d in documents),
    )
    flags, reasons = (
        [d.flag for d in figures] or [MISSING],
        list(dict.fromkeys(r for d in documents for r in d.reasons)),
    )
    if figures and _share(frames) < COMPLETENESS:
        flags.append(SUSPECT)
        reasons.append("incomplete")
    changed: dict[str, object] = {
        "seq": last.seq,
        "from_seq": first.from_seq or first.seq,
        "seconds": _plain(last.boot_s + last.seconds - first.boot_s),
        "frames": frames,
        "flag": worst(flags),
        "reasons": [*dict.fromkeys(r for r in reasons if r != "merged"), "merged"],
    }
    for name in MASS:
        if any(getattr(d, name) is not None for d in documents):
            changed[name] = _value(figures, name)
    if sizes := list(dict.fromkeys(size for d in documents for size in d.counts_per_dL or {})):
        changed["counts_per_dL"] = {size: _count(figures, size) for size in sizes}
    if any(d.climate is not None for d in documents):
        changed["climate"] = _climate(documents)
    if provenance := next((d.calibration for d in figures if d.calibration is not None), None):
        changed["calibration"] = provenance
    return first.model_copy(update=changed)


def _measured(document: ReadingDocument) -> bool:
    return any(
        value is not None and value.raw is not None
        for value in (document.pm1, document.pm2_5, document.pm4, document.pm10)
    )


def _share(frames: FramesDocument) -> float:
    due = frames.good + frames.bad + frames.missing
    return frames.good / due if due else 0.0


def _weight(document: ReadingDocument) -> float:
    return document.seconds * _share(document.frames)


def _mean(
    documents: Sequence[ReadingDocument], of: Callable[[ReadingDocument], float | None], digits: int
) -> float | None:
    """Weighted mean over the readings that have the figure; None without any."""
    pairs = [(number, _weight(d)) for d in documents if (number := of(d)) is not None]
    total = sum(weight for _, weight in pairs)
    if not pairs:
        return None
    if total <= 0:  # figures without a good frame: nothing weighs more than the rest
        return round(sum(number for number, _ in pairs) / len(pairs), digits)
    return round(sum(number * weight for number, weight in pairs) / total, digits)


def _value(documents: Sequence[ReadingDocument], name: str) -> ValueDocument:
    def part(which: str) -> Callable[[ReadingDocument], float | None]:
        return lambda d: None if getattr(d, name) is None else getattr(getattr(d, name), which)

    valued = [d for d in documents if part("value")(d) is not None]
    evaluated = all(part("u")(d) is not None for d in valued)
    return ValueDocument(
        raw=_mean(documents, part("raw"), 2),
        value=_mean(valued, part("value"), 2),
        u=_mean(valued, part("u"), 2) if evaluated else None,
    )


def _count(documents: Sequence[ReadingDocument], size: str) -> float | None:
    having = [d for d in documents if d.counts_per_dL is not None and size in d.counts_per_dL]
    if any(d.counts_per_dL is not None and d.counts_per_dL[size] is None for d in having):
        return None
    return _mean(having, lambda d: None if d.counts_per_dL is None else d.counts_per_dL[size], 1)


def _climate(documents: Sequence[ReadingDocument]) -> ClimateDocument:
    rh = _mean(documents, lambda d: None if d.climate is None else d.climate.rh, 1)
    t = _mean(documents, lambda d: None if d.climate is None else d.climate.t, 1)
    return ClimateDocument(rh=rh if rh is not None else 0.0, t=t)


def _plain(seconds: float) -> int | float:
    rounded = round(seconds, 1)
    return int(rounded) if rounded.is_integer() else rounded
