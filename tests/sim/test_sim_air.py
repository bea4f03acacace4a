"""The air of a site over months: how it varies, and that events come and go."""

from itertools import islice

import numpy as np
import pytest

from motesim.air import Air, AirCourse, AirPlan
from motesim.events import KINDS, Event, effect_of
from motesim.weather import STEP_S, Climate

START = 1_796_083_200.0


@pytest.fixture(scope="module")
def airs() -> list[Air]:
    """Two months."""
    return list(islice(AirCourse(AirPlan(), (), 3, START).stretches(), 4 * 60))


def test_hourly_pm_has_the_memory_of_a_real_year(airs: list[Air]) -> None:
    dry = np.concatenate([air.dry_masses()[1, :-1] for air in airs])
    hours = np.log(dry.reshape(-1, 360).mean(axis=1))
    lag = [float(np.corrcoef(hours[:-n], hours[n:])[0, 1]) for n in (1, 24)]
    # hourly PM2.5 of Imperial County 2015 (data of pvlib 0.16.1): 0.793 and 0.316
    assert lag == pytest.approx([0.79, 0.32], abs=0.12)
    assert np.median(np.exp(hours)) == pytest.approx(AirPlan().pm2_5, rel=0.3)


def test_nights_are_humid_and_afternoons_dry(airs: list[Air]) -> None:
    rh, times = (np.concatenate([getattr(air, name)[:-1] for air in airs]) for name in ("rh", "times"))
    hour = times % 86_400.0 / 3600.0
    assert rh[(hour > 2) & (hour < 5)].mean() > rh[(hour > 13) & (hour < 16)].mean() + 8.0
    assert rh.mean() == pytest.approx(Climate().humidity, abs=8.0)
    assert 0.0 < (rh > 95.0).mean() < 0.1


@pytest.mark.parametrize("kind", list(KINDS))
def test_an_event_begins_when_it_should_and_is_over_in_the_end(kind: str) -> None:
    event = Event(kind, START + 3600.0, KINDS[kind].lasts_s, KINDS[kind].strength, seed=4)
    times = START + STEP_S * np.arange(60 * 360)
    effect = effect_of((event,), times)
    acting = np.abs(effect.fine - 1.0) + np.abs(effect.coarse - 1.0) + effect.rh_weight + sum(effect.added.values())
    assert not acting[times < event.at].any()
    during = acting[(times > event.at) & (times < event.at + event.lasts_s)]
    assert during.max() > 0.0
    assert acting[-1] < 0.02 * during.max()


def test_an_event_is_the_same_however_time_is_cut() -> None:
    event = Event("smoke", START + 5000.0, 7200.0, 50.0, seed=9)
    times = START + STEP_S * np.arange(4000)
    whole = effect_of((event,), times)
    ((mode, factor),) = whole.added.items()
    parts = [effect_of((event,), times[a : a + 700]).added.get(mode) for a in range(0, 4000, 700)]
    joined = np.concatenate([np.zeros(700) if p is None else p for p in parts])[:4000]
    assert joined == pytest.approx(factor, rel=1e-9, abs=1e-12)


def test_an_air_cleaner_is_fast_but_a_dead_fan_is_faster() -> None:
    event = Event("air-cleaner", START, 4 * 3600.0, 12.0)
    fine = effect_of((event,), START + STEP_S * np.arange(720)).fine
    to_half = STEP_S * int(np.argmax(fine < 0.5))
    assert 100.0 < to_half < 600.0  # 12.5 room volumes an hour: ln 2 / 12.5 h is 200 s
