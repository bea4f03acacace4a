"""NowCast and index hold for any hours; the published values are checked in tests/outside."""

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from motekeep.measure.air_quality import (
    CATEGORIES,
    PM2_5_1999,
    PM2_5_2012,
    PM2_5_2024,
    PM10_2024,
    BreakpointTable,
    air_quality_index,
    cut,
    day_mean,
    nowcast,
)

hours = st.lists(st.none() | st.floats(0.0, 1000.0), max_size=12)


@settings(max_examples=40, deadline=None)
@given(hours)
def test_a_nowcast_lies_between_the_hours_it_is_made_of(given_hours: list[float | None]) -> None:
    got = nowcast(given_hours)
    there = [c for c in given_hours if c is not None]
    if sum(c is not None for c in given_hours[:3]) < 2:
        assert got is None
    else:
        assert got is not None
        assert min(there) - 1e-9 <= got <= max(there) + 1e-9


def test_negative_hours_count_as_zero() -> None:
    assert nowcast([-3.0, 10.0, 10.0]) == nowcast([0.0, 10.0, 10.0])
    assert nowcast([-3.0, -1.0, -2.0]) == 0.0


def test_hours_beyond_the_twelfth_do_not_count() -> None:
    assert nowcast([10.0] * 12 + [900.0]) == pytest.approx(10.0)


@pytest.mark.parametrize("table", [PM2_5_2024, PM10_2024, PM2_5_2012, PM2_5_1999])
@settings(max_examples=40, deadline=None)
@given(st.floats(0.0, 700.0), st.floats(0.0, 700.0))
def test_an_index_never_falls_with_more_dust(table: BreakpointTable, a: float, b: float) -> None:
    low, high = sorted((a, b))
    below, above = air_quality_index(low, table), air_quality_index(high, table)
    assert below.index <= above.index
    assert CATEGORIES.index(below.category) <= CATEGORIES.index(above.category)


@pytest.mark.parametrize("table", [PM2_5_2024, PM10_2024, PM2_5_2012, PM2_5_1999])
def test_the_bands_of_a_table_join_without_a_gap(table: BreakpointTable) -> None:
    for lower, upper in zip(table.bands, table.bands[1:], strict=False):
        assert upper.low == pytest.approx(lower.high + table.step)
        assert upper.index_low == lower.index_high + 1


def test_categories_change_where_the_index_passes_50_100_150_200_300() -> None:
    seen = {}
    for tenth in range(6000):
        got = air_quality_index(tenth / 10, PM2_5_2024)
        seen.setdefault(got.category, got.index)
    assert list(seen.items()) == list(zip(CATEGORIES, [0, 51, 101, 151, 201, 301], strict=True))


@settings(max_examples=40, deadline=None)
@given(st.integers(0, 10000))
def test_cutting_to_a_tenth_leaves_tenths_alone(tenths: int) -> None:
    assert cut(tenths / 10, 0.1) == tenths / 10


def test_a_day_of_no_hours_has_no_mean() -> None:
    assert day_mean([]) is None
    assert day_mean([5.0] * 24 + [900.0]) == 5.0
