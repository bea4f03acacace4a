"""From a calibration document to what it makes of an interval.

Owns the order of things: whether the document may be used at all, which channel goes through which steps, what happens
where a step cannot. Must not know how a document came here.

The rules.
- A channel under `[residual]` goes through its steps in the order of the document. Every other channel passes raw,
  without `u`, and the reading says `uncalibrated:<channel>`.
- Where RH, temperature or counts are missing that a channel's steps need, the channel falls back to raw, without `u`,
  suspect, with the cause and `uncorrected:<channel>`. Nothing older or guessed takes their place.
- Where a step can state no number (a censored count) there is none: the value is None and fails; raw stays beside it.
- Outside of the document's ranges or dates the correction is still made, and suspect. Dates are not looked at while
  nobody vouches for the clock.
- Sensitivities are carried forward through the chain by the chain rule, one entry a source, so that a source which
  enters twice counts once with its sum.
"""

from dataclasses import dataclass
from math import isfinite

from motekeep.measure.climate import plausible
from motekeep.measure.document import CalibrationDocument
from motekeep.measure.interval import EMPTY, Channel, Climate, Interval
from motekeep.measure.reading import FAIL, PASS, SUSPECT, Corrected, Correction, Provenance, Value, uncorrected, worst
from motekeep.measure.steps.step import Air, Need, Step
from motekeep.measure.uncertainty import Sensitivities, Sources, count_uncertainty, propagate, raw_uncertainties


@dataclass(frozen=True, slots=True)
class Chain:
    """The steps of one channel with the terms of covariance between their parameters, numbered along the chain."""

    steps: tuple[Step, ...]
    needs: frozenset[Need]
    covariance: tuple[tuple[int, int, float], ...]


@dataclass(slots=True)
class Run:
    """One interval on its way: the air, what is wrong with its climate, the uncertainty of its count, and what was
    found, in order and once each. `used` says whether a channel was corrected."""

    air: Air
    climate_fault: str
    u_count: float
    flags: list[int]
    reasons: list[str]
    used: bool = False

    def note(self, flag: int, reason: str | None) -> None:
        self.flags.append(flag)
        if reason is not None and reason not in self.reasons:
            self.reasons.append(reason)

    def lacks(self, needs: frozenset[Need]) -> str | None:
        """The reason why a chain with these needs cannot run on this air, None when it can."""
        if Need.RH in needs and self.air.rh_pct is None:
            return self.climate_fault
        if Need.TEMPERATURE in needs and self.air.temperature_c is None:
            return self.climate_fault
        if Need.COUNT in needs and self.air.count_per_dl is None and not self.air.count_censored:
            return "counts-missing"
        return None


def compile_document(document: CalibrationDocument, scale: float | None = None) -> Correction:
    """The correction that a document stands for. `scale` is the unit's noise scale as in `counting`, None: not learnt.

    What comes back is pure and raises on no interval. Make a new one when the scale was learnt anew.
    """
    return DocumentCorrection(document, scale)


