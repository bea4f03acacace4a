"""Amendments change flags from outside, survive a restart, and never make a reading look better."""

import pytest

from motekeep.measure.amendment import MOST, Amendment, Amendments


def listed(*items: Amendment) -> Amendments:
    amendments = Amendments()
    for item in items:
        amendments.add(item)
    return amendments


def test_only_readings_that_start_within_are_amended() -> None:
    amendments = listed(Amendment(100.0, 200.0, 4, ("fan-stopped",)))
    assert amendments.amended(100.0, 1, ()) == (4, ("fan-stopped",))
    assert amendments.amended(199.9, 2, ("uncalibrated",)) == (4, ("uncalibrated", "fan-stopped"))
    assert amendments.amended(200.0, 1, ()) == (1, ())
    assert amendments.amended(99.9, 1, ()) == (1, ())


def test_an_amendment_never_makes_a_flag_better_and_gives_each_reason_once() -> None:
    amendments = listed(Amendment(0.0, 10.0, 3, ("a",)), Amendment(0.0, 10.0, 3, ("a", "b")))
    assert amendments.amended(5.0, 9, ("no-frames",)) == (9, ("no-frames", "a", "b"))


def test_they_come_back_from_their_text_and_are_bounded() -> None:
    many = listed(*[Amendment(float(i), i + 1.0, 4, ("x",)) for i in range(2 * MOST)])
    again = Amendments.restored(many.state())
    assert list(again) == list(many)
    assert len(list(again)) == MOST


@pytest.mark.parametrize("text", ["", "{", "7", "[1]", '[["a", 2, 4]]', "[[1, 2]]", "[" * 5000])
def test_any_other_text_is_one_named_fault(text: str) -> None:
    with pytest.raises(ValueError):  # noqa: PT011 (json's and ours alike)
        Amendments.restored(text)
