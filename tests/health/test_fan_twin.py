"""A stopped fan beside a twin: found within a minute, by what the twin goes on seeing, and by nothing that air does."""

import math
import random
from collections.abc import Callable

import pytest

from motekeep.health.fan_twin import FanStoppedBesideTwin
from motekeep.instant import Instant
from motekeep.wire.bm import BM_28
from motekeep.wire.frame import Frame, Observation

Level = Callable[[float], float]
BOOTED = 10_000.0
PER_PULSE = 60.0  # at 0.1 L/min and one second: what one pulse is worth in print


def frame(mean: float, chance: random.Random) -> Frame:
    """A frame of scaled Poisson counts around `mean` per dL (normal approximation above thirty pulses)."""
    pulses = mean / PER_PULSE
    seen = (
        chance.gauss(pulses, math.sqrt(pulses))
        if pulses > 30
        else sum(chance.random() < pulses / 60 for _ in range(60))
    )
    smallest = round(max(seen, 0.0) * PER_PULSE)
    return Frame(BM_28, (1.0, 2.0, 3.0), (float(smallest), smallest / 4.0, smallest / 20.0, 0.0, 0.0, 0.0), b"")


def run(own: Level, twin: Level, seconds: int, period: float = 1.0, seed: int = 1) -> list[tuple[float, float]]:
    """When the check began to hold and ended, in seconds; infinity for an end that did not come."""
    check, chance = FanStoppedBesideTwin(0.1, period), random.Random(seed)
    spans: list[tuple[float, float]] = []
    t = 0.0
    while t < seconds:
        at = Instant(1e9 + t, BOOTED + t, "boot", trusted=True)
        check.twin(Observation(frame(twin(t), chance), at))
        check.observe(Observation(frame(own(t), chance), at))
        held = check.judge(at) is not None
        if held and (not spans or spans[-1][1] != math.inf):
            spans.append((t, math.inf))
        elif not held and spans and spans[-1][1] == math.inf:
            spans[-1] = (spans[-1][0], t)
        t += period
    return spans


def stopping(level: float, at: float) -> Level:
    """The fan stops: the cell empties with a few seconds, and a hundredth is left."""
    return lambda t: level if t < at else level * (0.01 + 0.99 * math.exp(-(t - at) / 6.0))


@pytest.mark.parametrize("period", [1.0, 6.0])
@pytest.mark.parametrize("level", [400.0, 2000.0, 20_000.0])
def test_it_is_found_within_two_minutes_and_one_at_a_frame_a_second(level: float, period: float) -> None:
    [(found, ended)] = run(stopping(level, 200.0), lambda _t: level * 0.9, 600, period)
    assert 200.0 < found < (260.0 if period == 1.0 else 320.0)
    assert ended == math.inf


def test_since_is_when_the_collapse_began() -> None:
    check, chance = FanStoppedBesideTwin(0.1, 1.0), random.Random(3)
    for t in range(300):
        at = Instant(1e9 + t, BOOTED + t, "boot", trusted=True)
        check.twin(Observation(frame(3000.0, chance), at))
        check.observe(Observation(frame(stopping(3000.0, 200.0)(t), chance), at))
    suspicion = check.judge(at)
    assert suspicion is not None
    assert BOOTED + 194 <= suspicion.since <= BOOTED + 208
    assert "twin holds" in suspicion.evidence


def test_a_fan_that_runs_again_ends_it() -> None:
    def own(t: float) -> float:
        return stopping(3000.0, 200.0)(t) if t < 400 else 3000.0

    [(_, ended)] = run(own, lambda _t: 3000.0, 700)
    assert 400 < ended < 470


@pytest.mark.parametrize(
    "air",
    [
        pytest.param(lambda t: 3000.0 if t < 300 else 30.0, id="a-plume-that-ends-at-once"),
        pytest.param(lambda t: 3000.0 * math.exp(-max(t - 200.0, 0.0) / 30.0) + 40.0, id="a-front-of-clean-air"),
        pytest.param(lambda t: 200.0 + 5000.0 * (300.0 < t < 420.0), id="a-truck-passes"),
        pytest.param(lambda _t: 20.0, id="air-so-clean-that-nothing-can-be-told"),
    ],
)
def test_what_air_does_to_both_is_no_finding(air: Level) -> None:
    for seed in range(5):
        assert run(air, lambda t: 1.1 * air(t), 900, seed=seed) == []


def test_a_unit_that_always_saw_less_is_no_finding_and_slow_loss_is_none_either() -> None:
    assert run(lambda _t: 300.0, lambda _t: 3000.0, 900) == []
    assert run(lambda t: 3000.0 * math.exp(-t / 600.0), lambda _t: 3000.0, 3000) == []


def test_a_twin_that_is_blind_itself_neither_opens_nor_closes_it() -> None:
    assert run(stopping(3000.0, 200.0), stopping(3000.0, 60.0), 600) == []
    both = run(stopping(3000.0, 200.0), stopping(3000.0, 400.0), 900)
    assert len(both) == 1
    assert both[0][1] == math.inf


def test_it_is_remembered_across_a_restart() -> None:
    first, second = FanStoppedBesideTwin(0.1, 1.0), FanStoppedBesideTwin(0.1, 1.0)
    chance = random.Random(5)
    for t in range(300):
        at = Instant(1e9 + t, BOOTED + t, "boot", trusted=True)
        first.twin(Observation(frame(3000.0, chance), at))
        first.observe(Observation(frame(stopping(3000.0, 200.0)(t), chance), at))
    memory = first.memory()
    assert memory is not None
    second.recall(memory, at)
    assert second.judge(at) is not None
    for t in range(301, 360):
        at = Instant(1e9 + t, BOOTED + t, "boot", trusted=True)
        second.twin(Observation(frame(3000.0, chance), at))
        second.observe(Observation(frame(3000.0, chance), at))
    assert second.judge(at) is None
