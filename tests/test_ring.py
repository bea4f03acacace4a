"""The last two minutes of a line: what came in them, as it came, and never more than a bound."""

from hypothesis import given, settings
from hypothesis import strategies as st

from health.small_air import instant
from motekeep.capture import FrameRecord, LineRecord, parse_line
from motekeep.health.check import LineState
from motekeep.ring import MOST_BURSTS, MOST_BYTES, SECONDS, Ring


def records(ring: Ring, at_s: float) -> list[FrameRecord | LineRecord]:
    text = ring.text("north", "why", instant(at_s)) or ""
    parsed = [parse_line(line) for line in text.splitlines()]
    return [r for r in parsed if isinstance(r, FrameRecord | LineRecord)]


def test_it_holds_what_came_in_the_last_two_minutes_with_its_times() -> None:
    ring = Ring()
    for second in range(300):
        ring.add(bytes([second % 256]), instant(1000.0 + second))
    found = records(ring, 1299.0)
    assert [r.t - 1.8e9 for r in found] == [1000.0 + s for s in range(179, 300)]
    assert all(isinstance(r, FrameRecord) and r.sensor == "north" for r in found)


def test_what_is_too_old_by_the_time_of_asking_is_gone_and_nothing_is_none() -> None:
    ring = Ring()
    ring.add(b"x", instant(0.0))
    assert len(records(ring, SECONDS)) == 1
    assert ring.text("north", "why", instant(SECONDS + 0.1)) is None


def test_sleep_and_wake_stand_in_it_and_the_opening_of_a_port_does_not() -> None:
    ring = Ring()
    for at, state in ((1.0, LineState.OPENED), (2.0, LineState.ASLEEP), (3.0, LineState.AWAKE), (4.0, LineState.GONE)):
        ring.line(state, instant(at))
    assert [r.asleep for r in records(ring, 5.0) if isinstance(r, LineRecord)] == [True, False]


def test_a_step_of_the_clock_does_not_make_time_run_backwards() -> None:
    ring = Ring()
    ring.add(b"a", instant(10.0, offset=5000.0))
    ring.add(b"b", instant(11.0, offset=1000.0))
    text = ring.text("north", "why", instant(12.0, offset=1000.0)) or ""
    times = [float(line.split()[0]) for line in text.splitlines()[1:]]
    assert times == [1010.0, 1011.0]


def test_what_it_is_about_is_one_comment_whatever_it_holds() -> None:
    ring = Ring()
    ring.add(b"a", instant(10.0))
    text = ring.text("north", "a line\nwith a break and µ", instant(10.0)) or ""
    assert text.splitlines()[0] == "# a line with a break and ?"
    assert len(text.splitlines()) == 2


@given(st.lists(st.tuples(st.floats(0.0, 5.0), st.binary(max_size=200) | st.just(b"x" * 20_000)), max_size=200))
@settings(max_examples=40, deadline=None)
def test_it_never_holds_more_than_its_bound_and_always_the_newest(bursts: list[tuple[float, bytes]]) -> None:
    ring, now = Ring(), 0.0
    for later_s, data in bursts:
        now += later_s
        ring.add(data, instant(now))
    held = [r.data for r in records(ring, now) if isinstance(r, FrameRecord)]
    assert sum(map(len, held)) <= MOST_BYTES
    assert len(held) <= MOST_BURSTS
    said = [data for _, data in bursts if data]
    assert held == said[len(said) - len(held) :]
    if bursts and bursts[-1][1]:
        assert held
