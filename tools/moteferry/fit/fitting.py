"""The whole way from pairs to a document: candidates, trials, choice, certainty, residual, extent, text.

Owns the order of it. Every step has its own module. Pure but for time spent: the same pairs and request give the same
bytes.
"""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.stats import theilslopes

from moteferry.fit import bootstrap
from moteferry.fit.applied import applied
from moteferry.fit.averages import averages
from moteferry.fit.blocks import DAY_S, Block, Trial, blocks, trial
from moteferry.fit.candidates import Candidate, Features, candidates
from moteferry.fit.choice import Choice, choose
from moteferry.fit.clock_check import lag_hours
from moteferry.fit.extent import Extent, extent
from moteferry.fit.least_squares import UnfitError, fitted, weights
from moteferry.fit.metrics import Comparison, Equivalence, Target, compare, epa_targets, equivalence
from moteferry.fit.pairs import Pairs
from moteferry.fit.record import Floats, RecordError
from moteferry.fit.residual import residual
from moteferry.fit.writing import Statement, written
from motekeep.measure.document import CalibrationDocument

# `max_shift` of a device as it is shipped, and the figure below which a move is measured against this; see
# message/rehearsal.py, which decides.
MAX_SHIFT, FLOOR_UG_M3 = 0.5, 5.0
LOOSE_R2 = 0.5
# A drift is told when the robust trend is surely there and moves more than this share of the mean.
DRIFT_SHARE, DRIFT_DAYS = 0.1, 14


@dataclass(frozen=True, slots=True)
class Request:
    """What the operator asks. Times are Unix seconds; `model` None lets the rule choose; `u_rh` is what the humidity
    sensor may be off by since the fit, % (its constant error is in the parameters already)."""

    issue: int
    made_at: float
    valid_from: float
    valid_until: float
    reference_words: str
    data: str
    model: str | None = None
    robust: bool = False
    limit_value: float = 30.0
    u_rh: float = 1.0
    fits_revision: int | None = None


@dataclass(frozen=True, slots=True)
class Judgement:
    """One series against the reference: of its pairs, and of means of `over` against the published rules."""

    pairs: Comparison
    over: str
    averaged: Comparison
    targets: tuple[Target, ...]
    equivalence: Equivalence


@dataclass(frozen=True, slots=True)
class Fit:
    """All that came of it. `held_out` is what the chosen form predicts for each span from blocks without it; `value`
    and `u` what the device states with the document; `covered` the share of spans in which the reference lies within
    2 u of `held_out`. `refused` says of forms that could not be fitted why."""

    place: tuple[str, str, str]
    channel: str
    request: Request
    pairs: Pairs
    cut: Sequence[Block]
    trials: Sequence[Trial]
    refused: Mapping[str, str]
    choice: Choice
    parameters: Floats
    covariance: Floats
    residual: tuple[float, float]
    extent: Extent
    value: Floats
    u: Floats
    covered: float
    raw: Judgement
    corrected: Judgement
    warnings: tuple[str, ...]
    text: bytes
    document: CalibrationDocument

    @property
    def candidate(self) -> Candidate:
        return self.choice.chosen.candidate

    @property
    def held_out(self) -> Floats:
        return self.choice.chosen.held_out


