"""One series of the sensor against the reference, by pairs and by what published rules ask.

Owns which means go into which rule.
"""

from dataclasses import dataclass

import numpy as np

from moteferry.fit.averages import averages
from moteferry.fit.metrics import Comparison, Equivalence, Target, compare, epa_targets, equivalence
from moteferry.fit.pairs import Pairs
from moteferry.fit.record import Floats, RecordError


@dataclass(frozen=True, slots=True)
class Judgement:
    """One series against the reference: of its pairs, and of means of `over` against the published rules."""

    pairs: Comparison
    over: str
    averaged: Comparison
    targets: tuple[Target, ...]
    equivalence: Equivalence


def judged(pairs: Pairs, sensor: Floats, limit_value: float) -> Judgement:
    """`sensor` is one figure a span, ug/m3. Raises RecordError where the two do not vary together."""
    try:
        own = averages(pairs, sensor)
        averaged = compare(own.reference, own.sensor)
        u_reference = float(np.sqrt(np.mean(own.u_random**2)))
        return Judgement(
            compare(pairs.reference, sensor),
            own.over,
            averaged,
            epa_targets(averaged),
            equivalence(own.reference, own.sensor, limit_value, u_reference),
        )
    except ValueError as error:
        raise RecordError("the two records", str(error), "see whether both are of the same air") from error
