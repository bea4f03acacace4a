"""A document as the device applies it, on the means of spans: the check that what is claimed is what a device does.

Owns the way from a pair to an interval. `measure/correction.py` does the rest, the very code of the device.
"""

from collections.abc import Iterable, Iterator

import numpy as np

from moteferry.fit.pairs import HOUR_S, Pairs
from moteferry.fit.record import Floats
from motekeep.instant import Instant
from motekeep.measure.correction import compile_document
from motekeep.measure.document import CalibrationDocument
from motekeep.measure.interval import Channel, Climate, FrameCount, Interval
from motekeep.wire.frame import Layout


def applied(document: CalibrationDocument, pairs: Pairs, channel: str) -> tuple[Floats, Floats]:
    """Corrected figure and its standard uncertainty of each span, (n,) both; NaN where the device states none.

    It sees the mean of a span as if it were one reading, with no scatter of frames: `u` is that of what does not
    average out.
    """
    correction = compile_document(document)
    found = [correction(interval).values[0] for interval in _intervals(pairs, channel)]
    return _column(f.value for f in found), _column(f.u for f in found)


def _column(values: Iterable[float | None]) -> Floats:
    return np.array([np.nan if v is None else v for v in values], dtype=np.float64)


def one_reading(channel: str, raw: float, rh: float | None, t: float | None) -> Interval:
    """A reading of nothing but this, RH in % and temperature in degC where known."""
    return Interval(
        sensor="paired",
        start=Instant(0.0, 0.0, "paired", trusted=False),  # the fit is of days before the document's own dates
        seconds=HOUR_S,
        frames=FrameCount(good=1),
        layout=Layout("paired", (channel,), 0.0, np.inf),
        mass=(Channel(1, raw, 0.0, raw, raw, 0.0, 0.0),),
        mass_ambient=(),
        counts=(),
        climate=None if rh is None else Climate(rh, t, "paired"),
    )


def _intervals(pairs: Pairs, channel: str) -> Iterator[Interval]:
    humid, warm = pairs.humid, pairs.warm
    rows = zip(pairs.raw_mean.tolist(), pairs.rh_mean.tolist(), pairs.t_mean.tolist(), strict=True)
    for raw, rh, t in rows:
        yield one_reading(channel, raw, rh if humid else None, t if warm else None)