def fit(
    pairs: Pairs,
    place: tuple[str, str, str],
    channel: str,
    request: Request,
    told: Callable[[str], None] = lambda _what: None,
) -> Fit:
    """Fit a document for the sensor at `place` (site, gateway, sensor). `told` hears what is being done.

    Raises RecordError where the pairs give no correction that a device would take.
    """
    forms = candidates(pairs)
    sigma = _sigma(forms, pairs)
    cut = blocks(pairs)
    trials, whole, refused = _tried(_asked(forms, request.model), pairs, cut, sigma, request.robust, told)
    told("how sure the parameters are")
    choice, covariance = _sure(trials, whole, pairs, sigma, request.robust, refused)
    form = choice.chosen.candidate
    parameters = whole[form.name]
    error = choice.chosen.held_out - pairs.reference
    left_over = residual(error, choice.chosen.held_out, pairs.u_random, pairs.u_common)
    covers = extent(pairs, channel)
    corrected = _judged(pairs, choice.chosen.held_out, request.limit_value)
    told("the document")
    text, document = written(
        Statement(
            issue=request.issue,
            place=place,
            channel=channel,
            made_at=request.made_at,
            valid_from=request.valid_from,
            valid_until=request.valid_until,
            fits_revision=request.fits_revision,
            ranges=covers.ranges,
            candidate=form,
            parameters=parameters,
            covariance=covariance,
            residual=left_over,
            u_rh=request.u_rh if "rh" in covers.ranges else None,
            reference_words=request.reference_words,
            data=request.data,
            hours=round(pairs.hours, 2),
            metrics=_basis(corrected, covers),
        )
    )
    value, u = applied(document, pairs, channel)
    return Fit(
        place=place,
        channel=channel,
        request=request,
        pairs=pairs,
        cut=cut,
        trials=trials,
        refused=refused,
        choice=choice,
        parameters=parameters,
        covariance=covariance,
        residual=left_over,
        extent=covers,
        value=value,
        u=u,
        covered=float(np.mean(np.abs(error) <= 2.0 * np.hypot(u, pairs.u_random))),
        raw=_judged(pairs, pairs.raw_mean, request.limit_value),
        corrected=corrected,
        warnings=(*covers.warnings, *_warnings(pairs, value, corrected)),
        text=text,
        document=document,
    )


@dataclass(frozen=True, slots=True)
class Search:
    """The fit of one form again, on rows that are drawn."""

    form: Candidate
    features: Features
    reference: Floats
    sigma: Floats
    robust: bool
    begin: Floats

    def __call__(self, rows: NDArray[np.int64]) -> Floats:
        own = self.features.of(rows)
        return fitted(self.form, own, self.reference[rows], self.sigma[rows], robust=self.robust, begin=self.begin)


def _sigma(forms: Sequence[Candidate], pairs: Pairs) -> Floats:
    """Weights from what slope and offset leave over; one where that cannot be fitted."""
    ones = np.ones(len(pairs))
    for form in forms:
        if form.name == "linear":
            features = form.features(pairs)
            try:
                found = fitted(form, features, pairs.reference, ones)
            except UnfitError:
                break
            return weights(form.predict(found, features) - pairs.reference, pairs.u_random)
    return ones


def _asked(forms: Sequence[Candidate], model: str | None) -> Sequence[Candidate]:
    if model is None:
        return forms
    mine = [form for form in forms if form.name == model]
    if not mine:
        known = ", ".join(form.name for form in forms)
        raise RecordError(f"model {model!r}", "these records cannot tell it", f"possible are {known}")
    return mine


def _tried(
    forms: Sequence[Candidate],
    pairs: Pairs,
    cut: Sequence[Block],
    sigma: Floats,
    robust: bool,
    told: Callable[[str], None],
) -> tuple[list[Trial], dict[str, Floats], dict[str, str]]:
    trials: list[Trial] = []
    whole: dict[str, Floats] = {}
    refused: dict[str, str] = {}
    for form in forms:
        told(form.words)
        try:
            found = fitted(form, form.features(pairs), pairs.reference, sigma, robust=robust)
            trials.append(trial(form, pairs, cut, sigma, found, robust=robust))
        except UnfitError as error:
            refused[form.name] = str(error)
            continue
        whole[form.name] = found
    if not trials:
        raise RecordError("the fit", _all_of(refused), "see whether both records are of the same air")
    return trials, whole, refused


