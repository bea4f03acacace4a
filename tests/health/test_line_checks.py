"""frames-missing and frames-corrupt: what opens them, what they say, what leaves them shut."""

from collections.abc import Iterator

import numpy as np
import pytest

from health.small_air import instant
from motekeep.health.check import LineState
from motekeep.health.finding import Suspicion
from motekeep.health.line import FramesCorrupt, FramesMissing
from motekeep.instant import Instant
from motekeep.wire.bm import BM_28
from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Damage, Frame, Observation

START = 1000.0
BM = DIALECTS["bm"]
A_FRAME = Frame(BM_28, (5.0, 8.0, 9.0), (1200.0, 340.0, 62.0, 8.0, 2.0, 1.0), b"x")
HIT = Damage("checksum", 32)
CADENCES = [1.0, 6.0]


class Missing:
    """A frames-missing check with a clock; `opened` is when it first held."""

    def __init__(self, period_s: float = 1.0) -> None:
        self.period_s = period_s
        self.now = START
        self.check = FramesMissing(BM, period_s, instant(START))
        self.opened: float | None = None
        self.last: Suspicion | None = None
        self._judged = START

    def at(self) -> Instant:
        return instant(self.now)

    def frames(self, seconds: float, share: float = 1.0) -> None:
        for i in range(round(seconds / self.period_s)):
            self.wait(self.period_s)
            if (i * share) % 1.0 < share:
                self.check.observe(Observation(A_FRAME, self.at()))

    def bytes(self, seconds: float, burst: bytes) -> None:
        for _ in range(round(seconds)):
            self.wait(1.0)
            self.check.heard(burst, self.at())
            self.check.damaged(Damage("rubbish", len(burst)), self.at())

    def wait(self, seconds: float) -> None:
        end = self.now + seconds
        while self._judged + 5.0 <= end:
            self._judged += 5.0
            self.last = self.check.judge(instant(self._judged))
            if self.last is not None and self.opened is None:
                self.opened = self._judged
        self.now = end

    def evidence(self) -> str:
        assert self.last is not None
        return self.last.evidence


@pytest.mark.parametrize("period_s", CADENCES)
def test_silence_is_found_within_three_minutes_and_dated_to_the_last_frame(period_s: float) -> None:
    line = Missing(period_s)
    line.frames(600.0)
    stopped = line.now
    line.wait(180.0)
    assert line.opened is not None
    assert line.opened - stopped <= 60.0
    assert line.last is not None
    assert line.last.since == stopped
    assert "no byte for" in line.evidence()


@pytest.mark.parametrize("period_s", CADENCES)
def test_a_sensor_never_heard_is_missing_from_the_start(period_s: float) -> None:
    line = Missing(period_s)
    line.wait(180.0)
    assert line.last is not None
    assert line.last.since == START


def test_a_lost_port_is_found_with_its_reason_and_dated_to_the_loss() -> None:
    line = Missing()
    line.frames(60.0)
    lost = line.now
    for _ in range(10):  # told again with every attempt to reopen
        line.check.line(LineState.GONE, line.at(), "no such device")
        line.wait(6.0)
    assert line.last is not None
    assert line.last.since == lost
    assert line.last.confidence == 1.0
    assert "no such device" in line.evidence()
    line.check.line(LineState.OPENED, line.at(), "")
    line.frames(130.0)
    assert line.last is None


@pytest.mark.parametrize("period_s", CADENCES)
def test_a_short_absence_opens_nothing(period_s: float) -> None:
    line = Missing(period_s)
    line.frames(600.0)
    line.check.line(LineState.GONE, line.at(), "unplugged")
    line.wait(20.0)
    line.check.line(LineState.OPENED, line.at(), "")
    line.frames(600.0)
    assert line.opened is None


