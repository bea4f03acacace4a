"""`metrics.json`: the figures of a fit for programs, with the source of every target beside it.

Owns its keys. `slope` to `bias` at the top are of the corrected figures on spans that the fit had not seen.
"""

from dataclasses import asdict
from math import isfinite

import numpy as np

from moteferry.fit.fitting import Fit
from moteferry.fit.judgement import Judgement
from moteferry.fit.metrics import CLASS_SOURCE, EPA_SOURCE, EU_SOURCE
from motekeep.instant import rfc3339

SCHEMA = "moteferry/metrics/1"
DIGITS = 6
CAUTION = (
    "Readings are indicative: not a regulatory instrument, not a smoke alarm, not a life-safety device. "
    "Follow local codes and licensed practice, and the health authority's advice for exposure."
)


def metrics(fit: Fit) -> dict[str, object]:
    """All figures, ready for JSON: numbers to six digits, what is not finite as null."""
    site, gateway, sensor = fit.place
    own = asdict(fit.corrected.pairs)
    u = np.sqrt(np.diag(fit.covariance))
    found: dict[str, object] = {
        "schema": SCHEMA,
        "site": site,
        "gateway": gateway,
        "sensor": sensor,
        "channel": fit.channel,
        "unit": "ug/m3",
        "issue": fit.request.issue,
        "document": fit.document.digest,
        "data": fit.request.data,
        **{key: own[key] for key in ("slope", "intercept", "r2", "rmse", "nrmse", "bias")},
        "model": fit.candidate.name,
        "parameters": {
            name: {"value": value, "u": own_u}
            for name, value, own_u in zip(fit.candidate.names, fit.parameters.tolist(), u.tolist(), strict=True)
        },
        "residual": dict(zip(("u", "relative"), fit.residual, strict=True)),
        "coverage_2u": fit.covered,
        "raw": _judgement(fit.raw),
        "corrected_held_out": _judgement(fit.corrected),
        "cross_validation": {
            "blocks": [{"from": rfc3339(b.start), "to": rfc3339(b.end), "spans": int(b.judged.sum())} for b in fit.cut],
            "as_good_as_the_best_up_to_rmse": fit.choice.limit**0.5,
            "best": fit.choice.best.candidate.name,
            "models": {
                t.candidate.name: {"rmse": t.rmse, "block_rmse": np.sqrt(t.square).tolist()} for t in fit.trials
            },
            "refused": dict(fit.refused),
        },
        "covers": {
            "hours": fit.pairs.hours,
            "days": fit.extent.days,
            "span_seconds": fit.pairs.seconds,
            "filled": fit.extent.filled,
            "range": {name: list(ends) for name, ends in fit.extent.ranges.items()},
            "left_out": dict(fit.pairs.left_out),
        },
        "warnings": list(fit.warnings),
        "sources": {"epa": EPA_SOURCE, "eu": EU_SOURCE, "class": CLASS_SOURCE},
        "caution": CAUTION,
    }
    return {key: _rounded(value) for key, value in found.items()}


def _judgement(of: Judgement) -> dict[str, object]:
    eu = of.equivalence
    return {
        "by_pair": asdict(of.pairs),
        "averaged_over": of.over,
        "averaged": asdict(of.averaged),
        "epa_targets": {
            **{t.name: {"asked": t.asked, "figure": t.figure, "met": t.met} for t in of.targets},
            "precision": {"asked": "SD at most 5 ug/m3 or CV at most 30 % of three units", "met": None},
        },
        "eu": {
            "limit_value": eu.limit_value,
            "slope": eu.line.slope,
            "intercept": eu.line.intercept,
            "u_slope": eu.line.u_slope,
            "u_intercept": eu.line.u_intercept,
            "u_reference": eu.u_reference,
            "u": eu.u,
            "expanded_uncertainty_percent": eu.expanded,
            "random_term_was_below_zero": eu.random_negative,
            "class": eu.falls_in,
        },
    }


def _rounded(value: object) -> object:
    if isinstance(value, bool) or value is None:
        return value
    if isinstance(value, float):
        return float(f"{value:.{DIGITS}g}") if isfinite(value) else None
    if isinstance(value, dict):
        return {key: _rounded(inner) for key, inner in value.items()}
    if isinstance(value, list):
        return [_rounded(inner) for inner in value]
    return value
