"""Lognormal particle populations: number above a size, volume, mass below a cut, and published examples of them.

Owns the dry aerosol. Must not know humidity, instruments or time.
"""

from dataclasses import dataclass, replace
from math import exp, log, pi, sqrt

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

# Chebyshev fit of erfc (Press et al., Numerical Recipes, section 6.2): relative error below 1.2e-7 everywhere, also
# far out in the tail, where a nucleation mode of 1e5 per cm3 makes an absolute error of 1e-7 visible.
_ERFC = (
    -1.26551223,
    1.00002368,
    0.37409196,
    0.09678418,
    -0.18628806,
    0.27886807,
    -1.13520398,
    1.48851587,
    -0.82215223,
    0.17087277,
)


def erfc(x: Floats) -> Floats:
    """Complementary error function of an array, relative error below 1.2e-7."""
    size = np.abs(x)
    t = 1.0 / (1.0 + 0.5 * size)
    series = np.full_like(t, _ERFC[-1])
    for coefficient in _ERFC[-2::-1]:
        series = series * t + coefficient
    tail = t * np.exp(-size * size + series)
    return np.where(x >= 0.0, tail, 2.0 - tail)


@dataclass(frozen=True, slots=True)
class Mode:
    """One lognormal population of dry particles.

    `number` per cm3; `diameter_um` is the count median diameter, `sigma` the geometric standard deviation,
    `density` in g/cm3, `kappa` the hygroscopicity, `index` the refractive index. `droplets` are water that holds no
    dry mass and does not grow further: fog.
    """

    number: float
    diameter_um: float
    sigma: float
    density: float = 1.65
    kappa: float = 0.25
    index: float = 1.50
    droplets: bool = False

    @property
    def volume(self) -> float:
        """um3/cm3: (pi/6) N CMD^3 exp(4.5 ln^2 sigma) (Hatch and Choate 1929)."""
        return pi / 6.0 * self.number * self.diameter_um**3 * exp(4.5 * log(self.sigma) ** 2)

    @property
    def mass_median_um(self) -> float:
        """CMD exp(3 ln^2 sigma) (Hatch and Choate 1929)."""
        return self.diameter_um * exp(3.0 * log(self.sigma) ** 2)

    @property
    def coarse(self) -> bool:
        """Whether its mass sits above the fine fraction: what rain washes out and wind raises."""
        return self.mass_median_um > 2.5

    def above(self, edge_um: float) -> float:
        """Number per cm3 above a geometric diameter: N/2 erfc(ln(d/Dg) / (sqrt2 ln sigma))."""
        x = np.array([log(edge_um / self.diameter_um) / (sqrt(2.0) * log(self.sigma))])
        return self.number / 2.0 * float(erfc(x)[0])

    def mass_below(self, cut_um: float, *, aerodynamic: bool = True) -> float:
        """Dry mass in ug/m3 below a diameter; PM is defined on the aerodynamic one, d_a / sqrt(density)."""
        if self.droplets:
            return 0.0
        cut = cut_um / sqrt(self.density) if aerodynamic else cut_um
        x = np.array([log(self.mass_median_um / cut) / (sqrt(2.0) * log(self.sigma))])
        return self.density * self.volume / 2.0 * float(erfc(x)[0])

    def times(self, factor: float) -> "Mode":
        return replace(self, number=self.number * factor)


def above(modes: tuple[Mode, ...], edge_um: float) -> float:
    """Number per cm3 above a geometric diameter, all modes together."""
    return sum(mode.above(edge_um) for mode in modes)


def mass_below(modes: tuple[Mode, ...], cut_um: float, *, aerodynamic: bool = True) -> float:
    """Dry mass in ug/m3 below a diameter, all modes together."""
    return sum(mode.mass_below(cut_um, aerodynamic=aerodynamic) for mode in modes)


def _log10(number: float, diameter_um: float, log_sigma: float, density: float = 1.65, kappa: float = 0.25) -> Mode:
    return Mode(number, diameter_um, 10.0**log_sigma, density, kappa)


# Densities and kappas are ours, inside the published ranges (fine 1.4-1.8, dust 2.6; continental 0.27+-0.21 and marine
# 0.72+-0.24, Pringle et al. 2010; smoke and dust low, Crilley et al. 2020).
CATALOGUE: dict[str, tuple[Mode, ...]] = {
    # Whitby 1978, in Hinds table 14.3
    "average-urban": (
        Mode(106_000, 0.014, 1.80),
        Mode(32_000, 0.054, 2.16),
        Mode(5.4, 0.86, 2.21, density=2.0, kappa=0.05),
    ),
    # Jaenicke 1993, in Seinfeld and Pandis 2006 table 8.3
    "urban": (_log10(9.93e4, 0.013, 0.245), _log10(1.11e3, 0.014, 0.666), _log10(3.64e4, 0.050, 0.337)),
    "rural": (_log10(6650, 0.015, 0.225), _log10(147, 0.054, 0.557), _log10(1990, 0.084, 0.266)),
    "remote-continental": (
        _log10(3200, 0.020, 0.161),
        _log10(2900, 0.116, 0.217),
        _log10(0.300, 1.8, 0.380, 2.0, 0.05),
    ),
    "marine": (
        _log10(133, 0.008, 0.657, 1.65, 0.6),
        _log10(66.6, 0.266, 0.210, 1.75, 0.7),
        _log10(3.06, 0.580, 0.396, 2.0, 1.1),
    ),
    "free-troposphere": (_log10(129, 0.007, 0.645), _log10(59.7, 0.250, 0.253), _log10(63.5, 0.520, 0.425)),
    "desert": (
        _log10(726, 0.002, 0.247, 1.8, 0.1),
        _log10(114, 0.038, 0.770, 2.6, 0.02),
        _log10(0.178, 21.6, 0.438, 2.6, 0.02),
    ),
}

# What events bring. Smoke: Reid et al. 2005, values from memory. Dust: Hess et al. 1998, mineral modes, radii doubled,
# from memory. Salt: the coarse marine mode of Jaenicke 1993. The others are our own invention.
SMOKE = (Mode(1.0, 0.22, 1.6, density=1.3, kappa=0.10, index=1.53),)
DUST = (
    Mode(30.5, 0.78, 2.00, density=2.6, kappa=0.02, index=1.53),
    Mode(0.142, 3.80, 2.15, density=2.6, kappa=0.02, index=1.53),
)
SALT = (Mode(1.0, 0.58, 10.0**0.396, density=2.0, kappa=1.1),)
FIREWORK = (Mode(1.0, 0.25, 1.7, density=1.8, kappa=0.35),)
PLUME = (Mode(1.0, 0.18, 1.8, density=1.2, kappa=0.05), Mode(0.01, 2.0, 1.9, density=2.2, kappa=0.02))
# Droplets that pass a warm inlet: the rest of a fog evaporates or settles on the way. With some 14 per cm3 the counts
# rise as in the field: total by up to a quarter, above 2.5 um by more than half (Jayaratne et al. 2018).
FOG = (Mode(1.0, 1.3, 1.6, density=1.0, kappa=0.0, index=1.33, droplets=True),)