def test_bytes_at_a_wrong_baud_rate_are_named_so() -> None:
    """A frame sent at 9600 baud and read at 115200 is mostly zero bytes: a low level lasts for many bit times."""
    line = Missing()
    line.frames(60.0)
    line.bytes(120.0, bytes(30) + b"\x80\x00")
    assert "bytes but no whole frame" in line.evidence()
    assert "baud" in line.evidence()


def test_frames_of_another_dialect_are_named_so() -> None:
    line = Missing()
    burst = DIALECTS["aa"].encode(Frame(DIALECTS["aa"].layouts[0], (5.2, 8.1), (), b"", revision=7))
    line.bytes(120.0, burst)
    assert "sounds like aa" in line.evidence()


def test_the_explanation_of_garbage_is_not_worked_out_at_every_judgement(monkeypatch: pytest.MonkeyPatch) -> None:
    calls = []

    def counted(data: bytes, dialect: str, baud: int) -> object:
        calls.append(len(data))
        return type("Found", (), {"reason": "garbage"})()

    monkeypatch.setattr("motekeep.health.line.explain", counted)
    line = Missing()
    line.bytes(3600.0, bytes(200))
    assert 10 <= len(calls) <= 13
    assert max(calls) <= FramesMissing.TAIL


@pytest.mark.parametrize(("period_s", "share", "within_s"), [(1.0, 0.6, 180.0), (6.0, 0.35, 180.0), (6.0, 0.6, 600.0)])
def test_lost_frames_are_found_the_sooner_the_more_are_lost(period_s: float, share: float, within_s: float) -> None:
    line = Missing(period_s)
    line.frames(900.0)
    began = line.now
    line.frames(within_s, share)
    assert line.opened is not None
    assert line.opened - began <= within_s
    assert "frames due" in line.evidence()


@pytest.mark.parametrize("period_s", CADENCES)
def test_a_slower_cadence_than_configured_is_told_with_its_pace(period_s: float) -> None:
    line = Missing(period_s)
    line.period_s = 2.0 * period_s
    line.frames(60.0 * period_s + 180.0)
    assert f"one every {2 * period_s:.2g} s on average" in line.evidence()


def test_one_frame_in_ten_lost_at_random_opens_in_one_of_a_hundred_stretches_at_most() -> None:
    """Of two and a half hours each. Seeds are fixed: chance does open it now and then, in one of these hundred."""

    def opens(seed: int) -> bool:
        line = Missing(6.0)
        for kept in np.random.default_rng(seed).random(1500) > 0.10:
            line.wait(6.0)
            if kept:
                line.check.observe(Observation(A_FRAME, line.at()))
        return line.opened is not None

    assert sum(map(opens, range(100))) <= 1


def test_a_sleeping_sensor_misses_nothing_and_has_time_to_wake() -> None:
    line = Missing()
    for _ in range(5):
        line.frames(90.0)
        line.check.line(LineState.ASLEEP, line.at(), "")
        line.wait(500.0)
        line.check.line(LineState.AWAKE, line.at(), "")
        line.wait(10.0)
    assert line.opened is None


def test_a_sensor_that_does_not_wake_is_missing_from_the_wake_on() -> None:
    line = Missing()
    line.frames(90.0)
    line.check.line(LineState.ASLEEP, line.at(), "")
    line.wait(500.0)
    woken = line.now
    line.check.line(LineState.AWAKE, line.at(), "")
    line.wait(60.0)
    assert line.last is not None
    assert line.last.since == woken


def test_damaged_frames_are_not_missing_ones() -> None:
    line = Missing()
    for i in range(600):
        line.wait(1.0)
        if i % 2:
            line.check.damaged(HIT, line.at())
        else:
            line.check.observe(Observation(A_FRAME, line.at()))
    assert line.opened is None


# -- frames-corrupt -----------------------------------------------------------------------------------------------


