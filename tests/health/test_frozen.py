"""output-frozen: opens on what chance cannot give, stays shut on what it can."""

from dataclasses import replace

import numpy as np
import pytest

from health.small_air import (
    MARINE,
    RURAL,
    SIZES_UM,
    URBAN,
    Floats,
    Unit,
    feed,
    frames,
    instant,
    ordinary,
    printed,
    steady,
)
from motekeep.health.check import LineState
from motekeep.health.frozen import OutputFrozen
from motekeep.wire.aa import AA
from motekeep.wire.bm import BM_20, BM_28
from motekeep.wire.frame import Frame

AT_1_AND_6 = [(1.0, 1), (1.0, 10), (6.0, 1), (6.0, 3)]


def frozen_from(counts: Floats, at: int, frames_: int) -> Floats:
    return np.concatenate([counts[:at], np.repeat(counts[at - 1 : at], frames_, axis=0)])


@pytest.mark.parametrize(("period_s", "averaging"), AT_1_AND_6)
@pytest.mark.parametrize("level", [300.0, 5_000.0, 20_000.0])
def test_a_frozen_output_is_found_within_five_minutes_and_dated_to_its_first_frame(
    period_s: float, averaging: int, level: float
) -> None:
    rng = np.random.default_rng([int(level), int(period_s), averaging])
    unit = Unit(period_s=period_s, averaging=averaging)
    normal = printed(steady(level, RURAL, 1800.0, period_s), unit, rng)
    made = frames(frozen_from(normal, len(normal), int(300.0 / period_s)))
    changes = feed(OutputFrozen(0.1, instant(1000.0)), made, period_s)
    assert len(changes) == 1
    assert changes[0].suspicion is not None
    assert changes[0].at <= 1000.0 + 1800.0 + 300.0
    assert changes[0].suspicion.since == pytest.approx(1000.0 + len(normal) * period_s, abs=3 * period_s)
    assert "identical frames" in changes[0].suspicion.evidence


@pytest.mark.parametrize("period_s", [1.0, 6.0])
def test_a_unit_frozen_from_its_first_frame_does_not_teach_that_frozen_is_normal(period_s: float) -> None:
    made = frames(np.repeat([[1200.0, 340.0, 62.0, 8.0, 2.0, 1.0]], int(7_200 / period_s), axis=0))
    changes = feed(OutputFrozen(0.1, instant(1000.0)), made, period_s)
    assert len(changes) == 1
    assert changes[0].at <= 1000.0 + 300.0


def test_it_lets_go_with_the_first_frame_that_differs() -> None:
    rng = np.random.default_rng(2)
    normal = printed(steady(2_000.0, RURAL, 1200.0, 1.0), Unit(), rng)
    made = frames(np.concatenate([frozen_from(normal[:600], 600, 200), normal[600:]]))
    changes = feed(OutputFrozen(0.1, instant(1000.0)), made, 1.0)
    assert [change.suspicion is not None for change in changes] == [True, False]


@pytest.mark.parametrize("period_s", [1.0, 6.0])
@pytest.mark.parametrize("level", [0.0, 0.05, 1.0, 10.0, 60.0])
def test_zeros_and_near_zeros_of_very_clean_air_open_nothing(period_s: float, level: float) -> None:
    rng = np.random.default_rng([int(level * 100), int(period_s)])
    for averaging in (1, 10):
        unit = Unit(period_s=period_s, averaging=averaging, floor=0.0)
        made = frames(printed(steady(level, MARINE, 3_600.0, period_s), unit, rng))
        assert feed(OutputFrozen(0.1, instant(1000.0)), made, period_s) == []


@pytest.mark.parametrize(("period_s", "averaging"), AT_1_AND_6)
@pytest.mark.parametrize("level", [30.0, 200.0, 3_000.0])
def test_hours_of_ordinary_air_opens_nothing(period_s: float, averaging: int, level: float) -> None:
    rng = np.random.default_rng([int(level), int(period_s), averaging, 7])
    unit = Unit(period_s=period_s, averaging=averaging)
    made = frames(printed(ordinary(rng, level, URBAN, 6.0 if period_s > 1 else 1.0, period_s), unit, rng))
    assert feed(OutputFrozen(0.1, instant(1000.0)), made, period_s) == []


@pytest.mark.parametrize("hold", [2, 3, 5])
def test_firmware_that_prints_each_value_several_times_opens_nothing(hold: int) -> None:
    """Common practice, no source: some units renew their numbers only every few seconds in steady air."""
    rng = np.random.default_rng(hold)
    counts = np.repeat(printed(steady(800.0, RURAL, 7200.0, 1.0 * hold), Unit(period_s=hold), rng), hold, axis=0)
    assert feed(OutputFrozen(0.1, instant(1000.0)), frames(counts), 1.0) == []


def test_a_counter_at_its_top_repeats_it_and_is_not_frozen() -> None:
    made = frames(np.repeat([[65_535.0, 65_535.0, 9_000.0, 400.0, 90.0, 9.0]], 3600, axis=0))
    assert feed(OutputFrozen(0.1, instant(1000.0)), made, 1.0) == []


def test_a_reopened_line_begins_a_new_run() -> None:
    check = OutputFrozen(0.1, instant(1000.0))
    (frame,) = frames(np.array([[1200.0, 340.0, 62.0, 8.0, 2.0, 1.0]]))
    for n in range(10):
        assert feed(check, [frame] * 12, 1.0, start_s=1000.0 + 100.0 * n) == []
        check.line(LineState.OPENED, instant(1100.0 + 100.0 * n), "")


def masses(level: float, seconds: float, rng: np.random.Generator) -> list[Frame]:
    """A dialect with tenths of mass only, as firmware that averages ten seconds gives it."""
    counts = printed(steady(level, URBAN, seconds, 1.0), Unit(averaging=10), rng)
    return frames(counts, replace(AA, mass=("pm2_5", "pm10")))


def test_without_counts_frozen_mass_is_found_where_mass_is_noisy_enough() -> None:
    rng = np.random.default_rng(11)
    normal = masses(12_000.0, 1200.0, rng)
    changes = feed(OutputFrozen(0.1, instant(1000.0)), normal + [normal[-1]] * 300, 1.0)
    assert len(changes) == 1
    assert changes[0].at > 1000.0 + 1200.0


@pytest.mark.parametrize("level", [0.0, 100.0, 1_000.0, 8_000.0])
def test_without_counts_a_steady_night_is_not_frozen(level: float) -> None:
    rng = np.random.default_rng(int(level))
    assert feed(OutputFrozen(0.1, instant(1000.0)), masses(level, 3_600.0, rng), 1.0) == []


def test_whole_micrograms_of_clean_air_say_nothing_however_long_they_stand() -> None:
    """A limit that is told: length 20 prints whole ug/m3, so that 5 may honestly stand for hours."""
    frame = Frame(BM_20, (3.0, 5.0, 6.0), (), b"same")
    assert feed(OutputFrozen(0.1, instant(1000.0)), [frame] * 3600, 1.0) == []


def test_the_layouts_here_are_those_of_the_dialect() -> None:
    assert BM_28.sizes_um == SIZES_UM
