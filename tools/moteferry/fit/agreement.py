"""Lines that say how far two instruments agree, each with an error in both.

Owns orthogonal, Deming and York regression and ordinary least squares for comparison. None of them is what a correction
is fitted by (`least_squares`): a line that is fair to both instruments predicts neither best.

Deming 1943, Statistical Adjustment of Data, with delta = var(error of y) / var(error of x); orthogonal is delta = 1
(Pearson 1901, Phil. Mag. 2:559). General errors: York et al. 2004, Am. J. Phys. 72:367.
"""

from dataclasses import dataclass

import numpy as np

from moteferry.fit.record import Floats

STILL = 1e-15
ROUNDS = 200


@dataclass(frozen=True, slots=True)
class AgreementLine:
    """y = intercept + slope x with standard uncertainties. `chi2` is the weighted sum of squares, of York only."""

    slope: float
    intercept: float
    u_slope: float
    u_intercept: float
    chi2: float | None = None


def ordinary(x: Floats, y: Floats) -> AgreementLine:
    """Ordinary least squares of y on x."""
    sxx, _, sxy = _sums(x, y)
    slope = sxy / sxx
    intercept = float(y.mean() - slope * x.mean())
    variance = float(np.sum((y - intercept - slope * x) ** 2)) / (len(x) - 2)
    u_slope = float(np.sqrt(variance / sxx))
    return AgreementLine(slope, intercept, u_slope, u_slope * float(np.sqrt(np.mean(x**2))))


def deming(x: Floats, y: Floats, delta: float = 1.0) -> AgreementLine:
    """Deming regression. The uncertainties are those of the EU guide for delta = 1, scaled alike otherwise."""
    sxx, syy, sxy = _sums(x, y)
    difference = syy - delta * sxx
    slope = float((difference + np.sqrt(difference**2 + 4.0 * delta * sxy**2)) / (2.0 * sxy))
    u_slope = float(np.sqrt(max(syy - sxy**2 / sxx, 0.0) / ((len(x) - 2) * sxx)))
    intercept = float(y.mean() - slope * x.mean())
    return AgreementLine(slope, intercept, u_slope, u_slope * float(np.sqrt(np.sum(x**2) / len(x))))


def orthogonal(x: Floats, y: Floats) -> AgreementLine:
    """Least squares of the distances at right angles: errors of one size in both."""
    return deming(x, y, 1.0)


def york(x: Floats, y: Floats, u_x: Floats, u_y: Floats) -> AgreementLine:
    """York regression with independent errors of each point. Raises ValueError where it does not come to rest."""
    weight_x, weight_y = u_x**-2.0, u_y**-2.0
    slope = ordinary(x, y).slope
    for _ in range(ROUNDS):
        weight = weight_x * weight_y / (weight_x + slope**2 * weight_y)
        x_bar, y_bar = np.average(x, weights=weight), np.average(y, weights=weight)
        beta = weight * ((x - x_bar) / weight_y + slope * (y - y_bar) / weight_x)
        new = float(np.sum(weight * beta * (y - y_bar)) / np.sum(weight * beta * (x - x_bar)))
        moved, slope = abs(new - slope), new
        if moved <= STILL * max(abs(slope), 1.0):
            break
    else:
        raise ValueError("the regression of York does not come to rest")
    adjusted = x_bar + beta
    adjusted_bar = np.average(adjusted, weights=weight)
    u_slope = float(np.sqrt(1.0 / np.sum(weight * (adjusted - adjusted_bar) ** 2)))
    u_intercept = float(np.sqrt(1.0 / np.sum(weight) + (adjusted_bar * u_slope) ** 2))
    intercept = float(y_bar - slope * x_bar)
    chi2 = float(np.sum(weight * (y - slope * x - intercept) ** 2))
    return AgreementLine(slope, intercept, u_slope, u_intercept, chi2)


def _sums(x: Floats, y: Floats) -> tuple[float, float, float]:
    """Centred Sxx, Syy, Sxy. Raises ValueError where a line has no direction."""
    if len(x) < 3:
        raise ValueError("three pairs are the fewest that make a line with an uncertainty")
    dx, dy = x - x.mean(), y - y.mean()
    sxx, syy, sxy = float(dx @ dx), float(dy @ dy), float(dx @ dy)
    if sxx <= 0.0 or sxy == 0.0:
        raise ValueError("the pairs do not vary together")
    return sxx, syy, sxy
