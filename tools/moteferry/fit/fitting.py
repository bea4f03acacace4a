"""The whole way from pairs to a document: candidates, trials, choice, certainty, residual, extent, text.

Owns the order of it. Every step has its own module. Pure but for time spent: the same pairs and request give the same
bytes.
"""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from moteferry.fit import bootstrap
from moteferry.fit.applied import applied
from moteferry.fit.blocks import Block, Trial, blocks, trial
from moteferry.fit.candidates import Candidate, Features, candidates
from moteferry.fit.choice import Choice, choose
from moteferry.fit.doubts import doubts
from moteferry.fit.extent import Extent, extent
from moteferry.fit.judgement import Judgement, judged
from moteferry.fit.least_squares import UnfitError, fitted, weights
from moteferry.fit.pairs import Pairs
from moteferry.fit.record import Floats, RecordError
from moteferry.fit.residual import scaled, shape, variance_of, with_common
from moteferry.fit.writing import Statement, written
from motekeep.measure.document import CalibrationDocument


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
    replicates: int = bootstrap.REPLICATES


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
    choice, covariance = _sure(trials, whole, pairs, sigma, request, refused)
    form = choice.chosen.candidate
    parameters = whole[form.name]
    covers = extent(pairs, channel, by_temperature="linear.t_term" in form.names)
    corrected = judged(pairs, choice.chosen.held_out, request.limit_value)
    told("the document")
    error = choice.chosen.held_out - pairs.reference
    parts = shape(error, choice.chosen.held_out, pairs.u_random)
    draft = Statement(
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
        residual=(float(parts[0]), float(parts[1])),
        u_rh=request.u_rh if "rh" in covers.ranges else None,
        reference_words=request.reference_words,
        data=request.data,
        hours=round(pairs.hours, 2),
        metrics=_basis(corrected, covers),
    )
    left_over = _left_over(draft, parts, pairs, error)
    text, document = written(replace(draft, residual=left_over))
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
        raw=judged(pairs, pairs.raw_mean, request.limit_value),
        corrected=corrected,
        warnings=(*covers.warnings, *doubts(pairs, value, corrected.pairs)),
        text=text,
        document=document,
    )


def _left_over(draft: Statement, parts: Floats, pairs: Pairs, error: Floats) -> tuple[float, float]:
    """The residual with which what the device states of these spans holds as many of them as it promises."""
    _, document = written(draft)
    value, u = applied(document, pairs, draft.channel)
    other = np.maximum(u**2 - variance_of(parts, value), 0.0) + pairs.u_random**2
    return with_common(scaled(parts, error, value, other), value, pairs.u_common)


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
    request: Request,
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

        search = Search(form, features, pairs.reference, sigma, request.robust, begin)
        try:
            return choice, bootstrap.covariance(bootstrap.replicates(search, len(pairs), length, request.replicates))
        except ValueError as error:
            refused[form.name] = str(error)
            left = [t for t in left if t.candidate is not form]
    raise RecordError("the fit", _all_of(refused), "record for longer, over more different air")


def _all_of(refused: Mapping[str, str]) -> str:
    return "no form of correction can be fitted (" + "; ".join(f"{n}: {why}" for n, why in refused.items()) + ")"


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
