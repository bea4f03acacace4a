"""The lesson `noise`: scale and averaging of a unit, from any of its first days."""

import json
from dataclasses import replace

import numpy as np
import pytest

from health.noise_intervals import START, Counter, flicker, without_counts
from motekeep.health.baseline import Baseline
from motekeep.health.lessons.noise import Noise, NoiseLesson, averaging_of, of_mean, within
from motekeep.instant import Instant
from motekeep.measure.dose import ServiceKind

DAY = 24 * 60
SLOW = Counter(13.0, 3, 6.0)  # ten times fewer frames than at 1 s
AT = Instant(1.8e9, START, "one", trusted=True)


def taught(counter: Counter, seed: int = 1, minutes: int = DAY, factor: np.ndarray | None = None) -> NoiseLesson:
    lesson = NoiseLesson(0.1, counter.period_s)
    for interval in counter.minutes(minutes, np.random.default_rng(seed), factor):
        lesson.interval(interval)
    return lesson


@pytest.mark.parametrize("averaging", [1, 3, 10])
@pytest.mark.parametrize(("period_s", "scale", "within"), [(1.0, 80.0, 0.1), (6.0, 13.0, 0.2)])
def test_scale_and_averaging_are_learnt_in_a_day(averaging: int, period_s: float, scale: float, within: float) -> None:
    noise = taught(Counter(scale, averaging, period_s)).part()
    assert noise is not None
    assert noise.averaging == pytest.approx(averaging, rel=within)
    assert noise.scale == pytest.approx(scale, rel=2.0 * within)
    assert noise.step == pytest.approx(scale / averaging**2, rel=0.05)


def test_a_day_of_gusts_and_plumes_teaches_the_same() -> None:
    counter = Counter()
    rng = np.random.default_rng(2)
    factor = flicker(DAY * 60, 0.03, 90.0, 1.0, rng)
    for at in range(600, DAY * 60, 4 * 3600):
        factor[at : at + 120] *= 6.0
    noise = taught(counter, factor=factor).part()
    assert noise is not None
    assert noise.scale == pytest.approx(80.0, rel=0.12)
    assert noise.averaging == pytest.approx(3.0, rel=0.1)


def test_a_fan_that_surges_from_the_first_day_on_does_not_teach_its_surging() -> None:
    counter = Counter()
    noise = taught(counter, factor=flicker(DAY * 60, 0.25, 4.0, 1.0, np.random.default_rng(3))).part()
    assert noise is not None
    assert noise.scale == pytest.approx(80.0, rel=0.15)


@pytest.mark.parametrize("scale", [30.0, 500.0])
def test_what_physics_rules_out_is_not_learnt(scale: float) -> None:
    # at 0.1 L/min one second brings a sixtieth of 0.1 L, so no pulse is worth less than 60
    levels = (20_000.0, 4500.0, 600.0, 80.0, 10.0, 1.0)
    assert taught(Counter(scale, levels=levels)).part() is None


def test_less_than_a_day_teaches_nothing_and_masses_teach_nothing() -> None:
    assert taught(SLOW, minutes=DAY - 61).part() is None
    lesson = NoiseLesson(0.1, 6.0)
    for interval in SLOW.minutes(DAY, np.random.default_rng(1)):
        lesson.interval(without_counts(interval))
    assert lesson.part() is None


def test_intervals_with_warm_up_sleep_or_missing_frames_are_left_out() -> None:
    lesson = NoiseLesson(0.1, 6.0)
    for number, interval in enumerate(SLOW.minutes(DAY, np.random.default_rng(1))):
        spoilt = (
            {"warming_frames": 5},
            {"asleep_s": 20.0},
            {"frames": replace(interval.frames, missing=2)},
        )[number % 3]
        lesson.interval(replace(interval, **spoilt))
    assert lesson.part() is None


def test_a_lesson_goes_on_after_a_restart_and_stands_still_once_learnt() -> None:
    made = SLOW.minutes(2 * DAY, np.random.default_rng(4))
    first = NoiseLesson(0.1, 6.0)
    for interval in made[: DAY // 2]:
        first.interval(interval)
    second = NoiseLesson(0.1, 6.0)
    second.recall(json.loads(json.dumps(first.notes())))
    for interval in made[DAY // 2 : DAY + 60]:
        second.interval(interval)
    learnt = second.part()
    assert learnt is not None
    third = NoiseLesson(0.1, 6.0)
    third.recall(json.loads(json.dumps(second.notes())))
    for interval in made[DAY + 60 :]:
        third.interval(interval)
    assert third.part() == Noise(pytest.approx(learnt.scale), pytest.approx(learnt.averaging))  # type: ignore[arg-type]


@pytest.mark.parametrize(
    "notes",
    [
        {},
        {"period_s": 6.0, "scale": 80.0, "averaging": 3.0},  # learnt at another cadence
        {"period_s": 1.0, "scale": 1e9, "averaging": 3.0},
        {"period_s": 1.0, "scale": 80.0, "averaging": 1e9},
        {"period_s": 1.0, "scale": "80", "averaging": None},
        {"period_s": 1.0, "steps": [1.0, -1.0, "x"], "averagings": [0.1, 1.0]},
    ],
)
def test_notes_that_cannot_be_used_are_ignored(notes: dict[str, object]) -> None:
    lesson = NoiseLesson(0.1, 1.0)
    lesson.recall(notes)
    assert lesson.part() is None


def test_only_another_unit_is_learnt_anew() -> None:
    lesson = taught(SLOW)
    baseline = Baseline((lesson,))
    assert baseline.review(AT)
    for kind in (ServiceKind.CLEANED, ServiceKind.FAN_REPLACED, ServiceKind.MOVED, ServiceKind.NOTE):
        assert not baseline.service(kind, AT)
    assert baseline.service(ServiceKind.UNIT_REPLACED, AT)
    assert baseline.parts == {}
    assert lesson.part() is None


@pytest.mark.parametrize(("averaging", "frames"), [(1, 60), (3, 60), (10, 60), (3, 10), (10, 10), (15, 10)])
def test_variances_of_running_means_are_those_of_a_simulation(averaging: int, frames: int) -> None:
    rng = np.random.default_rng(5)
    white = rng.standard_normal((20_000, frames + averaging))
    total = np.cumsum(white, axis=1)
    pooled = (total[:, averaging:] - total[:, :-averaging]) / averaging
    step = np.mean(np.diff(pooled, axis=1) ** 2) / 2.0
    assert of_mean(averaging, frames) == pytest.approx(pooled.mean(axis=1).var() / step, rel=0.05)
    assert within(averaging, frames) == pytest.approx(pooled.var(axis=1, ddof=1).mean() / step, rel=0.05)
    if averaging <= frames // 4:
        assert averaging_of(within(averaging, frames), frames, within_it=True) == pytest.approx(averaging, rel=1e-3)
    assert averaging_of(of_mean(averaging, frames), frames, within_it=False) == pytest.approx(averaging, rel=1e-3)
