"""What a correction leaves over: u^2 + (relative y)^2, the form of a document's `[residual]`.

Owns its estimate. It is made on blocks that the fit had not seen, so it holds the error of the parameters and of air
unlike that of the fit too. Maximum likelihood for a Gaussian finds both parts; as real errors have heavy tails, it is
then widened, never narrowed, until twice it holds 95 % of those hours.

The scatter of the comparison is that of the sensor and of the reference. The reference's own random part is taken out,
and what the reference is off by all along is put in: a reading is off by that as well and no comparison shows it.
"""

import numpy as np
from scipy.optimize import minimize, nnls

from moteferry.fit.record import Floats

SHARE, COVERAGE = 0.95, 2.0
# Bounds on the search, ug/m3 and relative. The device asks that something is left over.
LOW = np.log([0.05, 1e-3])
HIGH = np.log([500.0, 1.0])


def residual(error: Floats, value: Floats, u_random: Floats, u_common: Floats) -> tuple[float, float]:
    """(u in ug/m3, relative) for errors, (n,), made at corrected figures `value`, (n,)."""

    def unlikely(log_parts: Floats) -> float:
        variance = _variance(np.exp(log_parts), value) + u_random**2
        return float(np.sum(np.log(variance) + error**2 / variance))

    begin = np.clip(np.log([max(float(np.std(error)), 0.05), 0.1]), LOW, HIGH)
    found = minimize(unlikely, begin, method="Nelder-Mead", bounds=list(zip(LOW, HIGH, strict=True)))
    parts = np.exp(np.asarray(found.x))
    ratio = np.abs(error) / np.sqrt(_variance(parts, value) + u_random**2)
    parts *= max(float(np.quantile(ratio, SHARE)) / COVERAGE, 1.0)
    common, _ = nnls(np.stack([np.ones_like(value), value**2], axis=1), u_common**2)
    u, relative = np.sqrt(parts**2 + common)
    return float(u), float(relative)


def _variance(parts: Floats, value: Floats) -> Floats:
    return np.asarray(parts[0] ** 2 + (parts[1] * value) ** 2)
