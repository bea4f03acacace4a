"""What the optics of a counter see: which particles make a pulse above each threshold, and pulses that hide others.

Owns scattering response, thresholds, size resolution and coincidence. Must not know flow or firmware.
"""

from math import log

import numpy as np

from motesim.aerosol import Floats, erfc
from motesim.air import Air
from motesim.humidity import growth_factor, optical_factor

# Scattered signal of latex (n = 1.59) at 650 nm into 60 to 120 degrees, um2 against diameter in um: Mie theory,
# computed with miepython 3.3.0. Its local exponent is what makes a loss of light shift each size by another factor.
_DIAMETERS = np.log([0.1, 0.15, 0.2, 0.3, 0.4, 0.5, 0.7, 1.0, 1.5, 2.5, 5.0, 10.0])
_SIGNALS = np.log([5.417e-5, 6.181e-4, 3.266e-3, 0.02312, 0.07735, 0.09377, 0.2254, 0.4389, 0.797, 1.247, 6.694, 19.87])
_LOW_EXPONENT = 5.9
_HIGH_EXPONENT = 1.7


def _log_signal(log_diameter: Floats) -> Floats:
    inside = np.interp(log_diameter, _DIAMETERS, _SIGNALS)
    below = _SIGNALS[0] + _LOW_EXPONENT * (log_diameter - _DIAMETERS[0])
    above = _SIGNALS[-1] + _HIGH_EXPONENT * (log_diameter - _DIAMETERS[-1])
    return np.where(log_diameter < _DIAMETERS[0], below, np.where(log_diameter > _DIAMETERS[-1], above, inside))


def shifted_thresholds_um(edges_um: tuple[float, ...], gain: Floats) -> Floats:
    """Diameters of the latex particles that just reach the thresholds set at `edges_um` when the signal is `gain`
    times what it was at calibration, (edges, gains)."""
    needed = _log_signal(np.log(edges_um))[:, None] - np.log(gain)
    inside = np.interp(needed, _SIGNALS, _DIAMETERS)
    below = _DIAMETERS[0] + (needed - _SIGNALS[0]) / _LOW_EXPONENT
    above = _DIAMETERS[-1] + (needed - _SIGNALS[-1]) / _HIGH_EXPONENT
    return np.asarray(np.exp(np.where(needed < _SIGNALS[0], below, np.where(needed > _SIGNALS[-1], above, inside))))


def visible(air: Air, rh_cell: Floats, edges_um: tuple[float, ...], gain: Floats, resolution: float) -> Floats:
    """Number per cm3 between neighbouring thresholds, the last one open, (samples, channels).

    Particles are grown at the humidity of the sensing cell and seen with latex eyes. Pulse heights of one size scatter
    lognormally by `resolution` (a factor of size; ISO 21501-4 asks for 15 % or better), which makes the counting
    efficiency 50 % at each threshold and widens each population: both lognormal, so the widths add in quadrature.
    """
    thresholds = np.log(shifted_thresholds_um(edges_um, gain))
    above = np.zeros((len(edges_um) + 1, len(air.times)))
    smallest = float(thresholds.min())
    for mode, factor in zip(air.modes, air.factors, strict=True):
        if not factor.any():
            continue
        growth = np.ones_like(rh_cell) if mode.droplets else growth_factor(mode.kappa, rh_cell)
        centre = np.log(mode.diameter_um * growth * optical_factor(mode.index, growth))
        width = np.sqrt(2.0) * np.hypot(log(mode.sigma), log(resolution))
        if (smallest - float(centre.max())) / width > 4.7:  # erfc there is 3e-11: not one pulse in a month
            continue
        above[:-1] += factor * (mode.number / 2.0) * erfc((thresholds - centre) / width)
    return (above[:-1] - above[1:]).T


def coincident(rates: Floats, seen_per_cm3: Floats, sensing_volume_cm3: float) -> Floats:
    """Pulse rates after coincidence, (samples, channels) between thresholds, from the true ones.

    Paralysable: particles whose pulses overlap make one pulse, so of a rate N there remain N exp(-x) with
    x = N Vsens (Jaenicke 1972; independent of flow). A group of overlapping particles is sized by its largest member;
    group sizes are geometric, so that the number above each threshold has a closed form, and small particles hide
    behind large ones but not the other way round. That two small ones add up to a larger one is left out.
    """
    total = rates.sum(axis=1, keepdims=True)
    if not total.any():
        return rates
    alone = np.exp(-sensing_volume_cm3 * seen_per_cm3)[:, None]
    above = np.cumsum(rates[:, ::-1], axis=1)[:, ::-1]
    share = above / np.maximum(total, 1e-300)
    kept = total * alone * share / np.maximum(share + (1.0 - share) * alone, 1e-300)
    return np.asarray(np.clip(kept - np.concatenate([kept[:, 1:], np.zeros_like(total)], axis=1), 0.0, None))
