"""The air at one site: populations, humidity and temperature over time, and the true masses in it.

Owns what a perfect instrument would see. Must not know sensors: twins breathe the same air.
"""

from collections.abc import Iterator
from dataclasses import dataclass, field, replace

import numpy as np

from motesim.aerosol import CATALOGUE, DUST, FIREWORK, FOG, PLUME, SALT, SMOKE, Floats, Mode, erfc, mass_below
from motesim.events import Event, effect_of
from motesim.humidity import growth_factor
from motesim.weather import STEP_S, Climate, Weather

STRETCH = 2160  # samples made at a time, six hours: large enough for numpy, small enough for memory
CUTS_UM = (1.0, 2.5, 10.0)
_EVENT_MODES = (*SMOKE, *DUST, *FIREWORK, *SALT, *PLUME, *FOG)


@dataclass(frozen=True, slots=True)
class AirPlan:
    """What the air of a site is made of.

    `aerosol` names a population of `aerosol.CATALOGUE`, scaled so that its dry PM2.5 is `pm2_5` ug/m3 in an ordinary
    hour; `coarse` multiplies its coarse modes and `kappa`, where given, replaces the hygroscopicity of its fine ones.
    """

    aerosol: str = "average-urban"
    pm2_5: float = 8.0
    coarse: float = 1.0
    kappa: float | None = None
    climate: Climate = field(default_factory=Climate)

    def modes(self) -> tuple[Mode, ...]:
        """The site's own populations at the ordinary level."""
        found = CATALOGUE[self.aerosol]
        scale = self.pm2_5 / mass_below(found, 2.5)
        modes = []
        for mode in found:
            if mode.coarse:
                modes.append(mode.times(scale * self.coarse))
            else:
                kappa = mode.kappa if self.kappa is None else self.kappa
                modes.append(replace(mode, number=mode.number * scale, kappa=kappa))
        return tuple(modes)


@dataclass(frozen=True, slots=True)
class Air:
    """A stretch of air: `modes` with unit factors, and the course of each mode's factor, (modes, samples)."""

    modes: tuple[Mode, ...]
    factors: Floats
    times: Floats
    temperature: Floats
    rh: Floats
    daylight: Floats

    def cut(self, first: int, last: int) -> "Air":
        """Samples `first` up to, not including, `last`."""
        part = slice(first, last)
        return Air(
            self.modes,
            self.factors[:, part],
            self.times[part],
            self.temperature[part],
            self.rh[part],
            self.daylight[part],
        )

    def joined(self, other: "Air") -> "Air":
        return Air(
            self.modes,
            np.concatenate([self.factors, other.factors], axis=1),
            np.concatenate([self.times, other.times]),
            np.concatenate([self.temperature, other.temperature]),
            np.concatenate([self.rh, other.rh]),
            np.concatenate([self.daylight, other.daylight]),
        )

    def dry_masses(self) -> Floats:
        """True dry PM1, PM2.5 and PM10 in ug/m3, aerodynamic cuts, (3, samples)."""
        table = np.array([[mode.mass_below(cut) for mode in self.modes] for cut in CUTS_UM])
        return np.asarray(table @ self.factors)

    def wet_masses(self) -> Floats:
        """PM1, PM2.5 and PM10 of the particles with their water at ambient humidity, ug/m3, (3, samples)."""
        total = np.zeros((len(CUTS_UM), len(self.times)))
        for mode, factor in zip(self.modes, self.factors, strict=True):
            if not factor.any():
                continue
            growth = np.ones_like(self.rh) if mode.droplets else growth_factor(mode.kappa, self.rh)
            volume_ratio = growth**3
            density = (mode.density + volume_ratio - 1.0) / volume_ratio
            width = np.sqrt(2.0) * np.log(mode.sigma)
            for row, cut in enumerate(CUTS_UM):
                x = np.log(mode.mass_median_um * growth * np.sqrt(density) / cut) / width
                total[row] += factor * mode.volume * volume_ratio * density / 2.0 * erfc(x)
        return total


class AirCourse:
    """The air of one site from `start` on, made stretch by stretch; the same for the same plan, events and seed."""

    def __init__(self, plan: AirPlan, events: tuple[Event, ...], seed: int, start: float) -> None:
        self._base = plan.modes()
        self._events = events
        self._weather = Weather(plan.climate, seed, start)
        self.modes = (*self._base, *_EVENT_MODES)

    def stretches(self) -> Iterator[Air]:
        """Without end; each stretch begins with the last sample of the one before, so that neighbours join up."""
        last: Air | None = None
        while True:
            fresh = self._take(STRETCH + 1 if last is None else STRETCH)
            stretch = fresh if last is None else last.joined(fresh)
            yield stretch
            last = stretch.cut(len(stretch.times) - 1, len(stretch.times))

    def _take(self, n: int) -> Air:
        sky = self._weather.take(n)
        effect = effect_of(self._events, sky.times)
        factors = np.zeros((len(self.modes), n))
        for row, mode in enumerate(self._base):
            own = np.exp(sky.dust) * effect.coarse if mode.coarse else np.exp(sky.haze) * effect.fine
            factors[row] = own
        for row, mode in enumerate(_EVENT_MODES, start=len(self._base)):
            if mode in effect.added:
                factors[row] = effect.added[mode]
        rh = sky.rh + effect.rh_weight * (effect.rh_target - sky.rh)
        return Air(
            self.modes, factors, sky.times, sky.temperature - effect.cooling, np.minimum(rh, 100.0), sky.daylight
        )


def still_air(plan: AirPlan, rh_pct: float, temperature_c: float, samples: int = 2, start: float = 0.0) -> Air:
    """Air that does not change, `STEP_S` apart: for tests and for calibrating an emulated unit."""
    modes = plan.modes()
    times = start + STEP_S * np.arange(samples, dtype=np.float64)
    return Air(
        modes,
        np.ones((len(modes), samples)),
        times,
        np.full(samples, temperature_c),
        np.full(samples, rh_pct),
        np.zeros(samples),
    )
