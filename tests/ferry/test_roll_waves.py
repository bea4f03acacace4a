"""Waves: what `1,10%,rest` means."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from moteferry.roll.offer import RollError
from moteferry.roll.waves import sizes, split


@pytest.mark.parametrize(
    ("spec", "count", "found"),
    [
        ("1,10%,rest", 1000, [1, 100, 899]),
        ("1,10%,rest", 1, [1]),
        ("1,10%,rest", 5, [1, 1, 3]),
        ("rest", 7, [7]),
        ("50%,50%", 7, [4, 3]),
        ("3, 4", 7, [3, 4]),
        ("1,rest", 0, []),
    ],
)
def test_sizes_of_waves(spec: str, count: int, found: list[int]) -> None:
    assert sizes(spec, count) == found


@pytest.mark.parametrize(
    ("spec", "why"),
    [
        ("", "'' is no wave"),
        ("0,rest", "'0' is no wave"),
        ("rest,1", "goes on after `rest`"),
        ("1,10 %,rest", "'10 %' is no wave"),
        ("101%", "'101%' is no wave"),
        ("-1,rest", "'-1' is no wave"),
        ("\u0661,rest", "is no wave"),
        ("1,2", "leaves 7 of 10 in no wave"),
        (",".join(["1"] * 51), "has 51 waves"),
    ],
)
def test_a_spec_that_makes_no_waves_is_refused_with_its_mend(spec: str, why: str) -> None:
    with pytest.raises(RollError) as refused:
        sizes(spec, 10)
    assert why in str(refused.value)
    assert refused.value.mend


@given(st.integers(1, 3000), st.integers(1, 50), st.integers(1, 100))
def test_everybody_is_in_one_wave_and_in_order(count: int, first: int, percent: int) -> None:
    waves = split(range(count), f"{first},{percent}%,rest")
    assert [item for wave in waves for item in wave] == list(range(count))
    assert all(waves)
