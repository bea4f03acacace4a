"""Courses of temperature, humidity, daylight and haze at one site.

Owns what the weather does when nothing happens. Must not know particles or instruments; what happens (rain, fog,
smoke) is `events`.
"""

from dataclasses import dataclass
from math import pi, radians, sin

import numpy as np

from motesim.aerosol import Floats
from motesim.humidity import saturation_hpa
from motesim.relaxation import Course, generators

DAY_S = 86_400.0
YEAR_S = 365.25 * DAY_S
STEP_S = 10.0  # of all courses; faster changes than tens of seconds are the business of the sensing cell

# Half of the variance each: the hourly means then have the lag-1-hour 0.79 and the lag-24-hour autocorrelation 0.32 of
# a real year of hourly PM2.5 (public record of Imperial County, distributed with pvlib 0.16.1).
_SLOW_S = 2.5 * DAY_S
_HOURS_S = 1.3 * 3600.0
_GUSTS_S = 90.0
_DEW_FROM = 80.0


@dataclass(frozen=True, slots=True)
class Climate:
    """What the weather of a site is like. Temperatures in degC, humidity in %, latitude in degrees.

    `swing` is half the daily and `season` half the yearly range. `variability` is the standard deviation of ln PM
    over days and hours together, `gusts` within minutes, `rush` the height of the two daily traffic peaks in ln PM.
    """

    temperature: float = 11.0
    swing: float = 5.0
    season: float = 8.0
    humidity: float = 72.0
    latitude: float = 47.0
    variability: float = 0.55
    gusts: float = 0.03
    rush: float = 0.15


@dataclass(frozen=True, slots=True)
class Sky:
    """A stretch of weather: arrays of one length. `daylight` is 0..1, `haze` and `dust` are ln factors of PM."""

    times: Floats
    temperature: Floats
    rh: Floats
    daylight: Floats
    haze: Floats
    dust: Floats


class Weather:
    """The weather of one site from `start` on, stretch after stretch, the same for the same seed."""

    def __init__(self, climate: Climate, seed: int, start: float) -> None:
        self._climate = climate
        self._next = start
        spans = {
            "slow": _SLOW_S,
            "hours": _HOURS_S,
            "gusts": _GUSTS_S,
            "coarse": _HOURS_S,
            "warm": 2.0 * DAY_S,
            "moist": 1.5 * DAY_S,
            "cloud": 0.8 * DAY_S,
        }
        streams = generators(seed, list(spans))
        self._courses = {name: Course(streams[name], tau, STEP_S) for name, tau in spans.items()}

    def take(self, n: int) -> Sky:
        """The next `n` samples, `STEP_S` apart."""
        c = self._climate
        times = self._next + STEP_S * np.arange(n, dtype=np.float64)
        self._next += STEP_S * n
        x = {name: course.take(n) for name, course in self._courses.items()}
        hour = times % DAY_S / 3600.0
        clear = 1.0 / (1.0 + np.exp(-1.5 * x["cloud"]))

        year_angle = 2.0 * pi * (times % YEAR_S) / YEAR_S
        season = -c.season * np.cos(year_angle - 2.0 * pi * 20.0 / 365.25)
        daily = c.swing * np.cos(2.0 * pi * (hour - 15.0) / 24.0) * (0.4 + 1.2 * clear)
        temperature = c.temperature + season + daily + 2.5 * x["warm"]
        # the vapour follows the slow part of the temperature only: nights grow humid, afternoons dry
        base = saturation_hpa(c.temperature + season + 2.0 * x["warm"]) * c.humidity / 100.0
        rh = 100.0 * base * np.exp(0.12 * x["moist"]) / saturation_hpa(temperature)
        # what would go beyond saturation falls out as dew; humidity nears 98 % and fog is an event of its own
        dew = _DEW_FROM + (98.0 - _DEW_FROM) * -np.expm1(-(rh - _DEW_FROM) / (98.0 - _DEW_FROM))
        rh = np.clip(np.where(rh > _DEW_FROM, dew, rh), 4.0, 98.0)

        peaks = np.exp(-0.5 * ((hour - 7.5) / 1.3) ** 2) + np.exp(-0.5 * ((hour - 18.5) / 1.8) ** 2)
        share = c.variability / np.sqrt(2.0)
        haze = share * (x["slow"] + x["hours"]) + c.rush * peaks + c.gusts * x["gusts"]
        dust = 0.3 * haze + share * x["coarse"] + 2.0 * c.gusts * x["gusts"] + 0.3 * daily / max(c.swing, 1.0)
        return Sky(times, temperature, rh, self._daylight(year_angle, hour) * (0.25 + 0.75 * clear), haze, dust)

    def _daylight(self, year_angle: Floats, hour: Floats) -> Floats:
        """Sine of the sun's elevation, 0 at night; local solar time is taken as UTC."""
        declination = radians(-23.44) * np.cos(year_angle + 2.0 * pi * 10.0 / 365.25)
        latitude = radians(self._climate.latitude)
        elevation = sin(latitude) * np.sin(declination) - np.cos(latitude) * np.cos(declination) * np.cos(
            2.0 * pi * hour / 24.0
        )
        return np.asarray(np.clip(elevation, 0.0, None))
