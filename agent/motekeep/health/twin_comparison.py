"""What a window of blocks says of a pair: by how much each channel departs from what is usual, and what explains it.

Owns the explanations and their shapes across sizes. Must not know when a departure is a finding, nor keep anything.

Each explanation is one number and a shape: a departure of channel i by number times shape[i].

- flow: ln q, the same in every channel, and more where particles settle before they are seen: a cell that is flushed
  every V/Q seconds and loses k per second holds 1/(1 + k V/Q) of them, so the shape is 1 + x/(1 + x), x = k V/Q.
- optics: ln G. A signal of G leaves a threshold where the signal used to be 1/G as large, which is a size larger by
  G^(-1/p), p the local exponent of scattered light, and N(>d) falls there by the local slope: shape slope/p.
- floor: ln of what is added to the smallest channel, and nothing in the others.

Beside them stands what the weather does to a healthy pair: two cells that are not equally warm dry the particles to
unlike sizes, so that all sizes of fine aerosol shift by one factor. It is never an explanation but adds to what may be.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from enum import StrEnum
from itertools import pairwise
from math import log, sqrt

from motekeep.health.lessons.twin_ratio import TwinRatio
from motekeep.health.twin_block import BLOCK_S, Comparison

# Local exponent of light scattered into 60 to 120 degrees by latex at 650 nm: chords over a factor of 1.5 in size of
# the Mie solution (Bohren and Huffman 1983; computed with miepython 3.3.0). The curve ripples, and no unit's own is
# known: hence the width of the optics explanation.
_EXPONENTS = ((0.15, 5.9), (0.3, 3.2), (0.5, 2.4), (1.0, 1.5), (2.5, 2.4), (5.0, 1.6), (10.0, 1.7))
# A particle of unit density falls 3e-5 m/s per um2 (Stokes); density 2, a cell 1 cm high flushed in V/Q = 5 s, and a
# channel's particles some 1.4 times its lower edge: x = 0.06 d^2.
_SETTLING_PER_UM2 = 0.06
_COARSE_UM = 2.0  # from here on the aerosol is dust, of which little takes up water
# Half a degree between two cells at 85 % RH and kappa 0.3 is 2 to 3 % of size (kappa-Koehler, Petters and Kreidenweis
# 2007).
_DRYING_SD = 0.02
_WIDTH = {"flow": 0.10, "optics": 0.20, "floor": 0.0}  # of each shape, as a part of itself
_BLOCKS_A_DAY = 86_400.0 / BLOCK_S


class Explanation(StrEnum):
    """What may lie behind a departure."""

    FLOW = "flow"
    OPTICS = "optics"
    FLOOR = "floor"


@dataclass(frozen=True, slots=True)
class Departure:
    """How far one channel is from what is usual over a window: mean of ln, its variance, the mean slope there."""

    size_um: float
    value: float
    variance: float
    slope: float

    @property
    def drying(self) -> float:
        """Shape of the shift that unlike warmth gives."""
        return self.slope if self.size_um < _COARSE_UM else 0.3 * self.slope


@dataclass(frozen=True, slots=True)
class Fit:
    """One explanation of a window. `number` and its standard deviation `sd` are in ln; `misfit` is -2 ln likelihood
    but for a constant of the window, `chi2` the part of it that a good fit keeps near the number of channels."""

    number: float
    sd: float
    misfit: float
    chi2: float


@dataclass(frozen=True, slots=True)
class Account:
    """A window with all its explanations. `unexplained` is the misfit of no change at all."""

    departures: tuple[Departure, ...]
    unexplained: Fit
    fits: dict[Explanation, Fit]

    @property
    def best(self) -> Explanation:
        return min(self.fits, key=lambda name: self.fits[name].misfit)

    def lead(self, name: Explanation) -> float:
        """By how much `name` is more likely than the likeliest other explanation, in -2 ln likelihood."""
        return min(fit.misfit for other, fit in self.fits.items() if other is not name) - self.fits[name].misfit

    @property
    def gain(self) -> float:
        """By how much the best explanation is more likely than no change."""
        return self.unexplained.misfit - self.fits[self.best].misfit


def account(ratio: TwinRatio, blocks: Sequence[Sequence[Comparison]]) -> Account:
    """Fit every explanation to these blocks, each compared channel by channel; one at least."""
    departures = departures_of(ratio, blocks)
    shapes = {
        Explanation.FLOW: [_flow_shape(d.size_um) for d in departures],
        Explanation.OPTICS: [d.slope / exponent(d.size_um) for d in departures],
        Explanation.FLOOR: [1.0] + [0.0] * (len(departures) - 1),
    }
    nothing = _fit(departures, [0.0] * len(departures), 0.0)
    return Account(departures, nothing, {name: _fit(departures, shape, _WIDTH[name]) for name, shape in shapes.items()})


def departures_of(ratio: TwinRatio, blocks: Sequence[Sequence[Comparison]]) -> tuple[Departure, ...]:
    """Weighted means over the blocks, channel by channel.

    Counting noise averages out with every block; the spread between blocks is slow change of the aerosol, so that only
    each day counts as a new look at it; the learnt level is as uncertain in a month as in an hour.
    """
    days = max(len(blocks) / _BLOCKS_A_DAY, 1.0)
    found = []
    for size, usual, seen in zip(ratio.sizes_um, ratio.channels, zip(*blocks, strict=True), strict=True):
        weights = [1.0 / (c.variance + usual.spread**2) for c in seen]
        total = sum(weights)
        value = sum([w * usual.residual(c) for w, c in zip(weights, seen, strict=True)]) / total
        slope = sum([w * c.slope for w, c in zip(weights, seen, strict=True)]) / total
        counting = sum([w * w * c.variance for w, c in zip(weights, seen, strict=True)]) / total**2
        known = usual.level_sd**2 + (usual.shift_sd * (slope - usual.slope)) ** 2
        found.append(Departure(size, value, counting + known + usual.spread**2 / days, slope))
    return tuple(found)


def _fit(departures: Sequence[Departure], shape: Sequence[float], width: float) -> Fit:
    """Generalised least squares of one number; the shape's own width grows with the number, so it is done thrice."""
    number = sd = 0.0
    variances = [d.variance for d in departures]
    values = [d.value for d in departures]
    drying = [_DRYING_SD * d.drying for d in departures]
    for _ in range(3):
        variances = [d.variance + (width * number * s) ** 2 for d, s in zip(departures, shape, strict=True)]
        information = _product(shape, shape, variances, drying)
        if information > 0.0:
            number = _product(shape, values, variances, drying) / information
            sd = 1.0 / sqrt(information)
    rest = [v - number * s for v, s in zip(values, shape, strict=True)]
    chi2 = _product(rest, rest, variances, drying)
    common = sum([h * h / v for h, v in zip(drying, variances, strict=True)])
    logdet = sum([log(v) for v in variances]) + log(1.0 + common)
    return Fit(number, sd, chi2 + logdet, chi2)


def _product(a: Sequence[float], b: Sequence[float], variances: Sequence[float], common: Sequence[float]) -> float:
    """a' C^-1 b for C = diag(variances) + common common' (Sherman and Morrison 1950)."""
    ab = sum([x * y / v for x, y, v in zip(a, b, variances, strict=True)])
    ah = sum([x * h / v for x, h, v in zip(a, common, variances, strict=True)])
    bh = sum([y * h / v for y, h, v in zip(b, common, variances, strict=True)])
    hh = sum([h * h / v for h, v in zip(common, variances, strict=True)])
    return ab - ah * bh / (1.0 + hh)


def _flow_shape(size_um: float) -> float:
    x = _SETTLING_PER_UM2 * size_um * size_um
    return 1.0 + x / (1.0 + x)


def exponent(size_um: float) -> float:
    """Local exponent of scattered light at this size, even in ln d between the sizes of the table."""
    if size_um <= _EXPONENTS[0][0]:
        return _EXPONENTS[0][1]
    for (small, below), (large, above) in pairwise(_EXPONENTS):
        if size_um <= large:
            return below + (above - below) * log(size_um / small) / log(large / small)
    return _EXPONENTS[-1][1]
