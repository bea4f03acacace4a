"""Counting statistics of a pulse counter whose printed numbers are scaled by its firmware.

Owns what a count is worth: the noise scale, the variance of a mean, the exact interval of a small number. Must not know
corrections.

A frame prints R = s n "per 0.1 L" for n pulses really seen, so its variance is s R and not R. The mean of N frames then
has the variance `scale` R / N, where `scale` is s for independent frames and s k when each frame pools the k last ones:
pooling hides noise between neighbours and takes none out of the mean. This one number is what is learnt of a unit, best
from the means of whole intervals, and what physics predicts for one that counts every pulse: see `physical_scale`.
"""

from math import exp, lgamma, log, sqrt


def physical_scale(flow_l_min: float, period_s: float) -> float:
    """The noise scale of a counter that sees every particle of its flow: 0.1 L over the volume drawn in one frame."""
    return 6.0 / (flow_l_min * period_s)


def count_variance(mean: float, frames: int, scale: float) -> float:
    """Variance of the mean of `frames` printed counts, in their own unit squared.

    One pulse is added to those seen: a count of zero is not a certainty. It is the variance of the Gamma(n + 1)
    posterior of a Poisson mean under a flat prior, in pulses n + 1.
    """
    if frames < 1:
        raise ValueError("no frames, no mean")
    pulse = scale / frames
    return pulse * (max(mean, 0.0) + pulse)


def garwood(n: int, level: float = 0.95) -> tuple[float, float]:
    """Exact two-sided interval of a Poisson mean after `n` events (Garwood 1936, Biometrika 28:437).

    Its ends are halves of chi-square quantiles with 2n and 2n + 2 degrees of freedom, found here by bisection on the
    incomplete gamma function.
    """
    tail = (1.0 - level) / 2.0
    low = 0.0 if n == 0 else _gamma_quantile(tail, float(n))
    return low, _gamma_quantile(1.0 - tail, n + 1.0)


def _gamma_quantile(probability: float, shape: float) -> float:
    """x with P(shape, x) = probability."""
    low, high = 0.0, shape + 20.0 * sqrt(shape) + 20.0
    for _ in range(80):  # halves 1e6 down to less than a rounding error
        middle = (low + high) / 2.0
        if lower_gamma(shape, middle) < probability:
            low = middle
        else:
            high = middle
    return (low + high) / 2.0


def lower_gamma(shape: float, x: float) -> float:
    """The regularised lower incomplete gamma function P(shape, x), by series (Abramowitz and Stegun 1964, 6.5.29)."""
    if x <= 0.0:
        return 0.0
    term = total = 1.0 / shape
    n = shape
    while term > total * 1e-17:
        n += 1.0
        term *= x / n
        total += term
    return min(total * exp(shape * log(x) - x - lgamma(shape)), 1.0)
