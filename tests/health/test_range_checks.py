"""counts-saturated, mass-clipped and channels-inconsistent, judged on whole intervals."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from health.small_air import DESERT, MARINE, RURAL, SMOKE, URBAN, Floats, Unit, frames, instant, printed, steady
from motekeep.health.check import Check
from motekeep.health.finding import Suspicion
from motekeep.health.range import ChannelsInconsistent, CountsSaturated, MassClipped
from motekeep.measure.interval import Accumulator, Interval
from motekeep.wire.bm import BM_20, BM_28
from motekeep.wire.frame import Frame
from motekeep.wire.stuffed import STUFFED

COUNTS = (1200.0, 340.0, 62.0, 8.0, 2.0, 1.0)
MASS = (5.0, 8.0, 9.0)


def interval(made: list[Frame], start_s: float = 0.0, seconds: float = 60.0) -> Interval:
    accumulator = Accumulator()
    for frame in made:
        accumulator.add(frame)
    return accumulator.close("north", instant(start_s), seconds, climate=None)


def minutes(check: Check, made: list[list[Frame]]) -> list[Suspicion | None]:
    """What the check says after each minute of frames."""
    said = []
    for n, minute in enumerate(made):
        check.interval(interval(minute, 60.0 * n))
        said.append(check.judge(instant(60.0 * (n + 1))))
    return said


def bm(counts: tuple[float, ...] = COUNTS, mass: tuple[float, ...] = MASS) -> Frame:
    return Frame(BM_28, mass, counts, b"")


def test_one_frame_at_the_top_saturates_its_interval_and_no_other() -> None:
    full = bm((65_535.0, *COUNTS[1:]))
    said = minutes(CountsSaturated(), [[bm()] * 60, [bm()] * 59 + [full], [bm()] * 60])
    assert said[0] is None
    assert said[2] is None
    assert said[1] is not None
    assert (said[1].since, said[1].until) == (60.0, 120.0)
    assert "1 of 60 frames above 0.3 um" in said[1].evidence


def test_a_field_without_an_end_never_saturates() -> None:
    frame = Frame(STUFFED, (1.0, 2.0, 3.0, 4.0), (9e6, 8e6, 7e6, 6e6, 5e6), b"")
    assert minutes(CountsSaturated(), [[frame] * 60]) == [None]


@pytest.mark.parametrize("mass", [(5.0, 8.0, 1000.0), (5.0, 8.0, 1001.0), (-0.1, 8.0, 9.0)])
def test_mass_at_its_top_or_below_zero_is_clipped(mass: tuple[float, ...]) -> None:
    (said,) = minutes(MassClipped(), [[bm()] * 30 + [bm(mass=mass)] * 30])
    assert said is not None
    assert "declared range is 0 to 1000" in said.evidence


def test_mass_inside_its_range_is_not_clipped() -> None:
    assert minutes(MassClipped(), [[bm(mass=(0.0, 500.0, 999.0))] * 60]) == [None]


def test_an_interval_without_frames_ends_what_the_last_one_showed() -> None:
    full = bm((65_535.0, *COUNTS[1:]))
    assert minutes(CountsSaturated(), [[full] * 60, []])[1] is None


@pytest.mark.parametrize(
    ("frame", "words"),
    [
        (bm((1200.0, 340.0, 62.0, 8.0, 215.0, 540.0)), "215.0 /dL above 5 um but 8.0 above 2.5 um"),
        (bm(mass=(9.0, 5.0, 9.0)), "pm1 9.0 above pm2_5 5.0"),
        (Frame(BM_20, (5.0, 12.0, 7.0), (), b""), "pm2_5 12.0 above pm10 7.0"),
        (bm((60_000.0, 50_000.0, 30_000.0, 8.0, 2.0, 1.0), (0.0, 0.0, 0.0)), "PM2.5 0.0 ug/m3 against"),
        (bm((10.0, 4.0, 2.0, 1.0, 0.0, 0.0), (300.0, 400.0, 500.0)), "PM2.5 400.0 ug/m3 against"),
    ],
)
def test_what_cannot_belong_together_is_found_after_three_minutes_and_says_what(frame: Frame, words: str) -> None:
    said = minutes(ChannelsInconsistent(), [[frame] * 60] * 4)
    assert said[0] is said[1] is None
    assert said[2] is not None
    assert said[2].since == 0.0
    assert words in said[2].evidence


def test_a_minute_of_nonsense_is_no_finding() -> None:
    bad = bm((1200.0, 340.0, 62.0, 8.0, 215.0, 540.0))
    assert minutes(ChannelsInconsistent(), [[bm()] * 60, [bad] * 60, [bm()] * 60, [bad] * 60, [bad] * 60]) == [None] * 5


def test_a_climate_dialect_read_as_counts_is_inconsistent() -> None:
    """The last two words of `bm-climate` are temperature and humidity in tenths: 21.5 degC and 54.0 %."""
    frame = bm((1200.0, 340.0, 62.0, 8.0, 215.0, 540.0))
    assert minutes(ChannelsInconsistent(), [[frame] * 60] * 3)[2] is not None


@pytest.mark.parametrize(
    "shape", [URBAN, RURAL, MARINE, DESERT, SMOKE], ids=["urban", "rural", "sea", "desert", "smoke"]
)
@pytest.mark.parametrize("level", [0.0, 100.0, 3_000.0, 60_000.0])
def test_published_aerosols_are_consistent(shape: Floats, level: float) -> None:
    counts = printed(steady(level, shape, 600.0, 1.0), Unit(), np.random.default_rng(1))
    made = frames(counts)
    assert minutes(ChannelsInconsistent(), [made[n * 60 : n * 60 + 60] for n in range(10)]) == [None] * 10


@given(
    st.lists(st.floats(0.0, 65_000.0), min_size=6, max_size=6),
    st.floats(0.5, 2.0),
    st.lists(st.sampled_from([-1.0, 0.0, 1.0]), min_size=6, max_size=6),
)
@settings(max_examples=60)
def test_any_falling_counts_with_their_own_mass_pass_whatever_the_rounding(
    counts: list[float], factor: float, rounding: list[float]
) -> None:
    falling = np.array([sorted(counts, reverse=True)])
    (frame,) = frames(falling * 1.0)
    jittered = tuple(max(c + 0.49 * r, 0.0) for c, r in zip(falling[0], rounding, strict=True))
    mass = tuple(min(m * factor, 990.0) for m in frame.mass)
    assert minutes(ChannelsInconsistent(), [[bm(jittered, mass)] * 60] * 4) == [None] * 4
