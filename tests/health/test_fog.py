"""humidity-high: droplets in moist air, and nothing that only looks like them.

The air is that of `small_air`, or of `motesim` for the course of whole fogs.
"""

import json

import numpy as np
import pytest

from health.small_air import DESERT, DROPLETS, MARINE, RURAL, SMOKE, URBAN, Floats, instant
from motekeep.health.finding import Suspicion
from motekeep.health.fog import HumidityHigh
from motekeep.measure.climate import FIXED
from motekeep.measure.interval import Channel, Climate, FrameCount, Interval
from motekeep.wire.aa import AA
from motekeep.wire.bm import BM_28
from motekeep.wire.frame import Layout

HOUR = 3600.0
FOG = 1000.0 * DROPLETS  # ten droplets per cm3


def interval(
    start_s: float,
    counts: Floats,
    rh: float | None,
    *,
    seconds: float = 60.0,
    source: str = "probe",
    layout: Layout = BM_28,
) -> Interval:
    channels = tuple([Channel(60, float(c), 0.0, float(c), float(c), 0.0, 0.0) for c in counts])
    climate = None if rh is None else Climate(rh, None, source)
    shown = channels if layout.sizes_um else ()
    return Interval("north", instant(start_s), seconds, FrameCount(60), layout, (), (), shown, climate)


class Watch:
    """The check, told minute after minute what the air is like."""

    def __init__(self, check: HumidityHigh | None = None, *, seconds: float = 60.0, seed: int = 1) -> None:
        self.check = check or HumidityHigh()
        self.now = 0.0
        self.seconds = seconds
        self.rng = np.random.default_rng(seed)

    def live(
        self, hours: float, air: Floats, rh: float, to: tuple[Floats, float] | None = None, **how: object
    ) -> list[float]:
        """Minutes since the begin at which it opened or closed; with `to` air and RH move there linearly."""
        changes, began = [], self.now
        for i in range(int(hours * HOUR / self.seconds)):
            share = (i + 1) * self.seconds / (hours * HOUR)
            counts, moist = (air, rh) if to is None else (air + share * (to[0] - air), rh + share * (to[1] - rh))
            held = self.told() is not None
            noisy = (
                self.rng.poisson(np.maximum(counts, 0.0) / 2.0) * 2.0
            )  # the pulses of a minute at 0.1 L/min, view 0.5
            self.check.interval(interval(self.now, noisy, moist, seconds=self.seconds, **how))  # type: ignore[arg-type]
            self.now += self.seconds
            if (self.told() is not None) is not held:
                changes.append((self.now - began) / 60.0)
        return changes

    def told(self) -> Suspicion | None:
        return self.check.judge(instant(self.now))


def air(shape: Floats, level: float = 6000.0) -> Floats:
    return shape * (level / shape[0])


@pytest.mark.parametrize("shape", [URBAN, RURAL], ids=["urban", "rural"])
def test_droplets_that_come_with_saturated_air_are_found_within_minutes(shape: Floats) -> None:
    watch = Watch()
    clear = air(shape)
    assert watch.live(12.0, clear, 65.0) == []
    assert watch.live(2.0, clear, 65.0, to=(clear, 80.0)) == []
    [opened] = watch.live(0.5, clear, 81.0, to=(clear + FOG, 84.0))
    assert opened <= 15.0
    suspicion = watch.told()
    assert suspicion is not None
    assert suspicion.since >= 14.0 * HOUR - 420.0
    assert "times the share of the last day" in suspicion.evidence


def test_it_closes_twenty_minutes_after_the_droplets_are_gone_and_not_in_between() -> None:
    watch, clear = Watch(), air(RURAL)
    watch.live(12.0, clear, 78.0)
    watch.live(1.0, clear + FOG, 84.0)
    for _ in range(4):  # fog in banks
        assert watch.live(0.2, clear, 83.0) == []
        assert watch.live(0.2, clear + FOG, 84.0) == []
    [closed] = watch.live(2.0, clear, 75.0)
    assert 20.0 <= closed <= 30.0


def test_the_same_droplets_in_dry_air_are_dust_and_no_fog() -> None:
    watch, clear = Watch(), air(RURAL)
    watch.live(12.0, clear, 50.0)
    assert watch.live(3.0, clear + FOG, 50.0) == []


