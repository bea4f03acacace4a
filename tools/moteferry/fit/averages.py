"""Means of 24 h from pairs of an hour: what limit values and published targets are stated for.

Owns the completeness of a day: 18 of 24 hours (40 CFR 50, App. N; from memory). Days are those of UTC.
"""

from dataclasses import dataclass

import numpy as np

from moteferry.fit.pairs import Pairs
from moteferry.fit.record import Floats
from motekeep.measure.reading import COMPLETENESS

DAY_S = 86_400.0
# Fewer days make no regression that could be held against a target.
FEWEST = 10


@dataclass(frozen=True, slots=True)
class Averages:
    """(n,): reference and its random u, and the figures of the sensor, ug/m3. `over` says what they are means of."""

    over: str
    reference: Floats
    u_random: Floats
    sensor: Floats


def averages(pairs: Pairs, sensor: Floats) -> Averages:
    """Means of complete days; where there are under ten of them, the pairs as they are."""
    hours = pairs.seconds / 3600.0
    as_they_are = Averages(f"{hours:g} h", pairs.reference, pairs.u_random, sensor)
    if pairs.seconds >= DAY_S:
        return as_they_are
    _, number = np.unique(np.floor(pairs.start / DAY_S), return_inverse=True)
    n = np.bincount(number)
    keep = n * pairs.seconds >= COMPLETENESS * DAY_S
    if keep.sum() < FEWEST:
        return as_they_are

    def sums(values: Floats) -> Floats:
        return np.asarray(np.bincount(number, values)[keep])

    return Averages(
        "24 h",
        sums(pairs.reference) / n[keep],
        np.sqrt(sums(pairs.u_random**2)) / n[keep],
        sums(sensor) / n[keep],
    )
