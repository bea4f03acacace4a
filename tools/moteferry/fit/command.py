"""`moteferry fit`: what it shows while it works and says when it is done.

Owns the words on the terminal. Must not compute.
"""

import json
import sys
from pathlib import Path
from time import time

import click

from moteferry.fit.fitting import Fit, Request
from moteferry.fit.folder import Sources, fit_into
from moteferry.fit.metrics import Equivalence
from moteferry.fit.record import RecordError, utc_of
from moteferry.fit.statement import metrics

DAY_S = 86_400.0
LONGEST_WORDS = 200  # of a text in a document


def request_of(
    issue: int, valid_from: str | None, valid_days: float, words: str, u_rh: float, fits_revision: int | None
) -> Request:
    """The request that options stand for, made now. Raises RecordError naming the option."""
    made_at = float(int(time()))
    begins = made_at if valid_from is None else utc_of(valid_from, "--valid-from")
    if begins + valid_days * DAY_S <= made_at:
        raise RecordError("--valid-days", "the document would have expired already", "give more days or a later start")
    if not words.isprintable() or not 1 <= len(words) <= LONGEST_WORDS:
        raise RecordError("--reference-words", f"1 to {LONGEST_WORDS} characters in one line are possible", "")
    return Request(
        issue, made_at, begins, begins + valid_days * DAY_S, words, data="", u_rh=u_rh, fits_revision=fits_revision
    )


def run(sources: Sources, request: Request, out: Path, *, as_json: bool) -> None:
    """Fit, with bars on standard error where somebody looks, and say what came of it."""
    err = sys.stderr
    length = sources.device.stat().st_size
    with click.progressbar(length=length, label="reading", file=err, hidden=not err.isatty()) as bar:
        # The bar is closed before the next one opens: reading ends with the first word about a fit.
        found = fit_into(sources, request, out, bar.update, lambda what: _told(what, quiet=as_json))
        bar.finish()
    if as_json:
        click.echo(json.dumps(metrics(found)))
        return
    for line in _summary(found, out):
        click.echo(line)


def _told(what: str, *, quiet: bool) -> None:
    err = sys.stderr
    if not quiet and err.isatty():
        click.echo(f"\r\033[Kfitting: {what}", file=err, nl=False)


def _summary(fit: Fit, out: Path) -> list[str]:
    raw, after = fit.raw, fit.corrected
    unit = "ug/m3"
    sensor = fit.place[2]
    return [
        (
            f"{sensor}: {fit.candidate.words} ({fit.candidate.name}), from {len(fit.pairs)} spans in "
            f"{fit.extent.days:.1f} days"
        ),
        *(f"  {n} = {v:.4g} +- {u:.2g}" for n, v, u in zip(fit.candidate.names, fit.parameters, _u(fit), strict=True)),
        (
            f"  typical error {after.pairs.rmse:.2f} {unit} in time it had not seen "
            f"(uncorrected {raw.pairs.rmse:.2f}), R2 {after.pairs.r2:.2f}, "
            f"reference within 2u in {100.0 * fit.covered:.0f} %"
        ),
        f"  US EPA base testing targets by {after.over} means: "
        + ", ".join(f"{t.name} {'met' if t.met else 'NOT met'}" for t in after.targets),
        (
            f"  expanded uncertainty at {after.equivalence.limit_value:g} {unit}: {after.equivalence.expanded:.0f} %"
            f" ({_class(after.equivalence)}); uncorrected {raw.equivalence.expanded:.0f} %"
        ),
        *(f"  warning: {w}" for w in fit.warnings),
        f"written: {out / sensor}.toml, metrics.json, page.html; look at the page, rehearse, then sign",
    ]


def _u(fit: Fit) -> list[float]:
    return [float(fit.covariance[i, i]) ** 0.5 for i in range(len(fit.parameters))]


def _class(found: Equivalence) -> str:
    return f"would fall in {found.falls_in}" if found.falls_in else "in no class"
