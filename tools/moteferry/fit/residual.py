"""What a correction leaves over: u^2 + (relative y)^2, the form of a document's `[residual]`.

Owns its estimate. It is made on blocks that the fit had not seen, so it knows of air unlike that of the fit. Maximum
likelihood for a Gaussian finds how it grows with the figure. Real errors have heavy tails, so both parts are then
scaled until twice the whole uncertainty that the device states holds 95 % of those spans: people act on twice u.

The scatter of the comparison is that of the sensor and of the reference. The reference's own random part is taken out,
and what the reference is off by all along is put in: a reading is off by that as well and no comparison shows it.
"""

import numpy as np
from scipy.optimize import brentq, minimize, nnls

from moteferry.fit.record import Floats

SHARE, COVERAGE = 0.95, 2.0
# Bounds on the search, ug/m3 and relative. The device asks that something is left over.
LOW = np.log([0.05, 1e-3])
HIGH = np.log([500.0, 1.0])
# Parameters and climate may explain all of a small error; this share of the residual stays, as the air will differ.
LEAST_SCALE, MOST_SCALE = 0.5, 10.0


def shape(error: Floats, value: Floats, u_random: Floats) -> Floats:
    """(u in ug/m3, relative) of maximum likelihood for errors, (n,), made at corrected figures `value`, (n,)."""

    def unlikely(log_parts: Floats) -> float:
        variance = variance_of(np.exp(log_parts), value) + u_random**2
        return float(np.sum(np.log(variance) + error**2 / variance))

    begin = np.clip(np.log([max(float(np.std(error)), 0.05), 0.1]), LOW, HIGH)
    found = minimize(unlikely, begin, method="Nelder-Mead", bounds=list(zip(LOW, HIGH, strict=True)))
    return np.asarray(np.exp(found.x))


def scaled(parts: Floats, error: Floats, value: Floats, other: Floats) -> Floats:
    """`parts` times what makes twice the whole uncertainty hold 95 % of the errors; `other` is all variance beside the
    residual, (n,): of the parameters, the climate and the reference."""
    own = variance_of(parts, value)

    def excess(scale: float) -> float:
        return float(np.quantile(np.abs(error) / np.sqrt(other + scale**2 * own), SHARE)) - COVERAGE

    if excess(LEAST_SCALE) <= 0.0:
        return parts * LEAST_SCALE
    if excess(MOST_SCALE) >= 0.0:
        return parts * MOST_SCALE
    return np.asarray(parts * brentq(excess, LEAST_SCALE, MOST_SCALE))


def with_common(parts: Floats, value: Floats, u_common: Floats) -> tuple[float, float]:
    """(u, relative) of the document: with what the reference is off by all along."""
    common, _ = nnls(np.stack([np.ones_like(value), value**2], axis=1), u_common**2)
    u, relative = np.sqrt(parts**2 + common)
    return float(u), float(relative)


def variance_of(parts: Floats, value: Floats) -> Floats:
    """Of the residual at corrected figures, (n,)."""
    return np.asarray(parts[0] ** 2 + (parts[1] * value) ** 2)