class DocumentCorrection:
    """A document, ready to be applied; a `Correction`."""

    __slots__ = ("_chains", "_document", "_provenance", "_scale")

    def __init__(self, document: CalibrationDocument, scale: float | None) -> None:
        self._document = document
        self._scale = scale
        self._provenance = Provenance(document.issue, document.digest)
        self._chains = {channel: _chain(document, channel) for channel in document.residual}

    def __call__(self, interval: Interval) -> Corrected:
        layout = interval.layout
        if layout is None:
            return uncorrected(interval)
        run = self._begin(interval)
        raw_u = raw_uncertainties(interval, layout, self._scale)
        values = tuple(
            [
                self._value(name, channel, u, run)
                for name, channel, u in zip(layout.mass, interval.mass, raw_u, strict=True)
            ]
        )
        return Corrected(values, worst(run.flags), tuple(run.reasons), self._provenance if run.used else None)

    def _begin(self, interval: Interval) -> Run:
        climate, fault = usable_climate(interval.climate, self._document.climate.max_age_s)
        smallest = interval.counts[0] if interval.counts else EMPTY
        air = Air(
            rh_pct=climate.rh_pct if climate else None,
            temperature_c=climate.temperature_c if climate else None,
            count_per_dl=smallest.mean if smallest.n else None,
            count_censored=smallest.censored > 0,
        )
        run = Run(air, fault, count_uncertainty(smallest, self._scale), [PASS], [])
        if not self._document.fits(interval.revision):
            run.note(SUSPECT, "calibration-of-other-revision")
        start = interval.start
        if start.trusted and not self._document.valid_at(start.utc):
            early = start.utc < self._document.valid_from
            run.note(SUSPECT, "calibration-early" if early else "calibration-expired")
        return run

    def _value(self, name: str, channel: Channel, u_raw: float, run: Run) -> Value:
        if not channel.n:
            return Value(None, None, None)
        raw = channel.mean
        chain = self._chains.get(name)
        if chain is None:
            run.note(PASS, f"uncalibrated:{name}")
            return Value(raw, raw, None)
        if lacking := run.lacks(chain.needs):
            run.note(SUSPECT, lacking)
            run.note(SUSPECT, f"uncorrected:{name}")
            return Value(raw, raw, None)
        run.used = True
        self._judge_range(name, raw, run)
        followed = follow(chain, raw, run)
        if followed is None:
            return Value(raw, None, None)
        value, sensitivities = followed
        climate = self._document.climate
        sources = Sources(u_raw, chain.covariance, climate.u_rh, climate.u_t, run.u_count)
        budget = propagate(sensitivities, sources, self._document.residual[name].at(value))
        if not isfinite(budget.u):
            run.note(FAIL, "not-finite")
            return Value(raw, None, None)
        return Value(raw, value, budget.u, budget.u_random)

    def _judge_range(self, name: str, raw: float, run: Run) -> None:
        """A range of RH or temperature counts for chains that do not need them too: the fit may have seen dry air only,
        and found no influence of what it had not seen. Without a climate nothing is known against the figure."""
        inside = self._document.in_range(name, raw)
        rh, t = run.air.rh_pct, run.air.temperature_c
        if rh is not None:
            inside = inside and self._document.in_range(Need.RH, rh)
        if t is not None:
            inside = inside and self._document.in_range(Need.TEMPERATURE, t)
        if not inside:
            run.note(SUSPECT, "calibration-out-of-range")


def follow(chain: Chain, raw: float, run: Run) -> tuple[float, Sensitivities] | None:
    """One figure through its chain: the end figure and its derivatives; None where a step can state no number."""
    figure, d_raw, d_rh, d_t, d_count = raw, 1.0, 0.0, 0.0, 0.0
    d_parameters: list[float] = []
    for step in chain.steps:
        outcome = step.apply(figure, run.air)
        if outcome.flag != PASS:
            run.note(outcome.flag, outcome.reason)
        if outcome.value is None:
            return None
        slope = outcome.d_input
        figure = outcome.value
        d_raw *= slope
        d_rh = d_rh * slope + outcome.d_rh
        d_t = d_t * slope + outcome.d_t
        d_count = d_count * slope + outcome.d_count
        d_parameters = [d * slope for d in d_parameters]
        d_parameters += outcome.d_parameters
    return figure, Sensitivities(d_raw, d_parameters, d_rh, d_t, d_count)


def usable_climate(climate: Climate | None, max_age_s: float) -> tuple[Climate | None, str]:
    """The climate if it may be used, else None; with the reason for which it may not."""
    if climate is None:
        return None, "climate-missing"
    if climate.age_s > max_age_s:
        return None, "climate-stale"
    try:
        return plausible(climate.rh_pct, climate.temperature_c, climate.source, climate.age_s), "climate-missing"
    except ValueError:
        return None, "climate-implausible"


def _chain(document: CalibrationDocument, channel: str) -> Chain:
    """The steps of one channel, their parameters renumbered from those of the whole document."""
    steps: list[Step] = []
    numbers: list[int] = []
    first = 0
    for step in document.steps:
        if channel in step.channels:
            steps.append(step.step)
            numbers += range(first, first + len(step.parameters))
        first += len(step.parameters)
    terms = tuple(
        [
            (i, j, document.covariance[numbers[i]][numbers[j]])
            for i in range(len(numbers))
            for j in range(i, len(numbers))
            if document.covariance[numbers[i]][numbers[j]] != 0.0
        ]
    )
    needs = frozenset(need for step in steps for need in step.needs)
    return Chain(tuple(steps), needs, terms)
