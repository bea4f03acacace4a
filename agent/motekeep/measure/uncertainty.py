"""Standard uncertainty of a corrected figure, to first order.

Owns the sources of error and how they combine. Must not know steps or documents: it is handed sensitivities.

Law of propagation for correlated inputs (JCGM 100:2008, 5.2.2, eq. 13; 5.1.2 where nothing is correlated):
u^2 = sum over i, j of c_i c_j u(x_i, x_j), with c the derivative of the end figure by a source, through the whole
chain. An error that enters in several steps, like that of RH in `humidity-growth` and in an RH term, is one source: its
derivatives are added before they are squared. Parameters that were fitted together carry their covariance, across
steps too. First order holds while a source's error is small against the bend of the chain; near the maximum of a
coincidence correction, or in fog, it is not, and those figures are flagged.

What is independent from interval to interval averages out in longer means, what is not does not, so the two are kept
apart: counting is random; parameters, the climate sensor and the residual of the fit are taken to be common to all
intervals of an hour. The residual is: what the fit left over is aerosol that differs from the fitted one, for hours.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from math import exp, hypot, pi, sqrt

from motekeep.measure.closure import Assumptions, bin_variances, mass_from_counts
from motekeep.measure.counting import count_variance
from motekeep.measure.interval import Channel, Interval
from motekeep.wire.frame import Layout

# Coverage factor of every `u` that is published: a standard uncertainty.
K = 1

# Where the mass of a sensor and that of its counts are further apart than this, counts do not explain its mass.
FARTHEST = 4.0

# With fewer frames their own spread tells too little.
FEW = 10

# Only the counting part of a mass from counts is wanted here.
COUNTING_ONLY = Assumptions(u_density=0.0, u_flow=0.0, u_diameter=0.0)


@dataclass(frozen=True, slots=True)
class Sensitivities:
    """Derivatives of an end figure in ug/m3: by the raw figure, by each parameter, by RH in %, by temperature in degC,
    by the smallest count in 1/dL."""

    raw: float
    parameters: Sequence[float]
    rh: float
    t: float
    count: float


@dataclass(frozen=True, slots=True)
class Sources:
    """Standard uncertainties of what goes in, in the units of Sensitivities. `covariance` holds the terms of the upper
    triangle that are not zero: (i, j, covariance), i <= j."""

    raw: float
    covariance: Sequence[tuple[int, int, float]]
    rh: float
    t: float
    count: float


@dataclass(frozen=True, slots=True)
class Budget:
    """The parts of a standard uncertainty, each in ug/m3."""

    counting: float
    parameters: float
    climate: float
    residual: float

    @property
    def u(self) -> float:
        """Combined standard uncertainty, k = 1."""
        return sqrt(self.counting**2 + self.parameters**2 + self.climate**2 + self.residual**2)

    @property
    def u_random(self) -> float:
        """The part that is independent from one interval to the next."""
        return self.counting


def propagate(c: Sensitivities, u: Sources, residual: float) -> Budget:
    """Combine sources to the budget of one figure; see the module for the law. `residual` is that of the fit, ug/m3."""
    parameters = 0.0
    for i, j, covariance in u.covariance:
        term = c.parameters[i] * c.parameters[j] * covariance
        parameters += term if i == j else 2.0 * term
    return Budget(
        counting=hypot(c.raw * u.raw, c.count * u.count),
        # A covariance that is positive semi-definite gives no negative variance but for rounding.
        parameters=sqrt(max(parameters, 0.0)),
        climate=hypot(c.rh * u.rh, c.t * u.t),
        residual=residual,
    )


def raw_uncertainties(interval: Interval, layout: Layout, scale: float | None) -> tuple[float, ...]:
    """Standard uncertainty of the mean of each mass channel, from counting and from the step of its print.

    The standard error of the mean that respects autocorrelation is what the frames themselves tell. It takes real
    changes of the air for noise, so with a noise scale it is held to what counting allows at most: the noise of the
    mass that the counts make, taken over relative to the sensor's own mass. That is an upper bound, since firmware may
    trust large particles less than the spheres they are. It is never less than the noise of neighbouring frames.
    """
    modelled: dict[str, tuple[float, float]] = {}
    counts = interval.counts
    if scale is not None and counts and all(c.n for c in counts):
        per_dl = [None if c.censored else c.mean for c in counts]
        variances = bin_variances(per_dl, counts[0].n, scale)
        masses = mass_from_counts(layout.sizes_um, per_dl, COUNTING_ONLY, variances)
        modelled = {name: (m.mass, m.u) for name, m in masses.items()}
    return tuple(
        [
            hypot(_noise(channel, modelled.get(name)), _print_step(channel, layout.mass_resolution))
            for name, channel in zip(layout.mass, interval.mass, strict=True)
        ]
    )


def count_uncertainty(count: Channel, scale: float | None) -> float:
    """Standard uncertainty of the mean of a count channel, in 1/dL."""
    if scale is None or not count.n:
        return count.standard_error
    return sqrt(count_variance(count.mean, count.n, scale))


def _noise(channel: Channel, modelled: tuple[float, float] | None) -> float:
    if modelled is None or not channel.n:
        return channel.standard_error
    mass, u = modelled
    ratio = channel.mean / mass if mass > 0.0 else 1.0
    most = u * min(max(ratio, 1.0 / FARTHEST), FARTHEST)
    if channel.n < FEW:
        return most
    return max(min(channel.standard_error, most), sqrt(channel.step / channel.n))


def _print_step(channel: Channel, resolution: float) -> float:
    """What rounding to the printed step leaves in the mean.

    Rectangular, step / sqrt(12) (JCGM 100:2008, F.2.2.1, from memory), while the print does not move. Noise under the
    print takes it out of the mean with exp(-2 pi^2 sigma^2 / step^2), the first term of the mean of a rounded Gaussian
    (Widrow and Kollar 2008, Quantization Noise, from memory); sigma^2 is the printed variance less that of rounding.
    """
    if not channel.n or not resolution:
        return 0.0
    beneath = max((channel.sd / resolution) ** 2 - 1.0 / 12.0, 0.0)
    return resolution / sqrt(12.0) * exp(-2.0 * pi**2 * beneath)