def corrupt(
    bad: Iterator[bool], period_s: float, seconds: float, damage: Damage = HIT, *, until_open: bool = False
) -> tuple[float | None, Suspicion | None, FramesCorrupt]:
    """When the check first held (from START), what it said last, and the check."""
    check = FramesCorrupt(period_s, instant(START))
    opened, said, now, due = None, None, START, START + 5.0
    while now < START + seconds:
        now += period_s
        if next(bad):
            check.damaged(damage, instant(now))
        else:
            check.observe(Observation(A_FRAME, instant(now)))
        if now >= due:
            due = now + 5.0
            said = check.judge(instant(now))
            if said is not None and opened is None:
                opened = now - START
                if until_open:
                    break
    return opened, said, check


def at_random(rng: np.random.Generator, rate: float) -> Iterator[bool]:
    while True:
        yield from (rng.random(1000) < rate).tolist()


@pytest.mark.parametrize("period_s", CADENCES)
def test_five_percent_bad_is_found_within_a_quarter_of_an_hour(period_s: float) -> None:
    trials = 60
    streams = [at_random(np.random.default_rng([int(period_s), i]), 0.05) for i in range(trials)]
    found = [corrupt(bad, period_s, 900.0, until_open=True)[0] for bad in streams]
    assert sum(opened is not None for opened in found) >= trials - 1


@pytest.mark.parametrize(("period_s", "days"), [(1.0, 1.0), (6.0, 6.0)])
def test_a_sound_line_with_one_bad_frame_in_ten_thousand_opens_nothing(period_s: float, days: float) -> None:
    opened, _, _ = corrupt(at_random(np.random.default_rng(7), 1e-4), period_s, days * 86_400.0)
    assert opened is None


def test_one_burst_is_an_event_and_no_finding() -> None:
    bad = iter([*[False] * 600, *[True] * 25, *[False] * 3000])
    opened, _, _ = corrupt(bad, 1.0, 3600.0)
    assert opened is None


def test_bursts_that_keep_coming_are_found_and_named() -> None:
    bad = (i % 120 < 8 for i in range(10_000))
    opened, said, _ = corrupt(bad, 1.0, 900.0)
    assert opened is not None
    assert said is not None
    assert "in bursts" in said.evidence


@pytest.mark.parametrize(
    ("damage", "cause"),
    [(HIT, "electrical noise"), (Damage("length", 20), "bytes get lost"), (Damage("tail", 10), "bytes get lost")],
)
def test_the_evidence_counts_and_names_the_likely_cause(damage: Damage, cause: str) -> None:
    bad = at_random(np.random.default_rng(3), 0.05)
    _, said, _ = corrupt(bad, 1.0, 900.0, damage)
    assert said is not None
    assert cause in said.evidence
    assert f"{damage.reason} " in said.evidence


def test_it_holds_until_the_rate_is_low_for_the_whole_window_and_then_lets_go() -> None:
    rng = np.random.default_rng(5)
    bad = iter([*(rng.random(900) < 0.05).tolist(), *[False] * 2000])
    _, said, check = corrupt(bad, 1.0, 900.0 + 600.0)
    assert said is not None
    for t in range(400):
        check.observe(Observation(A_FRAME, instant(START + 1500.0 + t)))
    assert check.judge(instant(START + 1900.0)) is None


def test_the_cut_frame_after_opening_the_line_is_not_held_against_it() -> None:
    check = FramesCorrupt(1.0, instant(START))
    for n in range(20):
        now = START + 40.0 * n
        check.line(LineState.OPENED, instant(now), "")
        check.damaged(Damage("rubbish", 11), instant(now + 0.5))
        assert check.judge(instant(now + 5.0)) is None


def test_the_pieces_of_one_frame_are_one_hit() -> None:
    check = FramesCorrupt(1.0, instant(START))
    for n in range(4):
        for piece in range(10):
            check.damaged(Damage("rubbish", 3), instant(START + 100.0 * (n + 1) + 0.03 * piece))
    for i in range(600):
        check.observe(Observation(A_FRAME, instant(START + 400.0 + i)))
    assert check.judge(instant(START + 800.0)) is None
