"""The page about a fit, for whoever has to decide whether to trust it: one HTML file that needs nothing else.

Owns its words and order. Must not compute: every figure comes out of the fit.
"""

from collections.abc import Iterable
from html import escape
from importlib.resources import files

import numpy as np

from moteferry.fit import plots
from moteferry.fit.applied import one_reading
from moteferry.fit.fitting import Fit
from moteferry.fit.judgement import Judgement
from moteferry.fit.metrics import CLASS_SOURCE, EPA_SOURCE, EU_SOURCE
from moteferry.fit.statement import CAUTION
from motekeep.instant import rfc3339
from motekeep.measure.correction import compile_document

UNIT = "µg/m³"
NAMES = {"pm1": "PM1", "pm2_5": "PM2.5", "pm4": "PM4", "pm10": "PM10"}
EXAMPLE_RAW = (5.0, 15.0, 35.0, 75.0, 150.0)
EXAMPLE_RH = (40.0, 60.0, 80.0)
EXAMPLE_T = 15.0


def page(fit: Fit) -> str:
    """The whole HTML text."""
    site, gateway, sensor = fit.place
    title = f"Calibration of {sensor}, {site}/{gateway}"
    body = "\n".join(
        [
            f"<h1>{escape(title)}</h1>",
            f"<p class='verdict'>{verdict(fit)}</p>",
            _warned(fit),
            "<h2>Before and after</h2>",
            _before_and_after(fit),
            "<h2>What it makes of a reading</h2>",
            _examples(fit),
            "<h2>How well it follows the reference</h2>",
            _picture(
                plots.series(fit),
                "Both instruments through time. Twice the stated uncertainty is shaded: about "
                "95 of 100 hours of the reference should lie inside.",
            ),
            "<div class='side'>",
            _picture(plots.scatter(fit), "Each point is one hour. On the black line sensor and reference agree."),
            _picture(
                plots.against_humidity(fit),
                "What is left over in hours that the fit had not seen. Thick bars "
                "are the middle of their points: they should lie near zero from left to right.",
            ),
            "</div>",
            "<h2>Why this form of correction</h2>",
            _forms(fit),
            _picture(
                plots.block_errors(fit),
                "Each dot is one stretch of time, judged by a fit that was made without "
                "it and without its neighbours. Left is better. The simplest form whose bar lies left of the "
                "dashed line is taken.",
            ),
            "<h2>Where it holds</h2>",
            _where(fit),
            "<h2>Against published targets</h2>",
            _targets(fit),
            "<h2>Cautions</h2>",
            f"<p>{escape(CAUTION)}</p>",
            (
                "<p>The document is not in force by being written. Rehearse it on recorded readings, sign it, then "
                "roll it out.</p>"
            ),
            "<h2>The document</h2>",
            (
                f"<details><summary>{escape(sensor)}.toml, {escape(fit.document.digest)}</summary>"
                f"<pre>{escape(fit.text.decode())}</pre></details>"
            ),
        ]
    )
    style = files("moteferry.fit").joinpath("page.css").read_text("utf-8")
    return (
        f"<!doctype html>\n<html lang='en'>\n<head>\n<meta charset='utf-8'>\n<title>{escape(title)}</title>\n"
        f"<meta name='viewport' content='width=device-width'>\n<style>\n{style}</style>\n</head>\n"
        f"<body>\n{body}\n</body>\n</html>\n"
    )


def verdict(fit: Fit) -> str:
    """One or two sentences that say what one may expect."""
    before, after = fit.raw.pairs, fit.corrected.pairs
    usual = float(np.median(fit.value))
    u = float(np.median(fit.u))
    words = (
        f"At the usual {usual:.0f} {UNIT} a corrected figure is good to about &plusmn;{2 * u:.1f} {UNIT} in 19 hours "
        f"out of 20. Its typical error in hours that it had not seen is {after.rmse:.1f} {UNIT}; uncorrected it was "
        f"{before.rmse:.1f}."
    )
    return words if after.rmse <= before.rmse else f"{words} <strong>The correction makes it no better.</strong>"


def _warned(fit: Fit) -> str:
    if not fit.warnings:
        return "<p class='fine'>Nothing about the two records speaks against using it.</p>"
    items = "".join(f"<li>{escape(w)}</li>" for w in fit.warnings)
    return f"<div class='warned'><p>Before you use it:</p><ul>{items}</ul></div>"


def _before_and_after(fit: Fit) -> str:
    def row(words: str, figure: str, unit: str = UNIT, digits: int = 2) -> list[str]:
        both = [f"{getattr(j.pairs, figure):.{digits}f}" for j in (fit.raw, fit.corrected)]
        return [words, *both, unit]

    rows = [
        row("typical error (RMSE)", "rmse"),
        row("error as a share of the mean (NRMSE)", "nrmse", "%", 0),
        row("too high by, on average (bias)", "bias"),
        row("how much of the ups and downs it follows (R²; 1 is all)", "r2", ""),
        row("reads for each unit more of the reference (slope; 1 is right)", "slope", ""),
        row("reads in clean air (intercept; 0 is right)", "intercept"),
    ]
    share = (
        f"<p>In {100.0 * fit.covered:.0f} % of the hours the reference lies within 2u of the corrected figure; 95 % is "
        "what 2u promises. All of this is of hours that the fit had not seen.</p>"
    )
    return _table(["", "as the sensor says it", "corrected", ""], rows) + share


