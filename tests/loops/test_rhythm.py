"""When a reader sleeps, wakes and polls: by duty, and for an active check."""

from collections.abc import Iterable

import pytest

from motekeep.health.active_check import SLEEP_S
from motekeep.loops.reader import Rhythm
from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Commands, Dialect

START = 1000.0
BM = DIALECTS["bm"]


def turns(rhythm: Rhythm, seconds: Iterable[float], talks: bool = True) -> list[tuple[float, str]]:
    """What it wanted, second by second; a sensor that `talks` is heard whenever it is awake."""
    done = []
    asleep = False
    for second in seconds:
        turn = rhythm.next(START + second)
        if turn is not None:
            done.append((second, turn))
            asleep = turn == "sleep" if turn in ("sleep", "wake") else asleep
        if talks and not asleep:
            rhythm.heard(START + second)
    return done


def test_by_duty_it_is_awake_for_the_first_part_of_every_span() -> None:
    rhythm = Rhythm(BM, 1.0, (600.0, 90.0), START)
    assert turns(rhythm, range(1300)) == [(90, "sleep"), (600, "wake"), (690, "sleep"), (1200, "wake"), (1290, "sleep")]


def test_an_active_check_is_one_sleep_and_one_wake() -> None:
    rhythm = Rhythm(BM, 1.0, None, START)
    assert turns(rhythm, range(100)) == []
    rhythm.check(START + 100.0)
    assert rhythm.checking
    assert turns(rhythm, range(100, 3000)) == [(100, "sleep"), (100 + SLEEP_S, "wake")]
    assert not rhythm.checking


def test_a_sensor_that_sleeps_on_is_woken_again_until_it_talks() -> None:
    rhythm = Rhythm(BM, 1.0, None, START)
    rhythm.check(START)
    woken = turns(rhythm, range(660), talks=False)
    assert [turn for _, turn in woken] == ["sleep", "wake", *["wake again"] * 3]
    rhythm.heard(START + 660.0)
    assert turns(rhythm, range(660, 2000), talks=False) == []


def test_a_sensor_that_does_not_hear_is_left_alone_after_the_first_try() -> None:
    rhythm = Rhythm(BM, 1.0, None, START)
    rhythm.check(START)
    assert rhythm.next(START) == "sleep"
    assert not rhythm.heard(START + 2.0), "an answer to the command, or a frame under way"
    assert rhythm.heard(START + 11.0)
    assert rhythm.next(START + 11.0) == "wake"
    assert not any(rhythm.may_check(START + 11.0 + 600.0 * n) for n in range(1000))


def test_a_polled_sensor_is_not_polled_asleep() -> None:
    rhythm = Rhythm(DIALECTS["stuffed"], 1.0, None, START)
    before = turns(rhythm, range(10))
    rhythm.check(START + 10.0)
    after = turns(rhythm, range(10, 700))
    asked = [second for second, turn in (*before, *after) if turn == "poll"]
    assert not [second for second in asked if 10 <= second <= 610]
    assert len([second for second in asked if second < 10]) >= 8
    assert len([second for second in asked if second > 610]) >= 80


@pytest.mark.parametrize(
    ("dialect", "duty"),
    [(BM, (600.0, 90.0)), (Dialect("mute", 9600, False, BM.layouts, BM.decoder, BM.encode, Commands()), None)],
    ids=["with a duty it has wakes enough", "it knows no sleep"],
)
def test_no_active_check_where(dialect: Dialect, duty: tuple[float, float] | None) -> None:
    rhythm = Rhythm(dialect, 1.0, duty, START)
    assert not any(rhythm.may_check(START + second) for second in range(60))
    assert Rhythm(BM, 1.0, None, START).may_check(START)
