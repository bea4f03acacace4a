"""How sure a statistic of a series is: the moving-block bootstrap.

Owns the resampling. Hours resemble their neighbours, so what is drawn with replacement are runs of neighbours (Kuensch
1989, Ann. Stat. 17:1217); single hours would make the statistic look several times as sure as it is.

The length of the runs is Carlstein's for an AR(1) series in Kuensch's overlapping form, (3/2)^(1/3) (2 phi / (1 -
phi^2))^(2/3) n^(1/3) (Carlstein 1986, Ann. Stat. 14:1171; from memory), phi being the lag-1 autocorrelation of what the
fit left over; never less than `LEAST_S`, since residuals of air are remembered for longer than an AR(1) says.
"""

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from moteferry.fit.pairs import Pairs
from moteferry.fit.record import Floats

LEAST_S = 48.0 * 3600.0
# With fewer runs than this to draw from, the spread of what is drawn is too small by itself.
FEWEST_RUNS = 6
REPLICATES = 200  # their standard deviation is then known to 5 %


def lag1(rest: Floats) -> float:
    """Lag-1 autocorrelation about the mean, 0..0.99."""
    centred = rest - rest.mean()
    power = float(centred @ centred)
    return float(np.clip(centred[1:] @ centred[:-1] / power, 0.0, 0.99)) if power > 0.0 else 0.0


def run_length(rest: Floats, least: int) -> int:
    """How many neighbours are drawn together; see the module."""
    n = len(rest)
    phi = lag1(rest)
    optimal = (1.5 * (2.0 * phi / (1.0 - phi**2)) ** 2 * n) ** (1.0 / 3.0)
    return int(np.clip(round(optimal), min(least, n // FEWEST_RUNS), max(n // FEWEST_RUNS, 1)))


def least_run(pairs: Pairs) -> int:
    """`LEAST_S` in spans."""
    return max(round(LEAST_S / pairs.seconds), 1)


def drawn(n: int, length: int, rng: np.random.Generator) -> NDArray[np.int64]:
    """n places of a series of n, as runs of `length` from anywhere."""
    starts = rng.integers(0, n - length + 1, size=-(-n // length))
    return np.asarray((starts[:, None] + np.arange(length)).reshape(-1)[:n], dtype=np.int64)


def replicates(
    statistic: Callable[[NDArray[np.int64]], Floats],
    n: int,
    length: int,
    count: int = REPLICATES,
    seed: int = 1,
) -> Floats:
    """`statistic` of `count` resampled series, (count, k). It is handed places, and may refuse some with ValueError.

    Raises ValueError when it refuses more than a tenth: the statistic then hangs on single runs.
    """
    rng = np.random.default_rng(seed)
    out: list[Floats] = []
    for _ in range(count):
        try:
            out.append(statistic(drawn(n, length, rng)))
        except ValueError:
            continue
    if len(out) < 0.9 * count:
        raise ValueError(f"{count - len(out)} of {count} resampled records could not be fitted")
    return np.array(out)


def covariance(found: Floats) -> Floats:
    """Of the columns of `found`, (k, k)."""
    return np.atleast_2d(np.cov(found, rowvar=False))
