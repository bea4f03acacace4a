"""Cross-validation on whole blocks of time that the fit has not seen, with a gap on both sides.

Owns the cut into blocks and what each form errs in them. Random folds leave the neighbours of each judged hour in the
fit and come out far too good (Roberts et al. 2017, Ecography 40:913); the gap keeps what is left of that out (h-block:
Burman, Chow and Nolan 1994, Biometrika 81:351). A block may hold air that the rest has not: that is part of the answer.
"""

import itertools
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from moteferry.fit.candidates import Candidate
from moteferry.fit.least_squares import UnfitError, fitted
from moteferry.fit.pairs import Pairs
from moteferry.fit.record import Floats

DAY_S = 86_400.0
MOST_BLOCKS, LEAST_BLOCKS = 10, 4
# Air of one kind lasts for a day or two; a shorter record cannot afford as much.
GAP_S = DAY_S
# A block with fewer spans than this tells nothing of its own and is judged with its neighbour.
FEWEST = 4


@dataclass(frozen=True, slots=True)
class Block:
    """One block: which spans are judged, and which the fit may see."""

    start: float
    end: float
    judged: NDArray[np.bool_]
    seen: NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class Trial:
    """How a form did on blocks it had not seen. `held_out` is what it predicts for each span, (n,), floored at zero as
    a device does; `square` the mean squared error of each block, ug2/m6, (blocks,)."""

    candidate: Candidate
    held_out: Floats
    square: Floats

    @property
    def rmse(self) -> float:
        """Over blocks, each of which counts alike, ug/m3."""
        return float(np.sqrt(self.square.mean()))

    @property
    def standard_error(self) -> float:
        """Of the mean of `square` over blocks."""
        return float(self.square.std(ddof=1) / np.sqrt(len(self.square)))


def blocks(pairs: Pairs) -> list[Block]:
    """Cut the time that the pairs span into blocks of one length, 4 to 10 of them, none shorter than a day if it can.

    The gap is a day, or half a block where blocks are short.
    """
    start, end = float(pairs.start[0]), float(pairs.start[-1]) + pairs.seconds
    count = int(np.clip((end - start) // DAY_S, LEAST_BLOCKS, MOST_BLOCKS))
    edges = np.linspace(start, end, count + 1)
    gap = min(GAP_S, (end - start) / count / 2.0)
    inner = [e for e in edges[1:-1] if _enough(pairs, start, e)]
    return list(_cut(pairs, _merged(pairs, start, end, inner), gap))


def _enough(pairs: Pairs, start: float, end: float) -> bool:
    return int(((pairs.start >= start) & (pairs.start < end)).sum()) >= FEWEST


def _merged(pairs: Pairs, start: float, end: float, inner: Sequence[float]) -> list[float]:
    """Edges such that no block is nearly empty."""
    edges = [start]
    for edge in inner:
        if _enough(pairs, edges[-1], edge) and _enough(pairs, edge, end):
            edges.append(float(edge))
    return [*edges, end]


def _cut(pairs: Pairs, edges: Sequence[float], gap: float) -> Iterator[Block]:
    ends = pairs.start + pairs.seconds
    for low, high in itertools.pairwise(edges):
        judged = (pairs.start >= low) & (pairs.start < high)
        yield Block(low, high, judged, (ends <= low - gap) | (pairs.start >= high + gap))


def trial(
    candidate: Candidate, pairs: Pairs, cut: Sequence[Block], sigma: Floats, whole: Floats, *, robust: bool = False
) -> Trial:
    """Try one form on each block. `whole` are its parameters on all spans, where the search begins.

    Raises UnfitError where it cannot be fitted without some block.
    """
    features = candidate.features(pairs)
    held_out = np.full(len(pairs), np.nan)
    square = np.empty(len(cut))
    for number, block in enumerate(cut):
        if not block.seen.any():
            raise UnfitError("a block leaves nothing to fit on")
        seen = features.of(block.seen)
        found = fitted(candidate, seen, pairs.reference[block.seen], sigma[block.seen], robust=robust, begin=whole)
        predicted = np.maximum(candidate.predict(found, features.of(block.judged)), 0.0)
        held_out[block.judged] = predicted
        square[number] = np.mean((predicted - pairs.reference[block.judged]) ** 2)
    return Trial(candidate, held_out, square)
