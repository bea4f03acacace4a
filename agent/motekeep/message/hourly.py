"""From hours to their document, and from stored readings back to what an hour is made of.

Owns rounding and units of the hourly document. Knows no store: the readings are handed in.
"""

from motekeep.instant import from_rfc3339, rfc3339
from motekeep.measure.document import CHANNELS
from motekeep.measure.hourly import HOUR_S, Hour, HourFigure, Sample, make_sample
from motekeep.measure.reading import Value
from motekeep.message.compose import Place
from motekeep.message.documents import HourlyDocument, ReadingDocument, ValueDocument


def hourly_document(hour: Hour, place: Place, sensor: str) -> HourlyDocument:
    """The hour as published; mass to 0.01 ug/m3."""
    document: dict[str, object] = {
        "schema": "motekeep/hourly/1",
        "site": place.site,
        "gateway": place.gateway,
        "sensor": sensor,
        "start": rfc3339(hour.start),
        "seconds": int(HOUR_S),
        "unit": "ug/m3",
        "k": 1,
        "flag": hour.flag,
        "reasons": list(hour.reasons),
    }
    document |= {channel: _figure(channel, figure) for channel, figure in hour.figures.items()}
    return HourlyDocument.model_validate(document)


def sample_of_document(document: ReadingDocument) -> Sample | None:
    """What an hour needs of a stored reading; None while nobody vouches for its time. The same as of the reading it was
    made from, but for rounding. A reading without `u_random` is taken to have no random part: longer means of it are
    then not called surer than it is."""
    if document.clock not in ("synced", "corrected"):
        return None
    frames = document.frames
    return make_sample(
        from_rfc3339(document.start),
        document.seconds,
        (frames.good, frames.good + frames.bad + frames.missing),
        document.flag,
        document.reasons,
        {c: Value(v.raw, v.value, v.u, v.u_random) for c in CHANNELS if (v := _value(document, c)) is not None},
    )


def _value(document: ReadingDocument, channel: str) -> ValueDocument | None:
    value: ValueDocument | None = getattr(document, channel)
    return value


def _figure(channel: str, figure: HourFigure) -> dict[str, object]:
    fields: dict[str, object] = {
        "mean": _rounded(figure.mean),
        "u": _rounded(figure.u),
        "completeness": round(figure.completeness, 3),
        "mean_24h": _rounded(figure.mean_24h),
        "hours_24h": figure.hours_24h,
    }
    if channel in ("pm2_5", "pm10"):
        fields |= {
            "nowcast": figure.nowcast,
            "aqi": figure.aqi.index if figure.aqi else None,
            "category": figure.aqi.category if figure.aqi else None,
        }
    return fields


def _rounded(number: float | None) -> float | None:
    return None if number is None else round(number, 2)
