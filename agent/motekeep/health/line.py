"""Frames that do not come, and frames that come damaged.

Owns what is known of the traffic on one sensor's line. Must not know what the frames say.
"""

from bisect import bisect_left
from collections import Counter, deque
from dataclasses import dataclass
from typing import ClassVar

from motekeep.health.chance import binomial_at_least, rate_lower_bound
from motekeep.health.check import Check, LineState
from motekeep.health.finding import Suspicion
from motekeep.instant import Instant
from motekeep.wire.frame import Damage, Dialect, Observation
from motekeep.wire.garbage import explain


class FramesMissing(Check):
    """frames-missing: the port is gone, nothing comes, bytes come that make no frame, or too few frames come.

    Silence counts after 30 s or 8 periods, whichever is longer: a sensor that re-enumerates, restarts or skips a few
    frames is back by then, and at 1 s and 6 s cadence it leaves more than two minutes of the three in which a failure
    must be known. Too few means under 75 % of the frames due (good and damaged together: damage has its own finding),
    the completeness below which a mean no longer stands for its span, and so few that a line which loses every tenth
    frame would do it with a chance below 1e-5. Looked at over 2 minutes or 20 periods, and over five times as long, so
    that a slow cadence has frames enough for light losses too.
    """

    code: ClassVar[str] = "frames-missing"
    clear_s: ClassVar[float] = 60.0

    SILENT_S = 30.0
    SILENT_PERIODS = 8
    WINDOW_S = 120.0
    WINDOW_PERIODS = 20
    LONG = 5
    SHARE = 0.75
    USUAL_LOSS = 0.1
    CHANCE = 1e-5
    MARKS = 100  # of the long window
    TAIL = 4096  # bytes kept of a line without frames: some 4 s of 9600 baud, all that the explanation looks at
    EXPLAIN_S = 300.0  # what they look like is looked at again after this; it costs some milliseconds

    def __init__(self, dialect: Dialect, period_s: float, at: Instant) -> None:
        self._dialect = dialect
        self._period = period_s
        self._patience = max(self.SILENT_S, self.SILENT_PERIODS * period_s)
        self._window = max(self.WINDOW_S, self.WINDOW_PERIODS * period_s)
        self._listening: float | None = at.boot_s  # since when frames are due; None while asleep
        self._gone: tuple[float, str] | None = None
        self._last = at.boot_s  # last good frame, or when they became due
        self._last_hit = at.boot_s
        self._arrived = 0  # good frames and hits since the watch began
        self._bytes = 0  # since frames stopped
        self._tail = b""
        self._likely = ("", 0.0)  # what the bytes look like, and until when that is good enough
        # (boot seconds, frames arrived by then), thinned to what the window needs
        self._marks: deque[tuple[float, int]] = deque(maxlen=2 * self.MARKS)
        self._spacing = self.LONG * self._window / self.MARKS
        self._thin: Suspicion | None = None  # what the cadence said at the last mark

    def observe(self, observation: Observation) -> None:
        self._arrived += 1
        self._last = observation.at.boot_s
        if self._bytes:
            self._quiet()

    def _quiet(self) -> None:
        self._bytes, self._tail, self._likely = 0, b"", ("", 0.0)

    def heard(self, data: bytes, at: Instant) -> None:
        if at.boot_s - self._last > self._patience / 2.0:
            self._bytes += len(data)
            self._tail = (self._tail + data)[-self.TAIL :]

    def damaged(self, damage: Damage, at: Instant) -> None:
        if at.boot_s - self._last_hit >= self._period / 2.0:  # one hit a slot, however many pieces it broke into
            self._last_hit = at.boot_s
            self._arrived += 1

    def line(self, state: LineState, at: Instant, why: str) -> None:
        if state is LineState.GONE:
            since = at.boot_s if self._gone is None else self._gone[0]
            self._gone = (since, why or (self._gone[1] if self._gone else ""))
            return
        self._gone = None
        if state is LineState.ASLEEP:
            self._listening = None
            return
        if state is LineState.AWAKE or self._listening is None:
            self._last = at.boot_s
            self._begin(at.boot_s)

    def _begin(self, boot_s: float) -> None:
        self._listening = boot_s
        self._marks.clear()
        self._thin = None
        self._quiet()

    def judge(self, at: Instant) -> Suspicion | None:
        now = at.boot_s
        if self._gone is not None:
            return self._judge_gone(now, *self._gone)
        if self._listening is None:
            return None
        if not self._marks or now - self._marks[-1][0] >= self._spacing:
            self._marks.append((now, self._arrived))
            self._thin = self._judge_cadence(now)
        if now - self._last >= self._patience:
            return self._judge_silent(now)
        return self._thin

    def _judge_gone(self, now: float, since: float, why: str) -> Suspicion | None:
        if now - since < self.SILENT_S:
            return None
        return Suspicion(since, 1.0, f"port gone for {now - since:.0f} s: {why or 'no reason given'}")

    def _judge_silent(self, now: float) -> Suspicion:
        gap = now - self._last
        due = f"a frame is due every {self._period:g} s"
        if not self._bytes:
            return Suspicion(self._last, 0.99, f"no byte for {gap:.0f} s; {due}")
        if now >= self._likely[1]:
            found = explain(self._tail, self._dialect.name, self._dialect.baud)
            self._likely = (found.reason, now + self.EXPLAIN_S)
        told = f"bytes but no whole frame for {gap:.0f} s: {self._likely[0]}"
        return Suspicion(self._last, 0.97, f"{told}; {due}")

    def _judge_cadence(self, now: float) -> Suspicion | None:
        marks = self._marks
        while now - marks[0][0] > self.LONG * self._window:
            marks.popleft()
        longest = now - marks[0][0]
        if longest < 0.9 * self._window:
            return None
        short = marks[bisect_left(marks, (now - self._window, 0))]
        return self._too_few(now, *marks[0]) or self._too_few(now, *short)

    def _too_few(self, now: float, since: float, arrived: int) -> Suspicion | None:
        span = now - since
        came, due = self._arrived - arrived, span / self._period
        if came >= self.SHARE * due or binomial_at_least(int(due) - came, int(due), self.USUAL_LOSS) > self.CHANCE:
            return None
        pace = f", one every {span / came:.2g} s on average" if came else ""
        evidence = f"{came} of {due:.0f} frames due in {span:.0f} s came{pace}; one is due every {self._period:g} s"
        return Suspicion(since, 0.9, evidence)