@pytest.mark.parametrize(
    ("name", "after", "rh"),
    [
        ("dust in dry air", air(RURAL) + air(DESERT, 3000.0), 45.0),
        ("sea salt in moist air that is not near saturation", air(MARINE, 9000.0), 68.0),
        ("smoke on a moist night", air(RURAL) + 0.5 * SMOKE, 83.0),
        ("wash-out by rain", air(RURAL) * np.array([0.5, 0.4, 0.2, 0.1, 0.1, 0.1]), 78.0),
        ("haze that goes and leaves its coarse share", air(RURAL) * np.array([0.2, 0.2, 0.44, 0.44, 0.44, 0.44]), 83.0),
    ],
)
def test_other_weather_opens_nothing(name: str, after: Floats, rh: float) -> None:
    watch = Watch()
    watch.live(1.0, air(RURAL), 84.0)
    watch.live(12.0, air(RURAL), 70.0)
    assert watch.live(1.0, air(RURAL), 70.0, to=(after, rh)) == [], name
    assert watch.live(3.0, after, rh) == [], name


def test_what_comes_back_after_rain_is_no_fog() -> None:
    watch, clear = Watch(), air(RURAL)
    washed = clear * np.array([0.5, 0.4, 0.1, 0.05, 0.05, 0.05])
    watch.live(24.0, clear, 75.0)
    watch.live(3.0, washed, 79.0)
    assert watch.live(4.0, washed, 79.0, to=(clear, 76.0)) == []


def test_a_plume_of_two_minutes_on_a_moist_night_opens_nothing() -> None:
    watch, clear = Watch(), air(RURAL)
    watch.live(12.0, clear, 83.0)
    assert watch.live(2 / 60, clear + 3.0 * FOG, 84.0) == []
    assert watch.live(1.0, clear, 84.0) == []


def test_a_moist_night_without_droplets_opens_nothing() -> None:
    watch, clear = Watch(), air(RURAL)
    watch.live(12.0, clear, 60.0)
    assert watch.live(3.0, clear, 60.0, to=(clear, 84.0)) == []
    assert watch.live(6.0, clear, 84.0) == []


def test_very_clean_air_is_not_judged_by_a_handful_of_pulses() -> None:
    watch, clean = Watch(), air(RURAL, 60.0)
    watch.live(12.0, clean, 80.0)
    assert watch.live(12.0, clean + 0.01 * FOG, 84.0) == []


@pytest.mark.parametrize(("rh", "found"), [(94.0, False), (95.5, True), (100.0, True)])
def test_measured_humidity_beyond_every_correction_is_enough_with_or_without_counts(rh: float, found: bool) -> None:
    for layout in (BM_28, AA):
        watch = Watch()
        assert bool(watch.live(0.1, air(RURAL), rh, layout=layout)) is found


def test_a_fixed_humidity_says_nothing_and_neither_does_none() -> None:
    watch = Watch()
    assert watch.live(1.0, air(RURAL), 99.0, source=FIXED) == []
    watch.check.interval(interval(watch.now, air(RURAL), None))
    assert watch.told() is None


@pytest.mark.parametrize("seconds", [10.0, 300.0, 600.0, 3600.0])
def test_intervals_of_any_length_show_it(seconds: float) -> None:
    watch, clear = Watch(seconds=seconds), air(RURAL)
    watch.live(24.0 if seconds > 600.0 else 4.0, clear, 78.0)
    [opened] = watch.live(6.0 if seconds > 600.0 else 1.0, clear + FOG, 84.0)
    assert opened <= max(3 * seconds / 60.0, 15.0)


def test_after_a_restart_it_knows_the_usual_share_and_that_it_was_open() -> None:
    watch, clear = Watch(), air(RURAL)
    watch.live(12.0, clear, 82.0)
    watch.live(0.5, clear + FOG, 84.0)
    assert watch.told() is not None
    second = HumidityHigh()
    second.recall(json.loads(json.dumps(watch.check.memory())), instant(watch.now))
    after = Watch(second)
    after.now = watch.now
    assert after.told() is not None
    assert after.live(1.0, clear + FOG, 84.0) == []
    [closed] = after.live(1.0, clear, 78.0)
    assert 20.0 <= closed <= 30.0
    assert len(after.live(0.5, clear + FOG, 84.0)) == 1, "without three hours to learn anew"


@pytest.mark.parametrize(
    "memory", [{}, {"top": "x"}, {"top": 1e9, "share": -1.0}, {"share": 0.0, "level": 5.0, "holds": 3}]
)
def test_a_memory_of_any_shape_is_taken(memory: dict[str, object]) -> None:
    check = HumidityHigh()
    check.recall(memory, instant(0.0))  # type: ignore[arg-type]
    watch = Watch(check)
    assert watch.live(1.0, air(RURAL), 80.0) == []
