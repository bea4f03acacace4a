"""Coincidence: particles that pass the beam together are counted as one.

Paralysable Poisson dead time: N_observed = N exp(-N V), where V is the volume that the beam sweeps while one pulse
lasts (Jaenicke 1972, J. Aerosol Sci. 3:95; Raasch and Umhauer 1984, Part. Part. Syst. Charact. 1:53). V is flow times
pulse length, and as the pulse shortens with the flow it does not depend on it. The inverse is N = -W0(-N_observed V)/V
with the principal branch of Lambert's W. Observed counts have a maximum of 1/(e V): at it and above there is no
inverse, and below it there are two. The second one, W-1, belongs to air so dense that the count falls again. It is
never taken, since the count alone cannot tell, and no number is given at or above the maximum.

What it does to mass: the firmware makes its mass from the pulses that it saw, so the share of particles that is lost is
taken to be the share of mass that is lost, and each mass is multiplied by N / N_observed of the smallest count channel,
which holds all the particles that are seen. Two small particles that are read as one larger one move mass up instead
of losing it (counter practice calls it oversizing); that is not undone here, so the factor is rather too large than
too small. The counts of the reading stay as the sensor gave them.

Valid below 10 % loss, N V = 0.10536 (ISO 21501-4:2007, 3.6, maximum concentration); above that the figure is suspect.
"""

from dataclasses import dataclass
from math import e, exp, log, sqrt

from motekeep.measure.reading import FAIL, PASS, SUSPECT
from motekeep.measure.steps.step import Air, Need, Numbers, Outcome, Parameter, Step, StepKind

# Counts are per 0.1 L = 100 cm3, the volume in mm3 = 1e-3 cm3.
CM3_PER_MM3_BY_DL = 1e-3 / 100.0

# Loss of 10 %: 1 - exp(-N V) = 0.1.
TEN_PERCENT = -log(0.9)

NEEDS = frozenset({Need.COUNT})


def lambert_w0(z: float) -> float:
    """The principal branch of Lambert's W on [-1/e, 0]: the root w >= -1 of w exp(w) = z.

    Halley's method (Corless et al. 1996, Adv. Comput. Math. 5:329), from the series about the branch point.
    Raises ValueError outside of the interval, where a coincidence has no use for it.
    """
    if not -1.0 / e <= z <= 0.0:
        raise ValueError(f"W0 is wanted on [-1/e, 0], not at {z}")
    p = sqrt(max(2.0 * (e * z + 1.0), 0.0))
    w = -1.0 + p * (1.0 + p * (-1.0 / 3.0 + p * (11.0 / 72.0)))
    if p < 1e-4:
        return w  # the series is exact to 1e-16 here, and Halley's quotient is 0/0
    for _ in range(8):  # three are enough on the whole interval; the bound keeps a rounding cycle from turning forever
        exponential = exp(w)
        residual = w * exponential - z
        change = residual / (exponential * (w + 1.0) - (w + 2.0) * residual / (2.0 * w + 2.0))
        w -= change
        if abs(change) <= 1e-15 * (1.0 + abs(w)):
            break
    return w


def occupancy(observed_by_volume: float) -> float | None:
    """N V from N_observed V, both without unit; None at or above the maximum 1/e, where no number can be stated."""
    if observed_by_volume >= 1.0 / e:
        return None
    return -lambert_w0(-observed_by_volume)


@dataclass(frozen=True, slots=True)
class Coincidence:
    """Multiplies mass by N / N_observed = exp(N V), `volume_mm3` being V in mm3."""

    volume_mm3: float

    @property
    def needs(self) -> frozenset[Need]:
        return NEEDS

    def apply(self, figure: float, air: Air) -> Outcome:
        count = air.count_per_dl
        if count is None or air.count_censored:
            return CENSORED
        scale = CM3_PER_MM3_BY_DL
        w = occupancy(count * scale * self.volume_mm3)
        if w is None:
            return CENSORED
        factor = exp(w)
        # w exp(-w) = z, so dw/dz = exp(w) / (1 - w) and d exp(w)/dz = exp(2 w) / (1 - w)
        slope = figure * factor * factor / (1.0 - w)
        high = w > TEN_PERCENT
        return Outcome(
            value=figure * factor,
            d_input=factor,
            d_parameters=(slope * count * scale,),
            d_count=slope * self.volume_mm3 * scale,
            flag=SUSPECT if high else PASS,
            reason="coincidence-high" if high else None,
        )


CENSORED = Outcome(None, 0.0, (0.0,), flag=FAIL, reason="coincidence-censored")


def build(parameters: Numbers, _: Numbers) -> Step:
    return Coincidence(parameters["volume_mm3"][0])


KIND = StepKind(
    name="coincidence",
    # 10 mm3 would lose a tenth of ten particles per cm3: no counter of ordinary air could be built like that.
    parameters=(Parameter("volume_mm3", "mm3", 1e-9, 10.0, "volume swept by the beam during one pulse"),),
    settings=(),
    build=build,
)
