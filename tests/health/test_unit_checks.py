"""warming-up and sensor-error."""

import pytest

from health.small_air import instant
from motekeep.health.check import LineState
from motekeep.health.unit import SensorError, WarmingUp
from motekeep.wire.bm import BM_28
from motekeep.wire.frame import Damage, Frame, Observation

A_FRAME = Frame(BM_28, (5.0, 8.0, 9.0), (1200.0, 340.0, 62.0, 8.0, 2.0, 1.0), b"x")
RUNNING = 5000.0  # boot seconds of a gateway that has been up for long


def warm(start_s: float = RUNNING, period_s: float = 1.0) -> WarmingUp:
    return WarmingUp(30.0, period_s, instant(start_s))


def frames_for(check: WarmingUp, start_s: float, seconds: float, period_s: float = 1.0) -> None:
    for i in range(1, round(seconds / period_s) + 1):
        check.observe(Observation(A_FRAME, instant(start_s + i * period_s)))


def holds(check: WarmingUp, boot_s: float) -> bool:
    return check.judge(instant(boot_s)) is not None


def test_a_daemon_that_starts_beside_a_running_sensor_warms_nothing_up() -> None:
    check = warm()
    check.line(LineState.OPENED, instant(RUNNING), "")
    frames_for(check, RUNNING, 60.0)
    assert not holds(check, RUNNING + 1.0)
    assert check.until <= RUNNING


def test_after_the_gateway_booted_the_first_frame_starts_a_warm_up() -> None:
    check = warm(20.0)
    frames_for(check, 40.0, 40.0)
    assert check.until == 41.0 + 30.0
    assert holds(check, 70.0)
    assert not holds(check, 71.0)
    assert check.judge(instant(60.0)).evidence == "30 s from 19 s ago: the gateway booted"  # type: ignore[union-attr]


def test_a_line_that_was_gone_and_came_back_means_power() -> None:
    check = warm()
    frames_for(check, RUNNING, 10.0)
    check.line(LineState.GONE, instant(RUNNING + 10.5), "unplugged")
    check.line(LineState.OPENED, instant(RUNNING + 12.0), "")
    frames_for(check, RUNNING + 12.0, 5.0)
    suspicion = check.judge(instant(RUNNING + 15.0))
    assert suspicion is not None
    assert suspicion.since == RUNNING + 13.0
    assert "came back" in suspicion.evidence


@pytest.mark.parametrize(
    ("period_s", "gap_s", "expected"), [(1.0, 4.5, False), (1.0, 6.0, True), (6.0, 17.0, False), (6.0, 19.0, True)]
)
def test_a_silence_longer_than_a_restart_takes_means_power(period_s: float, gap_s: float, expected: bool) -> None:
    check = warm(period_s=period_s)
    frames_for(check, RUNNING, 60.0, period_s)
    frames_for(check, RUNNING + 60.0 + gap_s - period_s, 2 * period_s, period_s)
    assert holds(check, RUNNING + 60.0 + gap_s + 1.0) is expected


def test_damaged_frames_prove_that_the_sensor_kept_running() -> None:
    check = warm()
    frames_for(check, RUNNING, 60.0)
    for i in range(1, 12):
        check.damaged(Damage("checksum", 32), instant(RUNNING + 60.0 + i))
    frames_for(check, RUNNING + 71.0, 3.0)
    assert not holds(check, RUNNING + 74.0)


def test_rubbish_does_not() -> None:
    check = warm()
    frames_for(check, RUNNING, 60.0)
    for i in range(1, 12):
        check.damaged(Damage("rubbish", 5), instant(RUNNING + 60.0 + i))
    frames_for(check, RUNNING + 71.0, 3.0)
    assert holds(check, RUNNING + 74.0)


def test_a_wake_warms_up_from_the_wake_and_late_first_frames_do_not_start_it_again() -> None:
    check = warm()
    frames_for(check, RUNNING, 60.0)
    check.line(LineState.ASLEEP, instant(RUNNING + 60.0), "")
    check.line(LineState.AWAKE, instant(RUNNING + 600.0), "")
    frames_for(check, RUNNING + 608.0, 60.0)
    assert holds(check, RUNNING + 620.0)
    assert check.until == RUNNING + 630.0


# -- sensor-error -------------------------------------------------------------------------------------------------


def error(bits: list[int]) -> list[bool]:
    """Whether the check holds after each frame with these bits."""
    check = SensorError()
    said = []
    for i, bit in enumerate(bits):
        frame = Frame(A_FRAME.layout, A_FRAME.mass, A_FRAME.counts, b"", error=bit)
        check.observe(Observation(frame, instant(float(i))))
        said.append(check.judge(instant(float(i))) is not None)
    return said


def test_three_frames_with_error_bits_open_it() -> None:
    assert error([0, 4, 4, 4]) == [False, False, False, True]


def test_a_single_frame_with_bits_opens_nothing_however_often_it_recurs_far_apart() -> None:
    assert not any(error([1, *[0] * 5] * 50))


def test_every_other_frame_with_bits_opens_it_and_holds() -> None:
    said = error([1, 0] * 20)
    assert any(said[:12])
    assert all(said[12:])


def test_it_lets_go_after_frames_without_bits() -> None:
    said = error([1] * 20 + [0] * 30)
    assert said[19]
    assert not said[-1]


def test_the_evidence_shows_all_bits_seen_and_since_the_first() -> None:
    check = SensorError()
    for i, bit in enumerate([0, 0, 0x10, 0x20, 0x10]):
        check.observe(Observation(Frame(BM_28, (), (), b"", error=bit), instant(float(i))))
    suspicion = check.judge(instant(5.0))
    assert suspicion is not None
    assert suspicion.since == 2.0
    assert suspicion.evidence.endswith("0x30")


def test_bits_are_named_where_the_dialect_knows_them() -> None:
    check = SensorError(((0x10, "fan stands still"), (0x20, "laser current out of range")))
    for i in range(3):
        check.observe(Observation(Frame(BM_28, (), (), b"", error=0x80000010), instant(float(i))))
    suspicion = check.judge(instant(5.0))
    assert suspicion is not None
    assert suspicion.evidence.endswith("0x80000010 (fan stands still)")
