"""Ranges of sequence numbers against the plain set of Python."""

from itertools import pairwise

import pytest
from hypothesis import given
from hypothesis import strategies as st

from motekeep.edges.spans import Spans

ranges = st.tuples(st.integers(1, 60), st.integers(0, 12)).map(lambda r: (r[0], r[0] + r[1]))
steps = st.lists(st.tuples(st.booleans(), ranges), max_size=30)


def numbers(spans: Spans) -> set[int]:
    return {n for low, high in spans for n in range(low, high + 1)}


def build(moves: list[tuple[bool, tuple[int, int]]]) -> tuple[Spans, set[int]]:
    spans, plain = Spans(), set[int]()
    for adds, (low, high) in moves:
        span = set(range(low, high + 1))
        if adds:
            spans.add(low, high)
            plain |= span
        else:
            assert spans.remove(low, high) == len(plain & span)
            plain -= span
    return spans, plain


@given(steps, ranges)
def test_any_sequence_of_additions_and_removals_equals_a_plain_set(
    moves: list[tuple[bool, tuple[int, int]]], probe: tuple[int, int]
) -> None:
    spans, plain = build(moves)
    low, high = probe
    window = set(range(low, high + 1))
    assert numbers(spans) == plain
    assert len(spans) == len(plain)
    assert spans.first == min(plain, default=None)
    assert spans.overlaps(low, high) == bool(plain & window)
    assert numbers(spans.within(low, high)) == plain & window
    assert numbers(spans.gaps(low, high)) == window - plain
    assert Spans.from_text(str(spans)) == spans


@given(steps)
def test_ranges_never_touch_each_other(moves: list[tuple[bool, tuple[int, int]]]) -> None:
    spans, _ = build(moves)
    assert all(a_high + 1 < b_low for (_, a_high), (b_low, _) in pairwise(spans))


@given(steps, steps)
def test_union_and_difference_equal_those_of_plain_sets(
    one: list[tuple[bool, tuple[int, int]]], other: list[tuple[bool, tuple[int, int]]]
) -> None:
    (a, plain_a), (b, plain_b) = build(one), build(other)
    assert numbers(a.union(b)) == plain_a | plain_b
    assert numbers(a.without(b)) == plain_a - plain_b
    assert numbers(a) == plain_a


@given(steps, st.integers(1, 5))
def test_coarsening_only_adds_numbers_and_keeps_to_its_limit(
    moves: list[tuple[bool, tuple[int, int]]], most: int
) -> None:
    spans, plain = build(moves)
    spans.coarsen(most)
    assert spans.ranges <= most
    assert numbers(spans) >= plain


def test_an_empty_range_holds_nothing_and_takes_nothing_out() -> None:
    spans = Spans([(1, 5)])
    assert len(spans.within(4, 2)) == len(spans.gaps(4, 2)) == spans.remove(4, 2) == 0
    assert str(spans) == "1-5"


def test_a_copy_does_not_follow_the_original() -> None:
    spans = Spans([(1, 5)])
    twin = spans.copy()
    spans.remove(2, 3)
    assert str(twin) == "1-5"
    assert str(spans) == "1,4-5"


@pytest.mark.parametrize("text", ["a", "1-b", "5-2", "1-2-3"])
def test_text_of_another_form_is_refused(text: str) -> None:
    with pytest.raises(ValueError, match=r"invalid literal|no range"):
        Spans.from_text(text)
