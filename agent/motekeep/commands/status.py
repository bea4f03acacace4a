"""`status`: the last health document of the journal, for people.

Owns the layout. Asks the journal, not the daemon: it also works when the daemon is dead, and then says so.
"""

import json
import time

import click

from motekeep.config import Config
from motekeep.edges.journal_view import JournalView
from motekeep.instant import from_rfc3339, rfc3339
from motekeep.loops.recorder import HEALTH
from motekeep.message.documents import HealthDocument, OpenFinding

GRACE_S = 30.0


def status(config: Config, as_json: bool) -> bool:
    """Print the health document; whether it is normal and the daemon goes on storing readings."""
    with JournalView(config.store.path) as view:
        text = view.kept(HEALTH)
        ends = [sensor.last + config.interval for sensor in view.sensors() if sensor.last is not None]
    if text is None:
        click.echo("no health document yet; has the daemon run for a minute?")
        return False
    health = HealthDocument.model_validate(json.loads(text))
    # the document is kept when something changes and every ten minutes; readings come every interval
    overdue = not ends or time.time() - max(ends) > 2 * config.interval + GRACE_S
    if as_json:
        click.echo(health.json_text())
    else:
        _print(health, max(ends, default=None), overdue)
    return health.status == "normal" and not overdue


def _print(health: HealthDocument, last: float | None, overdue: bool) -> None:
    click.echo(f"{health.site}/{health.gateway}: {health.status}")
    if overdue:
        ended = "none yet" if last is None else f"the last ended {rfc3339(last)}"
        click.echo(f"  OVERDUE: no reading is stored any more ({ended}); is the daemon running?")
    age_min = 0.0 if health.at is None else max(time.time() - from_rfc3339(health.at), 0.0) / 60.0
    told = f" ({age_min:.0f} min ago; kept when a finding changes and every ten minutes)" if age_min >= 2.0 else ""
    click.echo(f"  at {health.at}{told}, clock {health.clock}, version {health.version}, life {health.life}")
    if health.store is not None:
        store = health.store
        since = f" since {store.oldest_waiting}" if store.oldest_waiting else ""
        lost = "".join(f", {kind} {count}" for kind, count in store.lost.items())
        click.echo(f"  store: {store.waiting} readings wait{since}, {store.bytes / 1e6:.1f} MB{lost}")
    if health.link is not None:
        link = health.link
        state = f"connected since {link.since}" if link.since else "not connected"
        click.echo(f"  uplink: {state}, {link.reconnects} reconnects, {link.refused} refused")
    for finding in health.findings or []:
        _print_finding("gateway", finding)
    for name, sensor in (health.sensors or {}).items():
        click.echo(f"  sensor {name}: {sensor.status}")
        for finding in sensor.findings:
            _print_finding(name, finding)


def _print_finding(where: str, finding: OpenFinding) -> None:
    click.echo(f"    {where}: {finding.code} since {finding.since} ({finding.confidence:.0%} sure)")
    click.echo(f"      {finding.evidence}")
    click.echo(f"      -> {finding.remedy}")
