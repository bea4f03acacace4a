"""What speaks against a fit, beside where it was made: each one sentence that a person can act on.

Owns these sentences and their thresholds, which are ours. Those about days and ranges are owned by `extent`.
"""

import numpy as np
from scipy.stats import theilslopes

from moteferry.fit.clock_check import lag_hours
from moteferry.fit.metrics import Comparison
from moteferry.fit.pairs import Pairs
from moteferry.fit.record import Floats

DAY_S = 86_400.0
# `max_shift` of a device as it is shipped, and the figure below which a move is measured against this; see
# message/rehearsal.py, which decides.
MAX_SHIFT, FLOOR_UG_M3 = 0.5, 5.0
LOOSE_R2 = 0.5
# A drift is told when the robust trend is surely there and moves more than this share of the mean.
DRIFT_SHARE, DRIFT_DAYS = 0.1, 14


def doubts(pairs: Pairs, value: Floats, corrected: Comparison) -> list[str]:
    """`value` is what the device makes of each span, `corrected` the comparison on time that the fit had not seen."""
    said = []
    if lag := lag_hours(pairs):
        said.append(
            f"the records fit best with the reference's stamps {abs(lag)} h {'earlier' if lag > 0 else 'later'}: is it "
            "stamped by the end of the hour, or in local time?"
        )
    if corrected.r2 < LOOSE_R2:
        said.append(f"the sensor hardly follows the reference (R2 {corrected.r2:.2f}): do not rely on this fit")
    move = np.median(np.abs(value - pairs.raw_mean) / np.maximum(pairs.raw_mean, FLOOR_UG_M3))
    if move > MAX_SHIFT:
        said.append(
            f"it moves readings by {100.0 * move:.0f} %; a device whose max_shift is {MAX_SHIFT:g} will refuse it"
        )
    if not pairs.u_random.any():
        said.append("the reference states no uncertainty: what it is off by itself is not in u")
    if (drift := _drift(pairs, value)) is not None:
        said.append(f"what is left over drifts by {drift:+.2f} ug/m3 in 30 days: is one of both changing?")
    return said


def _drift(pairs: Pairs, value: Floats) -> float | None:
    """The robust trend of daily means of the error, ug/m3 in 30 days, where it surely is one (Theil-Sen; Sen 1968, J.
    Am. Stat. Assoc. 63:1379). Days still resemble their neighbours, so the interval asked is that of 99 %."""
    days, number = np.unique(np.floor(pairs.start / DAY_S), return_inverse=True)
    if len(days) < DRIFT_DAYS:
        return None
    error = np.bincount(number, value - pairs.reference) / np.bincount(number)
    slope, _, low, high = theilslopes(error, days, alpha=0.99)
    moved = abs(slope) * float(days[-1] - days[0])
    sure = low * high > 0.0 and moved > max(DRIFT_SHARE * float(pairs.reference.mean()), 0.5)
    return 30.0 * float(slope) if sure else None
