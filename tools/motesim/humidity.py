"""Water in the air and on particles: vapour pressure, growth by humidity, optical size of the grown particle.

Owns hygroscopic growth. Must not know populations or instruments.
"""

import numpy as np

from motesim.aerosol import Floats

TOP_ACTIVITY = 0.99  # kappa-Koehler without the Kelvin term has no finite size at 1; fog is a population of its own
WATER_INDEX = 1.33
LATEX_INDEX = 1.59  # the particles that a counter is calibrated with


def saturation_hpa(temperature_c: Floats) -> Floats:
    """Saturation vapour pressure over water (Magnus form, Alduchov and Eskridge 1996 coefficients, from memory)."""
    return 6.1094 * np.exp(17.625 * temperature_c / (temperature_c + 243.04))


def warmed(rh_pct: Floats, temperature_c: Floats, by_c: float) -> Floats:
    """Relative humidity in % of the same air warmed by `by_c`: an enclosure runs drier than the air around it."""
    return rh_pct * saturation_hpa(temperature_c) / saturation_hpa(temperature_c + by_c)


def growth_factor(kappa: float, rh_pct: Floats) -> Floats:
    """Wet over dry diameter, (1 + kappa aw/(1 - aw))^(1/3) (Petters and Kreidenweis 2007, no Kelvin term)."""
    activity = np.clip(rh_pct / 100.0, 0.0, TOP_ACTIVITY)
    return np.asarray((1.0 + kappa * activity / (1.0 - activity)) ** (1.0 / 3.0))


def mass_factor(kappa: float, rh_pct: Floats, density: float = 1.65) -> Floats:
    """Wet over dry mass, 1 + (kappa/density)/(1/aw - 1) (form of Crilley et al. 2018)."""
    activity = np.clip(rh_pct / 100.0, 1e-9, TOP_ACTIVITY)
    return np.asarray(1.0 + kappa / density / (1.0 / activity - 1.0))


def _polarisability(index: Floats) -> Floats:
    square = index * index
    return (square - 1.0) / (square + 2.0)


def optical_factor(index: float, growth: Floats) -> Floats:
    """Latex-equivalent over geometric wet diameter, (L(n)/L(1.59))^(1/3) with the Lorentz-Lorenz term L.

    The index of the wet particle is mixed by volume. Rayleigh limit (signal ~ L^2 d^6): it is a few per cent too
    strong above 0.5 um, less than the spread of real optics.
    """
    dry_share = 1.0 / growth**3
    mixed = index * dry_share + WATER_INDEX * (1.0 - dry_share)
    reference = _polarisability(np.array([LATEX_INDEX]))
    return np.asarray(np.cbrt(_polarisability(mixed) / reference))
