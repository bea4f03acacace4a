"""Fits one candidate to spans: least squares of the reference on the sensor, plain or robust.

Owns the search. Must not know how the result is judged. To predict the reference from the sensor is what a calibration
is for, and least squares in that direction is what predicts best, errors of the sensor included; a statement of
agreement is another question and has another line (`agreement`).

Robust is Huber's loss (Huber 1964, Ann. Math. Stat. 35:73): squares within 1.345 scales, straight beyond, which keeps
95 % of the efficiency on Gaussian errors. The scale is that of the median absolute deviation, found in turn.
"""

import numpy as np
from scipy.optimize import least_squares

from moteferry.fit.candidates import Candidate, Features
from moteferry.fit.record import Floats

HUBER = 1.345
MAD_TO_SIGMA = 1.4826  # of a Gaussian
ROUNDS = 5  # the scale stands still after three


class UnfitError(ValueError):
    """This form cannot be fitted to these spans; the text says why."""


def fitted(
    candidate: Candidate,
    features: Features,
    reference: Floats,
    sigma: Floats,
    *,
    robust: bool = False,
    begin: Floats | None = None,
) -> Floats:
    """The parameters, (k,). `sigma` is what each reference figure weighs by, relative to each other is enough.

    Raises UnfitError where the spans do not determine the form, or where it comes out as what no device takes.
    """
    if len(features) <= len(candidate.names):
        raise UnfitError(f"{len(features)} spans are too few for {len(candidate.names)} parameters")
    start = np.array(candidate.begin if begin is None else begin, dtype=np.float64)
    found = _plain(candidate, features, reference, sigma, start)
    for _ in range(ROUNDS if robust else 0):
        rest = (candidate.predict(found, features) - reference) / sigma
        scale = MAD_TO_SIGMA * float(np.median(np.abs(rest - np.median(rest))))
        if scale <= 0.0:
            break
        found = _searched(candidate, features, reference, sigma, found, HUBER * scale)
    _check(candidate, found)
    return found


def _plain(candidate: Candidate, features: Features, reference: Floats, sigma: Floats, start: Floats) -> Floats:
    if not candidate.linear:
        return _searched(candidate, features, reference, sigma, start, None)
    matrix = candidate.jacobian(start, features) / sigma[:, None]
    found, _, rank, _ = np.linalg.lstsq(matrix, reference / sigma, rcond=None)
    if rank < matrix.shape[1]:
        raise UnfitError("the record does not tell its parameters apart")
    return np.asarray(found)


def _searched(
    candidate: Candidate, features: Features, reference: Floats, sigma: Floats, start: Floats, bend: float | None
) -> Floats:
    """By the trust region of scipy, within what a device takes; with Huber's loss from `bend` on."""
    low, high = np.array(candidate.low), np.array(candidate.high)
    room = 1e-9 * (high - low)
    result = least_squares(
        lambda p: (candidate.predict(p, features) - reference) / sigma,
        np.clip(start, low + room, high - room),
        jac=lambda p: candidate.jacobian(p, features) / sigma[:, None],
        bounds=(low, high),
        x_scale="jac",
        loss="linear" if bend is None else "huber",
        f_scale=1.0 if bend is None else bend,
    )
    return np.asarray(result.x)


def _check(candidate: Candidate, found: Floats) -> None:
    for name, value, low, high in zip(candidate.names, found, candidate.low, candidate.high, strict=True):
        if not low <= value <= high:
            raise UnfitError(f"{name} comes out as {value:.4g}, a device takes {low:g} to {high:g}")
    if candidate.name == "piecewise" and (np.diff(found) <= 0.0).any():
        raise UnfitError("it does not rise from point to point")


def weights(rest: Floats, u_random: Floats) -> Floats:
    """What each span weighs by: the scatter of the comparison without that of the reference, and its own on top.

    `rest` are residuals of an unweighted fit. Where the reference states one u for all, all weigh alike.
    """
    total = float(np.mean(rest**2))
    own = max(total - float(np.mean(u_random**2)), 0.1 * total, 1e-12)
    return np.asarray(np.sqrt(own + u_random**2))
