"""Count-mass closure: an independent mass from the counts, beside the one that the sensor states.

Owns spheres, densities and bins. Must not know how the sensor makes its own mass.

M = sum over bins of (pi/6) density d^3 N, in ug/m3 for d in um, density in g/cm3 and N in 1/cm3. Bins are differences
of the cumulative counts. What the counts do not hold is missing: particles below the smallest size, often 20 to 60 %
of fine mass, and those above the largest, whose bin has no upper edge and is dropped. So the two masses are not
expected to be equal; their ratio is expected to stay. Optical sizes are those of the calibration aerosol, and the cut
of PM2.5 is by aerodynamic diameter (1.95 um geometric at 1.65 g/cm3), which is left aside.

Uncertainty (JCGM 100:2008, 5.1.2, 5.2.2): counting is independent from bin to bin and adds in quadrature; flow, density
and diameter are common to all bins and add linearly. d enters with the third power.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from enum import StrEnum
from itertools import pairwise
from math import exp, log, pi, sqrt

from motekeep.measure.counting import count_variance
from motekeep.measure.interval import Interval
from motekeep.measure.steps.humidity_growth import DENSITY


class Diameter(StrEnum):
    """Which diameter stands for a bin: the geometric mean of its edges, or the one of mean volume.

    The second presumes a flat dN/dlogD within the bin: d^3 = (b^3 - a^3) / (3 ln(b / a)).
    """

    GEOMETRIC = "geometric"
    VOLUME_MEAN = "volume-mean"


@dataclass(frozen=True, slots=True)
class Assumptions:
    """What has to be assumed to get from counts to mass. The `u_` are relative standard uncertainties.

    Density of ambient fine particles is 1.4 to 1.8 g/cm3 (from memory), hence a tenth. For flow and size ISO
    21501-4:2007 allows 5 and 10 % as limits of error to instruments of a better kind; these are a guess from there.
    """

    diameter: Diameter = Diameter.GEOMETRIC
    density: float = DENSITY
    u_density: float = 0.1
    u_flow: float = 0.1
    u_diameter: float = 0.05

    @property
    def u_common(self) -> float:
        """Relative uncertainty that all bins share."""
        return sqrt(self.u_density**2 + self.u_flow**2 + (3.0 * self.u_diameter) ** 2)


@dataclass(frozen=True, slots=True)
class CountMass:
    """A mass from counts in ug/m3 with its standard uncertainty, without counting where no variance was given."""

    mass: float
    u: float


# Upper size of the particles that each mass channel stands for, in um.
CUTS_UM = {"pm1": 1.0, "pm2_5": 2.5, "pm4": 4.0, "pm10": 10.0}


def bin_diameter_um(low_um: float, high_um: float, diameter: Diameter = Diameter.GEOMETRIC) -> float:
    """The diameter that stands for particles between two sizes."""
    if diameter is Diameter.GEOMETRIC:
        return sqrt(low_um * high_um)
    return float(((high_um**3 - low_um**3) / (3.0 * log(high_um / low_um))) ** (1.0 / 3.0))


def sphere_mass(diameter_um: float, density: float, per_dl: float) -> float:
    """Mass in ug/m3 of `per_dl` spheres in 0.1 L."""
    return pi / 6.0 * density * diameter_um**3 * per_dl / 100.0


def mass_median_um(count_median_um: float, geometric_sd: float) -> float:
    """Mass median diameter of a lognormal aerosol (Hatch and Choate 1929): CMD exp(3 ln^2 sg)."""
    return count_median_um * exp(3.0 * log(geometric_sd) ** 2)


def volume_mean_um(count_median_um: float, geometric_sd: float) -> float:
    """Diameter of mean volume of a lognormal aerosol (Hatch and Choate 1929): CMD exp(1.5 ln^2 sg)."""
    return count_median_um * exp(1.5 * log(geometric_sd) ** 2)


def mass_from_counts(
    sizes_um: Sequence[float],
    per_dl: Sequence[float | None],
    assumptions: Assumptions = Assumptions(),
    variances: Sequence[float] | None = None,
) -> dict[str, CountMass]:
    """Mass by channel from cumulative counts above `sizes_um`, rising.

    A count that is None was censored; every mass that needs it is left out, as are those whose cut lies above the
    largest size or not on a size. `variances` are those of each bin's own count, one fewer than sizes.
    """
    masses: dict[str, CountMass] = {}
    total = counting = 0.0
    for i, (low, high) in enumerate(pairwise(sizes_um)):
        above, beyond = per_dl[i], per_dl[i + 1]
        if above is None or beyond is None:
            break
        one = sphere_mass(bin_diameter_um(low, high, assumptions.diameter), assumptions.density, 1.0)
        # Falling is what cumulative counts do; where noise or a fault says otherwise, a bin holds none.
        total += one * max(above - beyond, 0.0)
        if variances is not None:
            counting += one * one * variances[i]
        for name, cut in CUTS_UM.items():
            if cut == high:
                masses[name] = CountMass(total, sqrt(counting + (assumptions.u_common * total) ** 2))
    return masses


def closure(
    interval: Interval,
    scale: float | None = None,
    assumptions: Assumptions = Assumptions(),
) -> dict[str, CountMass]:
    """Mass by channel from the counts of an interval; empty where it has none. `scale` as in `counting`."""
    layout, counts = interval.layout, interval.counts
    if layout is None or not counts:
        return {}
    per_dl = [None if c.censored or not c.n else c.mean for c in counts]
    variances = None
    if scale is not None:
        variances = bin_variances(per_dl, min(c.n for c in counts), scale) if all(c.n for c in counts) else None
    return mass_from_counts(layout.sizes_um, per_dl, assumptions, variances)


def bin_variances(per_dl: Sequence[float | None], frames: int, scale: float) -> list[float]:
    """Variance of each bin's own count; bins are disjoint, so it rests on the difference and not on both sums."""
    return [count_variance((a or 0.0) - (b or 0.0), frames, scale) for a, b in pairwise(per_dl)]