def _sure(
    trials: list[Trial],
    whole: Mapping[str, Floats],
    pairs: Pairs,
    sigma: Floats,
    robust: bool,
    refused: dict[str, str],
) -> tuple[Choice, Floats]:
    """The chosen form with the covariance of its parameters; a form whose resampled records cannot be fitted is out."""
    left = list(trials)
    while left:
        choice = choose(left)
        form = choice.chosen.candidate
        features, begin = form.features(pairs), whole[form.name]
        rest = (form.predict(begin, features) - pairs.reference) / sigma
        length = bootstrap.run_length(rest, bootstrap.least_run(pairs))

        search = Search(form, features, pairs.reference, sigma, robust, begin)
        try:
            return choice, bootstrap.covariance(bootstrap.replicates(search, len(pairs), length))
        except ValueError as error:
            refused[form.name] = str(error)
            left = [t for t in left if t.candidate is not form]
    raise RecordError("the fit", _all_of(refused), "record for longer, over more different air")


def _all_of(refused: Mapping[str, str]) -> str:
    return "no form of correction can be fitted (" + "; ".join(f"{n}: {why}" for n, why in refused.items()) + ")"


def _judged(pairs: Pairs, sensor: Floats, limit_value: float) -> Judgement:
    try:
        own = averages(pairs, sensor)
        averaged = compare(own.reference, own.sensor)
        u_reference = float(np.sqrt(np.mean(own.u_random**2)))
        return Judgement(
            compare(pairs.reference, sensor),
            own.over,
            averaged,
            epa_targets(averaged),
            equivalence(own.reference, own.sensor, limit_value, u_reference),
        )
    except ValueError as error:
        raise RecordError("the two records", str(error), "see whether both are of the same air") from error


def _basis(corrected: Judgement, covers: Extent) -> dict[str, float]:
    """What the document says of itself, of hours that its fit had not seen."""
    own = corrected.pairs
    return {
        "slope": own.slope,
        "intercept": own.intercept,
        "r2": own.r2,
        "rmse": own.rmse,
        "nrmse": own.nrmse,
        "bias": own.bias,
        "expanded_uncertainty": corrected.equivalence.expanded,
        "limit_value": corrected.equivalence.limit_value,
        "days": covers.days,
    }


def _warnings(pairs: Pairs, value: Floats, corrected: Judgement) -> list[str]:
    said = []
    if lag := lag_hours(pairs):
        said.append(
            f"the records fit best with the reference's stamps {abs(lag)} h {'earlier' if lag > 0 else 'later'}: is it "
            "stamped by the end of the hour, or in local time?"
        )
    if corrected.pairs.r2 < LOOSE_R2:
        said.append(f"the sensor hardly follows the reference (R2 {corrected.pairs.r2:.2f}): do not rely on this fit")
    move = np.median(np.abs(value - pairs.raw_mean) / np.maximum(pairs.raw_mean, FLOOR_UG_M3))
    if move > MAX_SHIFT:
        said.append(
            f"it moves readings by {100.0 * move:.0f} %; a device whose max_shift is {MAX_SHIFT:g} will refuse it"
        )
    if not pairs.u_random.any():
        said.append("the reference states no uncertainty: what it is off by itself is not in u")
    if (drift := _drift(pairs, value)) is not None:
        said.append(f"what is left over drifts by {drift:+.2f} ug/m3 in 30 days: is one of both changing?")
    return said


def _drift(pairs: Pairs, value: Floats) -> float | None:
    """The robust trend of daily means of the error, ug/m3 in 30 days, where it surely is one (Theil-Sen; Sen 1968, J.
    Am. Stat. Assoc. 63:1379). Days still resemble their neighbours, so the interval asked is that of 99 %."""
    days, number = np.unique(np.floor(pairs.start / DAY_S), return_inverse=True)
    if len(days) < DRIFT_DAYS:
        return None
    error = np.bincount(number, value - pairs.reference) / np.bincount(number)
    slope, _, low, high = theilslopes(error, days, alpha=0.99)
    moved = abs(slope) * float(days[-1] - days[0])
    sure = low * high > 0.0 and moved > max(DRIFT_SHARE * float(pairs.reference.mean()), 0.5)
    return 30.0 * float(slope) if sure else None
