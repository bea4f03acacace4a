"""Where a fit was made: the air and the days it has seen, and whether that is enough.

Owns the range of a document and the warnings. A correction holds where it was fitted; the gain of a longer stay levels
off after some six weeks, and a week can do if it spans the later conditions (Levy Zamora et al. 2023, Atmos. Meas.
Tech. 16:169): so both are looked at. The thresholds are ours.
"""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from moteferry.fit.pairs import HOUR_S, RH_HIGH, Pairs

DAY_S = 86_400.0
FEW_DAYS = 14.0
NARROW_RH = 30.0
LOW_TOP = 3.0  # the highest hour over the median one: with less, the slope hangs on the bulk
GAPPY = 0.5


@dataclass(frozen=True, slots=True)
class Extent:
    """What the pairs cover. `ranges` are those of the document: raw ug/m3 of the channel, RH and t when known."""

    days: float
    spans: int
    seconds: float
    filled: float
    ranges: Mapping[str, tuple[float, float]]
    rh_span: float | None
    warnings: tuple[str, ...]


def extent(pairs: Pairs, channel: str, *, by_temperature: bool = False) -> Extent:
    """`filled` is the share of the time between first and last span that is paired.

    RH limits any document: humidity acts on every sensor, whether this fit saw it or not. Temperature limits one that
    corrects for it; a document of six weeks would otherwise flag the other seasons whole.
    """
    days = (float(pairs.start[-1] - pairs.start[0]) + pairs.seconds) / DAY_S
    filled = len(pairs) * pairs.seconds / (days * DAY_S)
    raw = pairs.raw_mean
    # From 0: below the lowest hour lies cleaner air, and a flag on every clean night would teach people to ignore it.
    ranges = {channel: (0.0, round(float(raw.max()), 2))}
    rh_span = None
    if pairs.humid:
        low, high = np.quantile(pairs.rh[pairs.weight > 0.0], [0.001, 0.999])
        ranges["rh"] = (round(float(low), 1), round(min(max(float(high), float(low) + 0.1), RH_HIGH), 1))
        rh_span = ranges["rh"][1] - ranges["rh"][0]
    if pairs.warm and by_temperature:
        low, high = np.quantile(pairs.t[pairs.weight > 0.0], [0.001, 0.999])
        ranges["t"] = (round(float(low), 1), round(max(float(high), float(low) + 0.1), 1))
    found = Extent(days, len(pairs), pairs.seconds, filled, ranges, rh_span, ())
    warnings = tuple(_warnings(found, float(raw.max()), float(np.median(raw))))
    return Extent(days, len(pairs), pairs.seconds, filled, ranges, rh_span, warnings)


def _warnings(found: Extent, highest: float, usual: float) -> list[str]:
    said = []
    if found.days < FEW_DAYS:
        said.append(
            f"the records share {found.days:.1f} days; two weeks are the least for a correction to be trusted in "
            "other weather, six are better"
        )
    if found.filled < GAPPY:
        said.append(f"only {100.0 * found.filled:.0f} % of the time between first and last pair is paired")
    if found.rh_span is None:
        said.append("the sensor's record has no humidity: nothing is corrected for it, and humid hours read too high")
    elif found.rh_span < NARROW_RH:
        low, high = found.ranges["rh"]
        said.append(
            f"humidity only went from {low:.0f} to {high:.0f} %: outside of that, readings will be flagged as suspect"
        )
    if highest < LOW_TOP * usual:
        said.append(
            f"the highest pair ({highest:.0f} ug/m3) is under {LOW_TOP:g} times the usual one: smoke and dust are "
            "outside of what was fitted"
        )
    if found.seconds > HOUR_S:
        said.append(
            f"the reference is by {found.seconds / HOUR_S:g} h: what happens within that time was averaged away before "
            "it could be compared"
        )
    return said
