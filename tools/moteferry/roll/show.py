"""How a roll looks on a terminal, in a log, and to a script.

Owns the words and the layout. Must not decide anything.
"""

import sys
import time
from collections.abc import Sequence
from typing import Any

import click

from moteferry.duration import told
from moteferry.roll.conductor import Outcome, Progress
from moteferry.roll.gate import Rule, Step
from moteferry.roll.plan import Entry, Plan, Standing
from moteferry.roll.register import Tenure
from moteferry.roll.undo import NoWayBack, WayBack
from motekeep.instant import rfc3339

# A plan of a thousand lines helps nobody: beyond this those that go as planned are only counted.
LINES = 40
BAR = 24
LIVE_S = 0.2
QUIET_S = 10.0  # between two lines about one wave where nobody watches a terminal

STOPPED = {
    Step.REFUSED: "refused it",
    Step.WITHDRAWN: "took it out of force again",
    Step.WORSE: "is worse than before",
    Step.SILENT: "does not answer",
}


def show_plan(plan: Plan, waves: Sequence[int], rule: Rule, where: str) -> None:
    gateways = len({entry.target[:2] for entry in plan.entries})
    count = len(plan.entries)
    documents = f"{count} document{'s' * (count != 1)}"
    click.echo(f"{documents} for {gateways} gateway{'s' * (gateways != 1)} at {where}")
    brief = count > LINES
    for entry in plan.entries:
        if brief and entry.standing in (Standing.OFFER, Standing.HAS_IT) and not entry.why.startswith("refused"):
            continue
        now = f"issue {entry.in_force} now" if entry.in_force is not None else "none now"
        why = f": {entry.why}" if entry.why else ""
        click.echo(f"  {entry.target!s:<32} issue {entry.offer.issue} ({now})  {entry.standing}{why}")
    click.echo(", ".join(f"{standing} {number}" for standing, number in plan.counts().items() if number))
    if waves:
        sizes = ", ".join(str(size) for size in waves)
        click.echo(f"in waves of {sizes}; each holds for {told(rule.hold_s)} before the next")


def show_ways(ways: Sequence[WayBack], stuck: Sequence[NoWayBack]) -> None:
    for way in ways[:LINES]:
        back = f"issue {way.earlier.issue} again, as issue {way.offer.issue}"
        click.echo(f"  {way.offer.target!s:<32} from issue {way.undone.issue} to {back}")
    if len(ways) > LINES:
        click.echo(f"  and {len(ways) - LINES} more")
    for no_way in stuck:
        click.echo(f"  {no_way.target!s:<32} stays: {no_way.why}")
    if not ways and not stuck:
        click.echo("nothing to undo: no device accepted a document of it")


class Screen:
    """Progress on stderr: one live line on a terminal, else a line when something changes."""

    def __init__(self, *, quiet: bool) -> None:
        self._quiet = quiet
        self._live = sys.stderr.isatty()
        self._said: tuple[object, ...] = ()
        self._at = 0.0
        self._open = False

    def show(self, progress: Progress) -> None:
        if self._quiet:
            return
        now = time.monotonic()
        whole = progress.accepted == progress.size
        if self._live:
            if now - self._at >= LIVE_S or progress.passed == progress.size:
                self._at = now
                click.echo(f"\r\x1b[K{_line(progress)}", err=True, nl=False)
                self._open = True
            return
        said = (progress.wave, whole, progress.passed == progress.size, progress.link)
        moved = (*said, progress.accepted, progress.passed)
        if said != self._said[:4] or (moved != self._said and now - self._at >= QUIET_S):
            self._said, self._at = moved, now
            click.echo(_line(progress), err=True)

    def close(self) -> None:
        if self._open:
            click.echo(err=True)
            self._open = False


def _line(progress: Progress) -> str:
    done = progress.soaked if progress.soaked > 0 else progress.accepted / progress.size
    bar = "#" * round(BAR * done)
    text = f"wave {progress.wave} of {progress.waves} [{bar:<{BAR}}] {progress.accepted} of {progress.size} in force"
    if progress.soaked > 0:
        text += f", held {progress.soaked:.0%}"
    return f"{text}; no link: {progress.link}" if progress.link else text


def show_outcome(outcome: Outcome, left: Sequence[Entry], *, undo: bool) -> None:
    for failure in outcome.failures[:LINES]:
        click.echo(f"  {failure.target} {STOPPED[failure.step]}: {failure.why}")
    passed, holding, open_ = (len(some) for some in (outcome.passed, outcome.holding, outcome.open))
    everybody = passed + holding + open_ + len(outcome.failures)
    if outcome.failures:
        click.echo(f"stopped: of {everybody}, {passed} have it and held it, {holding} have it since a moment ago,")
        click.echo(f"  {len(outcome.failures)} stopped the roll, {open_} do not have it and are not offered it now")
        again = "the same command again goes on, with --go-on without those above"
        click.echo(again if undo else f"{again}; --undo takes everybody back")
        return
    click.echo(f"done: {passed} of {everybody} have it" + (f"; {len(left)} were left out" if left else ""))
    for entry in left[:LINES]:
        click.echo(f"  {entry.target}: {entry.standing}: {entry.why}")
    if left:
        click.echo("the same command again takes those that are well by then")


def plan_json(plan: Plan, waves: Sequence[int]) -> dict[str, Any]:
    return {
        "targets": [
            {
                **entry.target._asdict(),
                "issue": entry.offer.issue,
                "digest": entry.offer.digest,
                "standing": entry.standing.value,
                "why": entry.why,
                "in_force": entry.in_force,
            }
            for entry in plan.entries
        ],
        "counts": {standing.value: number for standing, number in plan.counts().items()},
        "waves": list(waves),
    }


def outcome_json(outcome: Outcome) -> dict[str, Any]:  # Any: JSON
    return {
        "outcome": "done" if outcome.done else "stopped",
        "passed": [str(target) for target in outcome.passed],
        "holding": [str(target) for target in outcome.holding],
        "failures": [{**f.target._asdict(), "step": f.step.value, "why": f.why} for f in outcome.failures],
        "open": [str(target) for target in outcome.open],
    }


def tenure_json(tenure: Tenure) -> dict[str, Any]:
    return {
        **tenure.target._asdict(),
        "since": rfc3339(tenure.since),
        "until": rfc3339(tenure.until) if tenure.until is not None else None,
        "issue": tenure.issue,
        "digest": tenure.digest,
        "signer": tenure.signer,
    }
