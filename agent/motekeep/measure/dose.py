"""Dust dose and laser hours: what a sensor has been through since somebody last saw to it.

Owns both sums and what a service record does to them. Must not know limits or findings.

Dose = mass times flow times time: all that was drawn through, in ug. The mass is that of the largest channel, corrected
where it is and as the sensor gave it otherwise; the sensor sees coarse dust badly, so it is a lower bound. Where
nothing was measured, nothing is added. Laser hours run while frames come, good or bad, warm-up included: the laser is
on then. Check (common practice, no source): 0.1 L/min for two years at a mean of 6.4 ug/m3 is about 0.67 mg.
"""

import json
from dataclasses import dataclass, replace
from enum import StrEnum
from math import isfinite
from typing import Self

from motekeep.measure.reading import Reading

LITRES_PER_M3 = 1000.0

# What nobody's dose or laser can exceed: refuses a kept state that was damaged.
MOST_DUST_UG, MOST_LASER_S = 1e9, 1e10


class ServiceKind(StrEnum):
    """What a person did at a site."""

    CLEANED = "cleaned"
    FAN_REPLACED = "fan-replaced"
    UNIT_REPLACED = "unit-replaced"
    MOVED = "moved"
    NOTE = "note"


@dataclass(frozen=True, slots=True)
class Dose:
    """The sums of one sensor. Each counts from its `since` (Unix seconds) on, None until a clock could be trusted."""

    dust_ug: float = 0.0
    laser_s: float = 0.0
    dust_since: float | None = None
    laser_since: float | None = None

    @property
    def laser_hours(self) -> float:
        return self.laser_s / 3600.0

    def after(self, reading: Reading, flow_l_min: float) -> Self:
        """With one more reading, at the flow that the sensor is built for."""
        interval = reading.interval
        awake_s = max(interval.seconds - interval.asleep_s, 0.0)
        heard = interval.frames.good or interval.frames.bad or interval.warming_frames
        began = interval.start.utc if interval.start.trusted else None
        return replace(
            self,
            dust_since=began if self.dust_since is None else self.dust_since,
            laser_since=began if self.laser_since is None else self.laser_since,
            dust_ug=self.dust_ug + dust_ug(_mass(reading), flow_l_min, awake_s),
            laser_s=self.laser_s + (awake_s if heard else 0.0),
        )

    def serviced(self, kind: ServiceKind, at: float, now: float) -> Self:
        """After a service record of what was done at `at`, entered at `now` (Unix seconds).

        `cleaned` begins the dose anew, `unit-replaced` both; the others change neither: a new fan cleans no optics. A
        record that is entered late finds sums over the whole time since the last one, and what was added after `at`
        is taken to be its share of that time. One from before a sum began changes nothing of it.
        """
        changed = self
        if kind in (ServiceKind.CLEANED, ServiceKind.UNIT_REPLACED) and not _before(at, self.dust_since):
            left = _share(self.dust_since, at, now)
            changed = replace(changed, dust_ug=changed.dust_ug * left, dust_since=at)
        if kind is ServiceKind.UNIT_REPLACED and not _before(at, self.laser_since):
            left = _share(self.laser_since, at, now)
            changed = replace(changed, laser_s=changed.laser_s * left, laser_since=at)
        return changed

    def state(self) -> str:
        """As JSON text of about 100 bytes."""
        return json.dumps(
            {
                "dust_ug": round(self.dust_ug, 6),
                "laser_s": round(self.laser_s, 1),
                "dust_since": self.dust_since,
                "laser_since": self.laser_since,
            }
        )

    @classmethod
    def restored(cls, state: str) -> Self:
        """The dose whose `state` this is. Raises ValueError on any other text."""
        try:
            items = json.loads(state)
            dose = cls(
                float(items["dust_ug"]),
                float(items["laser_s"]),
                _moment(items["dust_since"]),
                _moment(items["laser_since"]),
            )
        except (KeyError, TypeError, AttributeError, RecursionError) as error:
            raise ValueError(f"no state of a dose: {error!r}") from error
        if not (0.0 <= dose.dust_ug <= MOST_DUST_UG and 0.0 <= dose.laser_s <= MOST_LASER_S):
            raise ValueError(f"no dose that a sensor can have: {state[:200]}")
        return dose


def dust_ug(mass_ug_m3: float, flow_l_min: float, seconds: float) -> float:
    """Dust drawn through, in ug."""
    return mass_ug_m3 * flow_l_min / LITRES_PER_M3 * seconds / 60.0


def _mass(reading: Reading) -> float:
    """Mass of the largest channel in ug/m3, 0 where nothing was measured."""
    layout = reading.interval.layout
    largest = reading.values.get(layout.mass[-1]) if layout else None
    if largest is None:
        return 0.0
    mass = largest.raw if largest.value is None else largest.value
    return max(mass or 0.0, 0.0)


def _before(at: float, since: float | None) -> bool:
    return since is not None and at < since


def _share(since: float | None, at: float, now: float) -> float:
    """The share of a sum since `since` that belongs to the time after `at`; none where its begin is not known."""
    if since is None or now <= since:
        return 0.0
    return min(max((now - at) / (now - since), 0.0), 1.0)


def _moment(value: object) -> float | None:
    if value is None:
        return None
    if isinstance(value, bool) or not isinstance(value, int | float) or not isfinite(value):
        raise TypeError(f"{value!r} is no moment")
    return float(value)
