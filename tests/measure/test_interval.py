"""An interval holds exactly what its frames were."""

import statistics
from itertools import pairwise

import pytest
from hypothesis import given
from hypothesis import strategies as st

from motekeep.instant import Instant
from motekeep.measure.interval import Accumulator, Cadence, channel, frame_climate
from motekeep.wire.frame import Frame, Layout

LAYOUT = Layout("test", ("pm2_5",), 1.0, 1000.0, (0.3, 0.5), 65535.0)
OTHER = Layout("other", ("pm2_5",), 1.0, 1000.0)
START = Instant(1_000_000.0, 500.0, "boot", trusted=True)


def frame(mass: float = 5.0, counts: tuple[float, ...] = (100.0, 10.0), layout: Layout = LAYOUT) -> Frame:
    return Frame(layout, (mass,), counts, b"")


@given(st.lists(st.floats(0, 1e5), min_size=2, max_size=80))
def test_statistics_agree_with_the_standard_library(values: list[float]) -> None:
    got = channel(values)
    assert got.n == len(values)
    assert got.mean == pytest.approx(statistics.fmean(values), rel=1e-9, abs=1e-9)
    assert got.sd == pytest.approx(statistics.stdev(values), rel=1e-6, abs=1e-4)
    assert (got.low, got.high) == (min(values), max(values))
    steps = [(b - a) ** 2 for a, b in pairwise(values)]
    assert got.step == pytest.approx(sum(steps) / len(steps) / 2, rel=1e-5, abs=1e-3)


def test_a_ramp_has_little_step_variance_and_a_high_lag() -> None:
    ramp = channel([float(i) for i in range(60)])
    assert ramp.step == pytest.approx(0.5)
    assert ramp.sd**2 > 300
    assert ramp.lag1 > 0.9
    assert ramp.standard_error > ramp.sd / 60**0.5 * 4


def test_censored_counts_are_counted_and_never_averaged() -> None:
    got = channel([100.0, 65535.0, 200.0], top=65535.0)
    assert (got.n, got.mean, got.high, got.censored) == (2, 150.0, 200.0, 1)
    assert channel([65535.0], top=65535.0).n == 0


def test_frames_of_another_layout_are_bad_not_averaged() -> None:
    accumulator = Accumulator()
    accumulator.add(frame(5.0))
    accumulator.add(frame(50.0, (), OTHER))
    interval = accumulator.close("north", START, 60.0, climate=None)
    assert interval.frames.good == 1
    assert interval.frames.bad == 1
    assert interval.mass[0].mean == 5.0


def test_an_interval_without_frames_has_no_layout_and_no_numbers() -> None:
    interval = Accumulator().close("north", START, 60.0, climate=None)
    assert interval.layout is None
    assert interval.mass == interval.counts == ()
    assert interval.completeness == 0.0


def test_climate_of_frames_is_the_mean_of_those_that_carry_it() -> None:
    frames = [
        Frame(LAYOUT, (1.0,), (), b"", rh_pct=40.0, temperature_c=10.0),
        Frame(LAYOUT, (1.0,), (), b"", rh_pct=60.0, temperature_c=20.0),
        frame(),
    ]
    climate = frame_climate(frames)
    assert climate is not None
    assert (climate.rh_pct, climate.temperature_c, climate.source) == (50.0, 15.0, "frame")
    assert frame_climate([frame()]) is None


def test_every_missed_slot_is_counted_once() -> None:
    cadence = Cadence(1.0, 0.0)
    missing = sum(cadence.arrived(t) for t in (1.0, 2.0, 6.0, 7.0))
    assert missing == 3
    assert cadence.due(7.9) == 0


def test_a_gap_over_a_border_is_split_without_a_double_count() -> None:
    cadence = Cadence(1.0, 0.0)
    before = cadence.due(10.0)
    after = cadence.arrived(20.0)
    assert before == 9
    assert before + after == 19


@given(
    st.lists(st.booleans(), min_size=1, max_size=200),
    st.floats(0.2, 60.0),
    st.lists(st.floats(-0.2, 0.2), min_size=200, max_size=200),
    st.sets(st.integers(1, 199)),
)
def test_came_and_missing_add_up_to_due_under_jitter_and_any_borders(
    came: list[bool], period: float, jitter: list[float], borders: set[int]
) -> None:
    cadence = Cadence(period, 0.0)
    missing = arrivals = 0
    for slot, (here, shift) in enumerate(zip(came, jitter, strict=False), 1):
        if slot in borders:
            missing += cadence.due((slot - 0.45) * period)
        if here:
            missing += cadence.arrived((slot + shift) * period)
            arrivals += 1
    end = (len(came) + 0.9) * period
    missing += cadence.due(end)
    assert missing + arrivals == pytest.approx(len(came), abs=0)
