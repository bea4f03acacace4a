"""The ordinary weather set: what an emulated year at a site is like when nothing is wrong with the sensor.

Owns the sites of the campaign and how often things happen there.
"""

from dataclasses import dataclass, replace

import numpy as np

from motesim import events, scenario
from motesim.aerosol import CATALOGUE, above
from motesim.air import AirPlan
from motesim.events import Event
from motesim.plan import Duty, SensorPlan, SitePlan
from motesim.weather import DAY_S, Climate


@dataclass(frozen=True, slots=True)
class Weather:
    """The air of a kind of site, and how many events of each kind it has in 30 days."""

    air: AirPlan
    often: dict[str, float]


def _shipped(name: str) -> AirPlan:
    return scenario.shipped()[name].air


WEATHERS = {
    "urban": Weather(AirPlan("urban", 12.0), {"rain": 8, "plume": 30, "clean-front": 4}),
    "rural": Weather(AirPlan("rural", 6.0, climate=Climate(humidity=70.0)), {"rain": 8, "clean-front": 4}),
    "very-clean": Weather(_shipped("mountain-hut"), {"fog": 4, "rain": 10, "clean-front": 6}),
    "smoke": Weather(_shipped("smoky-valley"), {"smoke": 12, "rain": 5}),
    "dust": Weather(_shipped("quarry-gate"), {"plume": 120, "rain": 4, "dust": 15}),
    "fog": Weather(_shipped("foggy-pier"), {"fog": 12, "rain": 6}),
    "rain": Weather(AirPlan("average-urban", 8.0, climate=Climate(humidity=82.0)), {"rain": 25, "clean-front": 6}),
    "air-cleaner": Weather(_shipped("classroom"), {"air-cleaner": 40, "plume": 90}),
    "fireworks": Weather(AirPlan("urban", 10.0), {"fireworks": 6, "plume": 30, "rain": 6}),
    "sea-salt": Weather(AirPlan("marine", 6.0, climate=Climate(humidity=80.0)), {"sea-salt": 12, "rain": 10, "fog": 2}),
}


def per_dl(air: AirPlan) -> float:
    """N(>0.3 um) per 0.1 L in an ordinary hour, dry."""
    return 100.0 * above(air.modes(), 0.3)


def at_level(air: AirPlan, level: float) -> AirPlan:
    """The same air with so many per 0.1 L above 0.3 um in an ordinary hour."""
    assert air.aerosol in CATALOGUE
    return replace(air, pm2_5=air.pm2_5 * level / per_dl(air))


def sensors(
    seed: int, period_s: float, *, twinned: bool, duty: Duty | None = None, length: int = 36
) -> tuple[SensorPlan, ...]:
    """One unit, or two of different personalities; both drawn from the seed."""
    rng = np.random.default_rng([seed, 7])
    names = ("own", "beside") if twinned else ("own",)
    return tuple(
        SensorPlan(name, "bm", length, int(rng.integers(2**31)), period_s, duty=duty if name == "own" else None)
        for name in names
    )


def site(
    name: str, seed: int, start: float, days: float, units: tuple[SensorPlan, ...], air: AirPlan | None = None
) -> SitePlan:
    """Some days at a site of this weather, with the events that happen there."""
    weather = WEATHERS[name]
    happening: tuple[Event, ...] = events.drawn(weather.often, seed, start, days * DAY_S)
    return SitePlan(name, seed, start, days * DAY_S, units, air or weather.air, happening)