@dataclass(frozen=True, slots=True)
class _Hit:
    """One damaged frame; `close` when it came right after another one."""

    boot_s: float
    reason: str
    close: bool


class FramesCorrupt(Check):
    """frames-corrupt: the rate of damaged frames is above what a sound line has.

    Opens when the one-sided 95 % lower confidence bound of the rate over the last 15 minutes (Clopper and Pearson
    1934) is above 0.5 %, and the damage lies in three or more half-minutes of it: one plug pulled or one motor
    started is no maintenance case. Holds until the rate is under 0.25 % for 15 minutes.

    Why 0.5 %: a sound 9600-baud line of a few metres damages fewer than one frame in ten thousand (common practice, no
    source), so anything between is a cable to look at. At a 6 s cadence 15 minutes have 150 frames: the bound then
    passes at three bad ones, which a true rate of 5 % yields with 98 %; at 1 s it passes at nine of 900. Looking
    again every few seconds makes the bound laxer than its name: the simulated false alarms stand in the tests.
    """

    code: ClassVar[str] = "frames-corrupt"
    clear_s: ClassVar[float] = 900.0
    again_s: ClassVar[float] = 1200.0

    LIMIT = 0.005
    ALPHA = 0.05
    WINDOW_S = 900.0
    EPISODE_S = 30.0
    EPISODES = 3
    EVIDENCE_S = 300.0  # how often the words are made anew while it holds: the bound costs half a millisecond

    def __init__(self, period_s: float, at: Instant) -> None:
        self._period = period_s
        self._good = 0
        self._marks: deque[tuple[float, int]] = deque([(at.boot_s, 0)], maxlen=32)  # good frames, every EPISODE_S
        # 15 minutes of hits; at the fastest cadence more than these are over a third of all frames, bad enough
        self._hits: deque[_Hit] = deque(maxlen=1500)
        self._deaf_until = at.boot_s + max(2.0, period_s)  # the first frame of an open line is often cut in half
        self._since: float | None = None
        self._told = ("", 0.0)  # the evidence, and until when it is good enough

    def observe(self, observation: Observation) -> None:
        self._good += 1

    def damaged(self, damage: Damage, at: Instant) -> None:
        if at.boot_s <= self._deaf_until:
            return
        apart = at.boot_s - self._hits[-1].boot_s if self._hits else self._period * 10.0
        if apart >= self._period / 2.0:  # else pieces of one frame
            self._hits.append(_Hit(at.boot_s, damage.reason, apart < 2.5 * self._period))

    def line(self, state: LineState, at: Instant, why: str) -> None:
        self._deaf_until = at.boot_s + max(2.0, self._period)

    def judge(self, at: Instant) -> Suspicion | None:
        now = at.boot_s
        if now - self._marks[-1][0] >= self.EPISODE_S:
            self._marks.append((now, self._good))
        if not self._hits:
            return None
        oldest = now - self.WINDOW_S
        while self._hits and self._hits[0].boot_s < oldest:
            self._hits.popleft()
        while len(self._marks) > 1 and self._marks[1][0] <= oldest:
            self._marks.popleft()
        bad = len(self._hits)
        total = bad + self._good - self._marks[0][1]
        if self._since is None:
            episodes = len({hit.boot_s // self.EPISODE_S for hit in self._hits})
            if episodes < self.EPISODES or binomial_at_least(bad, total, self.LIMIT) >= self.ALPHA:
                return None
            self._since, self._told = self._hits[0].boot_s, ("", now)
        elif bad <= self.LIMIT / 2.0 * total:
            self._since = None
            return None
        if now >= self._told[1]:
            self._told = (self._evidence(bad, total), now + self.EVIDENCE_S)
        return Suspicion(self._since, 0.95, self._told[0])

    def _evidence(self, bad: int, total: int) -> str:
        bound = rate_lower_bound(bad, total, self.ALPHA)
        reasons = Counter([hit.reason for hit in self._hits])
        counted = ", ".join([f"{reason} {count}" for reason, count in reasons.most_common(3)])
        rate = f"{100.0 * bad / total:.1f} %, at least {100.0 * bound:.1f} %"
        return f"{bad} of {total} frames damaged ({rate}; {counted}); {self._cause(reasons)}"

    def _cause(self, reasons: Counter[str]) -> str:
        """Bits that flip leave whole frames with a wrong sum; bytes that are lost leave short ones; a loose plug or
        a motor hits several in a row where chance would hit one."""
        hits = len(self._hits)
        rows = sum([hit.close for hit in self._hits])
        by_chance = hits * min(2.0 * hits * self._period / self.WINDOW_S, 1.0)
        if hits >= 6 and rows > max(0.5 * hits, 2.0 * by_chance):
            return "in bursts: likely a loose plug, or a motor or radio that switches nearby"
        if (reasons["length"] + reasons["tail"]) * 2 > hits:
            return "frames cut short: bytes get lost, likely in the adapter or a busy gateway"
        return "single frames here and there: likely electrical noise or a poor ground"
