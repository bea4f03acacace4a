"""Which form becomes the correction: the simplest one that is within one standard error of the best.

Owns that rule (Breiman et al. 1984, Classification and Regression Trees, 3.4.3): errors of a few blocks are too
uncertain to pay for a parameter with. The standard error is that of the best form's squared error over its blocks.
"""

from collections.abc import Sequence
from dataclasses import dataclass

from moteferry.fit.blocks import Trial


@dataclass(frozen=True, slots=True)
class Choice:
    """The chosen trial, the best one, and the squared error (ug2/m6) up to which a form is as good as the best."""

    chosen: Trial
    best: Trial
    limit: float


def choose(trials: Sequence[Trial]) -> Choice:
    """`trials` from simple to rich, at least one."""
    best = min(trials, key=lambda t: float(t.square.mean()))
    limit = float(best.square.mean()) + best.standard_error
    chosen = next(t for t in trials if float(t.square.mean()) <= limit)
    return Choice(chosen, best, limit)