def _examples(fit: Fit) -> str:
    top = fit.extent.ranges[fit.channel][1]
    raws = [raw for raw in EXAMPLE_RAW if raw <= top] or [round(top, 1)]
    humid, warm = fit.pairs.humid, fit.pairs.warm
    low, high = fit.extent.ranges.get("rh", (0.0, 100.0))
    rhs = [rh for rh in EXAMPLE_RH if low <= rh <= high] or [round((low + high) / 2.0)]
    rhs = rhs if humid else [0.0]
    t = float(np.clip(EXAMPLE_T, *fit.extent.ranges.get("t", (EXAMPLE_T, EXAMPLE_T))))
    correction = compile_document(fit.document)
    rows = []
    for raw in raws:
        cells = [f"{raw:g}"]
        for rh in rhs:
            interval = one_reading(fit.channel, raw, rh if humid else None, t if warm else None)
            figure = correction(interval).values[0]
            good = figure.value is not None and figure.u is not None
            cells.append(f"{figure.value:.1f} &plusmn; {2 * (figure.u or 0.0):.1f}" if good else "none")
        rows.append(cells)
    head = [f"sensor says, {UNIT}", *([f"at {rh:g} % humidity" for rh in rhs] if humid else ["corrected"])]
    return _table(head, rows) + "<p>&plusmn; is twice the standard uncertainty (2u).</p>"


def _forms(fit: Fit) -> str:
    rows = [
        [
            f"<strong>{escape(t.candidate.name)}</strong>" if t is fit.choice.chosen else escape(t.candidate.name),
            escape(t.candidate.words),
            f"{t.rmse:.2f}",
            "taken" if t is fit.choice.chosen else ("best" if t is fit.choice.best else ""),
        ]
        for t in fit.trials
    ]
    rows += [[escape(name), escape(f"could not be fitted: {why}"), "", ""] for name, why in fit.refused.items()]
    return _table(["form", "in words", f"error, {UNIT}", ""], rows)


def _where(fit: Fit) -> str:
    units = {"rh": "%", "t": "&deg;C"}
    names = {"rh": "relative humidity at the sensor", "t": "temperature at the sensor"}
    rows = [
        [
            names.get(name, f"{NAMES.get(name, name)} as the sensor says it"),
            f"{low:g} to {high:g} {units.get(name, UNIT)}",
        ]
        for name, (low, high) in fit.extent.ranges.items()
    ]
    first, last = fit.pairs.start[0], fit.pairs.start[-1] + fit.pairs.seconds
    rows += [
        ["from", rfc3339(float(first))],
        ["to", rfc3339(float(last))],
        ["compared", f"{len(fit.pairs)} spans of {fit.pairs.seconds / 3600.0:g} h in {fit.extent.days:.1f} days"],
        *[["left out", escape(f"{n} spans: {cause}")] for cause, n in fit.pairs.left_out.items()],
        ["reference", escape(fit.request.reference_words)],
        ["valid", f"{rfc3339(fit.request.valid_from)} to {rfc3339(fit.request.valid_until)}"],
    ]
    return _table(["", ""], rows) + "<p>Outside of these, the gateway marks readings as suspect.</p>"


def _targets(fit: Fit) -> str:
    def cells(of: Judgement, place: int) -> str:
        target = of.targets[place]
        return f"{target.figure:.2f} ({'met' if target.met else 'not met'})"

    rows = [
        [target.name, escape(target.asked), cells(fit.raw, i), cells(fit.corrected, i)]
        for i, target in enumerate(fit.corrected.targets)
    ]
    limit = fit.corrected.equivalence.limit_value

    def uncertainty(of: Judgement) -> str:
        note = ", random part below zero and taken as none" if of.equivalence.random_negative else ""
        return f"{of.equivalence.expanded:.0f} % ({of.equivalence.falls_in or 'in no class'}{note})"

    rows.append([f"expanded uncertainty at {limit:g} {UNIT}", "50 % indicative, 100 % objective estimation",
                 uncertainty(fit.raw), uncertainty(fit.corrected)])  # fmt: skip
    table = _table(["", "asked", "as the sensor says it", "corrected"], rows)
    sources = "; ".join(escape(s) for s in (EPA_SOURCE, EU_SOURCE, CLASS_SOURCE))
    return f"{table}<p class='source'>By means of {escape(fit.corrected.over)}. {sources}.</p>"


def _table(head: Iterable[str], rows: Iterable[Iterable[str]]) -> str:
    top = "".join(f"<th>{cell}</th>" for cell in head)
    body = "".join("<tr>" + "".join(f"<td>{cell}</td>" for cell in row) + "</tr>" for row in rows)
    return f"<table><thead><tr>{top}</tr></thead><tbody>{body}</tbody></table>"


def _picture(svg: str, caption: str) -> str:
    return f"<figure>{svg}<figcaption>{escape(caption)}</figcaption></figure>"
