"""Whether the two records run on one clock: an hour that is stamped by its end, or in local time, fits nearly as well.

Owns that suspicion. Must not know how anything is fitted.
"""

import numpy as np

from moteferry.fit.pairs import HOUR_S, Pairs
from moteferry.fit.record import Floats

FARTHEST_H = 14  # the widest that local times are from UTC
# Of the variance that the right stamp leaves unexplained, a wrong one leaves more. A lag has to do this much better
# before it is believed; ours.
BETTER = 0.8
FEWEST = 40


def lag_hours(pairs: Pairs) -> int:
    """By how many hours the reference's stamps seem to be late (early when negative); 0 when they fit best as they are.

    Only spans of one hour tell; 0 for others.
    """
    if pairs.seconds != HOUR_S:
        return 0
    raw = pairs.raw_mean
    place = {hour: i for i, hour in enumerate(np.round(pairs.start / HOUR_S).astype(int).tolist())}
    left = {lag: _unexplained(place, raw, pairs.reference, lag) for lag in range(-FARTHEST_H, FARTHEST_H + 1)}
    best = min(left, key=left.__getitem__)
    return best if left[best] < BETTER * left[0] else 0


def _unexplained(place: dict[int, int], raw: Floats, reference: Floats, lag: int) -> float:
    """1 - r2 of the sensor's hour with the reference's figure stamped `lag` hours later."""
    both = [(i, place[hour + lag]) for hour, i in place.items() if hour + lag in place]
    if len(both) < FEWEST:
        return 1.0
    own, other = np.array(both).T
    x, y = raw[own], reference[other]
    if np.ptp(x) == 0.0 or np.ptp(y) == 0.0:
        return 1.0
    return 1.0 - float(np.corrcoef(x, y)[0, 1] ** 2)
