"""How particles fall and diffuse in still air.

Owns slip, settling velocity and diffusion to walls, in SI units with diameters in um. Must not know instruments.
"""

from math import exp, pi

_MEAN_FREE_PATH_UM = 0.0651
_HINDS_PATH_UM = 0.066
VISCOSITY = 1.81e-5  # Pa s, air at 20 degC
GRAVITY = 9.81
BOLTZMANN = 1.380649e-23
ROOM_K = 293.0


def slip(diameter_um: float) -> float:
    """Cunningham correction 1 + (2 lambda/d)(1.257 + 0.4 exp(-1.1 d/(2 lambda))) (Seinfeld and Pandis 2006, 9.34)."""
    knudsen = 2.0 * _MEAN_FREE_PATH_UM / diameter_um
    return 1.0 + knudsen * (1.257 + 0.4 * exp(-1.1 / knudsen))


def _hinds_slip(diameter_um: float) -> float:
    """1 + (lambda/d)(2.34 + 1.05 exp(-0.39 d/lambda)): the form behind the settling table of Hinds, 2 % above the
    other one at 0.1 um."""
    ratio = _HINDS_PATH_UM / diameter_um
    return 1.0 + ratio * (2.34 + 1.05 * exp(-0.39 / ratio))


def settling_m_s(diameter_um: float, density: float = 1.0) -> float:
    """Stokes velocity rho d^2 g Cc/(18 mu) in m/s, density in g/cm3 (Hinds, table A11)."""
    d = diameter_um * 1e-6
    return density * 1000.0 * d * d * GRAVITY * _hinds_slip(diameter_um) / (18.0 * VISCOSITY)


def diffusion_loss_per_s(diameter_um: float, gap_m: float) -> float:
    """Slowest decay rate of a still layer between walls `gap_m` apart, pi^2 D/gap^2, Stokes-Einstein D."""
    d = BOLTZMANN * ROOM_K * slip(diameter_um) / (3.0 * pi * VISCOSITY * diameter_um * 1e-6)
    return pi * pi * d / (gap_m * gap_m)
