"""Humidity growth: particles take up water, scatter more and are counted as more mass than they have when dry.

Mass form of kappa-Koehler theory: C = 1 + (kappa / density) / (1 / aw - 1), dry mass = mass / C, aw = RH / 100
(Crilley et al. 2018, Atmos. Meas. Tech. 11:709, doi 10.5194/amt-11-709-2018; kappa after Petters and Kreidenweis 2007,
Atmos. Chem. Phys. 7:1961). It presumes that the mass which the sensor states is proportional to the wet mass.

Valid from `rh_low` to `rh_high` (30 and 85 % unless stated; Nilson et al. 2022, Atmos. Meas. Tech. 15:3315, held RH
within 30 to 70 %). Below, C is held at its value at `rh_low`, which differs little from 1. Above, C is held at its
value at `rh_high` and the figure is suspect, reason `humidity-high`: it is rather too large than too small. From
`rh_fog` on (95 % unless stated) it fails, reason `fog`: droplets are counted as particles and no growth law takes them
out again. The sensitivity to RH is held at the border too; a derivative of zero would claim that RH no longer matters
there. kappa knows no deliquescence and no efflorescence. RH has to be the one at the sensing volume: a warm case is
drier than the air around it.
"""

from dataclasses import dataclass

from motekeep.measure.reading import FAIL, PASS, SUSPECT
from motekeep.measure.steps.step import (
    Air,
    Need,
    Numbers,
    Outcome,
    Parameter,
    Setting,
    Step,
    StepKind,
    StepRefusedError,
)

NEEDS = frozenset({Need.RH})

# Dry density that Crilley et al. 2018 divide kappa by, g/cm3; from memory.
DENSITY = 1.65


def growth_factor(kappa: float, water_activity: float) -> float:
    """Wet over dry diameter without the Kelvin term: (1 + kappa aw / (1 - aw))^(1/3).

    Petters and Kreidenweis 2007; `water_activity` in 0..1, below 1.
    """
    return float((1.0 + kappa * water_activity / (1.0 - water_activity)) ** (1.0 / 3.0))


def mass_factor(kappa: float, rh_pct: float, density: float = DENSITY) -> float:
    """C, wet over dry mass (Crilley et al. 2018); RH in % below 100, density in g/cm3."""
    return 1.0 + kappa / density * rh_pct / (100.0 - rh_pct)


@dataclass(frozen=True, slots=True)
class HumidityGrowth:
    """Divides mass by C. RH limits in %, density of the dry particles in g/cm3."""

    kappa: float
    density: float = DENSITY
    rh_low: float = 30.0
    rh_high: float = 85.0
    rh_fog: float = 95.0

    @property
    def needs(self) -> frozenset[Need]:
        return NEEDS

    def apply(self, figure: float, air: Air) -> Outcome:
        rh = air.rh_pct
        if rh is None:
            return UNAVAILABLE
        held = min(max(rh, self.rh_low), self.rh_high)
        water = held / (100.0 - held) / self.density
        factor = 1.0 + self.kappa * water
        dry = figure / factor
        d_rh = -dry / factor * self.kappa / self.density * 100.0 / (100.0 - held) ** 2
        flag, reason = PASS, None
        if rh >= self.rh_fog:
            flag, reason = FAIL, "fog"
        elif rh > self.rh_high:
            flag, reason = SUSPECT, "humidity-high"
        return Outcome(dry, 1.0 / factor, (-dry / factor * water,), d_rh=d_rh, flag=flag, reason=reason)


UNAVAILABLE = Outcome(None, 0.0, (0.0,), flag=FAIL, reason="climate-missing")


def build(parameters: Numbers, settings: Numbers) -> Step:
    low, high, fog = settings["rh_low"][0], settings["rh_high"][0], settings["rh_fog"][0]
    if not low < high:
        raise StepRefusedError("rh_high", f"{high} % is not above rh_low, {low} %")
    if not high <= fog:
        raise StepRefusedError("rh_fog", f"{fog} % is below rh_high, {high} %")
    return HumidityGrowth(parameters["kappa"][0], settings["density"][0], low, high, fog)


KIND = StepKind(
    name="humidity-growth",
    # 1.4 is the upper end for hygroscopic salts (Petters and Kreidenweis 2007).
    parameters=(Parameter("kappa", "1", 0.0, 1.5, "hygroscopicity, for the stated density"),),
    settings=(
        Setting("density", "g/cm3", 0.5, 5.0, "density of the dry particles that kappa was fitted with", DENSITY),
        Setting("rh_low", "%", 0.0, 90.0, "RH below is held here", 30.0),
        # Above 95 % kappa diverges: half a percent of RH would decide the figure.
        Setting("rh_high", "%", 10.0, 95.0, "RH above is held here, and suspect", 85.0),
        Setting("rh_fog", "%", 50.0, 100.0, "from here on it is fog, and fails", 95.0),
    ),
    build=build,
)
