"""A calibration document: how raw becomes corrected, for one sensor on one gateway, with what it is known by.

Owns the types of it, and whom and when a document is for. Must not know its text form (`document_text`), nor how it is
applied (`correction`), signed or stored.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from hashlib import sha256
from math import hypot

from motekeep.measure.closure import CUTS_UM
from motekeep.measure.steps.step import Step

# Mass channels that a document may name, in the order of size.
CHANNELS = tuple(CUTS_UM)

# Common practice, no source: what a capacitive humidity sensor of a few euros is off by after a year outdoors.
U_RH_PCT, U_T_C = 3.0, 0.5
CLIMATE_MAX_AGE_S = 300.0


@dataclass(frozen=True, slots=True)
class Estimate:
    """A fitted parameter, its standard uncertainty, and the name that covariances call it by."""

    name: str
    value: float
    u: float


@dataclass(frozen=True, slots=True)
class CalibrationStep:
    """One `[[step]]`: what it does, to which mass channels, its parameters in the order of `Outcome.d_parameters`."""

    name: str
    kind: str
    channels: tuple[str, ...]
    parameters: tuple[Estimate, ...]
    step: Step


@dataclass(frozen=True, slots=True)
class Residual:
    """What the fit left over, in ug/m3 and as a share of the figure."""

    u: float
    relative: float

    def at(self, value: float) -> float:
        """Standard uncertainty at a corrected figure, ug/m3."""
        return hypot(self.u, self.relative * value)


@dataclass(frozen=True, slots=True)
class ClimateStatement:
    """Standard uncertainties of RH (%) and temperature (degC), and the age in s from which a climate is stale."""

    u_rh: float = U_RH_PCT
    u_t: float = U_T_C
    max_age_s: float = CLIMATE_MAX_AGE_S


@dataclass(frozen=True, slots=True)
class Basis:
    """What the document was made from. For people: nothing is decided by it."""

    reference: str | None
    data: str | None
    hours: float | None
    metrics: Mapping[str, float]


@dataclass(frozen=True, slots=True)
class CalibrationDocument:
    """A document that passed every check. Times are Unix seconds; `valid_until` is the first moment without it.

    `covariance` is the whole matrix over the parameters of all steps, in their order. `digest` is `sha256:` and the
    hexadecimal SHA-256 of the exact bytes.
    """

    issue: int
    site: str
    gateway: str
    sensor: str
    made_at: float
    valid_from: float
    valid_until: float
    fits_revision: int | None
    ranges: Mapping[str, tuple[float, float]]
    steps: tuple[CalibrationStep, ...]
    covariance: tuple[tuple[float, ...], ...]
    residual: Mapping[str, Residual]
    climate: ClimateStatement
    basis: Basis | None
    digest: str

    def not_for(self, site: str, gateway: str, sensor: str) -> str | None:
        """Why this document is not for that sensor, None when it is."""
        for what, own, asked in (
            ("site", self.site, site),
            ("gateway", self.gateway, gateway),
            ("sensor", self.sensor, sensor),
        ):
            if own != asked:
                return f"it is for {what} {own!r}, not {asked!r}"
        return None

    def covers(self, site: str, gateway: str, sensor: str) -> bool:
        return self.not_for(site, gateway, sensor) is None

    def valid_at(self, utc: float) -> bool:
        """Whether it is in its dates. On a clock that nobody vouches for dates decide nothing: do not ask then."""
        return self.valid_from <= utc < self.valid_until

    def fits(self, revision: int | None) -> bool:
        """Whether a sensor with this revision byte is one it was made for; one that states none is not refused."""
        return self.fits_revision is None or revision is None or revision == self.fits_revision

    def in_range(self, name: str, value: float) -> bool:
        """Whether RH, T or the raw figure of a channel lies where the fit was made; True where it states no range."""
        low, high = self.ranges.get(name, (value, value))
        return low <= value <= high


def digest(text: bytes) -> str:
    """The digest of a document's exact bytes, as provenance states it."""
    return "sha256:" + sha256(text).hexdigest()
