"""The pictures of the page, as SVG to stand inside of it.

Owns what is drawn. Must not know the page. Text stays text, so that it can be read aloud and searched.
"""

import itertools
import re
from io import StringIO
from typing import Any

import numpy as np
from matplotlib import dates as matplotlib_dates
from matplotlib import rc_context
from matplotlib.figure import Figure

from moteferry.fit.fitting import Fit
from moteferry.fit.record import Floats

RAW, CORRECTED, REFERENCE, CHOSEN = "#9a9a9a", "#1f6f8b", "#c1440e", "#1f6f8b"
WIDE, SQUARE = (9.0, 3.2), (5.2, 4.6)
UNIT = "µg/m³"
# A year of hours as single points would be a page of ten megabytes.
MOST_POINTS = 2500
BINS = 8
Axes = Any  # matplotlib's own types change from version to version


def scatter(fit: Fit) -> str:
    """Sensor against reference, raw and corrected, with the band of 2u about the line of agreement."""
    figure, axes = _figure(SQUARE)
    pick = _thinned(len(fit.pairs))
    reference = fit.pairs.reference
    axes.plot(reference[pick], fit.pairs.raw_mean[pick], ".", ms=3, color=RAW, label="as the sensor says it")
    axes.plot(reference[pick], fit.value[pick], ".", ms=3, color=CORRECTED, label="corrected")
    order = np.argsort(fit.value)
    value, u = fit.value[order], _smooth(fit.u[order])
    axes.fill_between(value, value - 2 * u, value + 2 * u, color=CORRECTED, alpha=0.15, lw=0, label="band of 2u")
    top = float(np.quantile(np.concatenate([reference, fit.value, fit.pairs.raw_mean]), 0.999)) * 1.05
    axes.plot([0, top], [0, top], color="black", lw=0.8)
    axes.set(xlim=(0, top), ylim=(0, top), xlabel=f"reference, {UNIT}", ylabel=f"sensor, {UNIT}")
    axes.legend(loc="best", fontsize=8)  # a sensor reads high or low: no corner is free of all
    return _svg(figure, "scatter")


def against_humidity(fit: Fit) -> str:
    """What is left over, on hours that the fit had not seen, against RH; against the raw figure where RH is unknown."""
    figure, axes = _figure(SQUARE)
    humid = fit.pairs.humid
    x = fit.pairs.rh_mean if humid else fit.pairs.raw_mean
    error = fit.held_out - fit.pairs.reference
    pick = _thinned(len(x))
    axes.plot(x[pick], error[pick], ".", ms=3, color=RAW)
    edges = np.unique(np.quantile(x, np.linspace(0, 1, BINS + 1)))
    for low, high in itertools.pairwise(edges):
        inside = (x >= low) & (x <= high)
        axes.plot([low, high], [np.median(error[inside])] * 2, color=CORRECTED, lw=3)
    axes.axhline(0, color="black", lw=0.8)
    reach = float(np.quantile(np.abs(error), 0.995)) * 1.2 or 1.0
    axes.set(
        ylim=(-reach, reach),
        xlabel="relative humidity at the sensor, %" if humid else f"as the sensor says it, {UNIT}",
        ylabel=f"corrected minus reference, {UNIT}",
    )
    return _svg(figure, "humidity")


def series(fit: Fit) -> str:
    """Both records through time, with the band of 2u."""
    figure, axes = _figure(WIDE)
    broken = _broken(fit)
    times = np.array((fit.pairs.start * 1000).round(), dtype="datetime64[ms]")

    def drawn(values: Floats) -> tuple[Any, Floats]:
        return np.insert(times, broken, times[broken]), np.insert(values, broken, np.nan)

    at, value = drawn(fit.value)
    _, low = drawn(fit.value - 2 * fit.u)
    _, high = drawn(fit.value + 2 * fit.u)
    axes.fill_between(at, np.maximum(low, 0), high, color=CORRECTED, alpha=0.2, lw=0, label="band of 2u")
    axes.plot(*drawn(fit.pairs.reference), color=REFERENCE, lw=0.8, label="reference")
    axes.plot(at, value, color=CORRECTED, lw=0.8, label="corrected sensor")
    locator = axes.xaxis.get_major_locator()
    axes.xaxis.set_major_formatter(matplotlib_dates.ConciseDateFormatter(locator))  # type: ignore[no-untyped-call] # of matplotlib
    axes.set(ylabel=UNIT, ylim=(0, None))
    axes.legend(loc="upper right", fontsize=8, ncols=3)
    return _svg(figure, "series")


def block_errors(fit: Fit) -> str:
    """The error of each form in each block that it had not seen."""
    figure, axes = _figure(WIDE)
    names = [t.candidate.name for t in fit.trials]
    for row, found in enumerate(fit.trials):
        chosen = found is fit.choice.chosen
        colour = CHOSEN if chosen else RAW
        axes.plot(np.sqrt(found.square), [row] * len(found.square), "o", ms=5, color=colour, alpha=0.6)
        axes.plot([found.rmse], [row], "|", ms=22, mew=3, color=colour)
    axes.axvline(fit.choice.limit**0.5, color="black", lw=0.8, ls="--", label="as good as the best up to here")
    axes.set_yticks(range(len(names)), names)
    axes.set(xlabel=f"typical error in a block of time that the fit had not seen, {UNIT}", xlim=(0, None))
    axes.set_ylim(len(names) - 0.5, -0.5)
    axes.legend(loc="lower right", fontsize=8)
    return _svg(figure, "blocks")


def _broken(fit: Fit) -> Any:
    """Where a line has to break: before spans that do not follow on the last one."""
    return np.flatnonzero(np.diff(fit.pairs.start) > 1.5 * fit.pairs.seconds) + 1


def _thinned(n: int) -> slice:
    return slice(None, None, -(-n // MOST_POINTS))


def _smooth(u: Floats) -> Floats:
    """u along the sorted figures as a line that can be looked at: humidity makes neighbours differ."""
    width = max(len(u) // 50, 1)
    padded = np.pad(u, width, mode="edge")
    return np.convolve(padded, np.ones(2 * width + 1) / (2 * width + 1), mode="valid")


def _figure(size: tuple[float, float]) -> tuple[Figure, Axes]:
    figure = Figure(figsize=size, layout="constrained")
    axes = figure.subplots()
    axes.spines[["top", "right"]].set_visible(False)
    axes.grid(alpha=0.2)
    return figure, axes


def _svg(figure: Figure, name: str) -> str:
    """The SVG element alone. `name` goes before its identifiers: those of two pictures on one page must differ."""
    text = StringIO()
    nothing = dict.fromkeys(("Creator", "Date", "Format", "Type"))
    # salted, or the same fit would draw other identifiers each time
    with rc_context({"svg.fonttype": "none", "svg.hashsalt": name}):
        figure.savefig(text, format="svg", metadata=nothing)
    svg = text.getvalue()
    return re.sub(r'(\bid="|url\(#|href="#)', rf"\g<1>{name}-", svg[svg.index("<svg") :])
