"""Writes a fit as the text of a calibration document, and reads it back the way a device will.

Owns the text. What a document may say is owned by measure/document_text.py: the text made here has passed it.
"""

import json
from collections.abc import Mapping
from dataclasses import dataclass
from itertools import combinations

import numpy as np

from moteferry.fit.candidates import Candidate, StepForm
from moteferry.fit.record import Floats, RecordError
from motekeep.errors import DocumentError
from motekeep.instant import rfc3339
from motekeep.measure.document import CalibrationDocument
from motekeep.measure.document_text import parse

SETTING_DIGITS = 12
OWNER = "made by moteferry fit; sign it before it goes to a gateway"
CAUTION = "readings are indicative: not a regulatory instrument, not a smoke alarm, not a life-safety device"


@dataclass(frozen=True, slots=True)
class Statement:
    """All that goes into a document. Times are Unix seconds; `residual` is (u, relative) of `channel`."""

    issue: int
    place: tuple[str, str, str]
    channel: str
    made_at: float
    valid_from: float
    valid_until: float
    fits_revision: int | None
    ranges: Mapping[str, tuple[float, float]]
    candidate: Candidate
    parameters: Floats
    covariance: Floats
    residual: tuple[float, float]
    u_rh: float | None
    reference_words: str
    data: str
    hours: float
    metrics: Mapping[str, float]


def written(statement: Statement) -> tuple[bytes, CalibrationDocument]:
    """The exact bytes and what a device makes of them. Raises RecordError where a device would refuse them."""
    text = "".join(f"{line}\n" for line in _lines(statement)).encode()
    try:
        return text, parse(text)
    except DocumentError as error:
        raise RecordError("the document of this fit", f"a device would refuse it: {error}", "") from error


def _lines(s: Statement) -> list[str]:
    site, gateway, sensor = s.place
    lines = [
        f"# {OWNER}",
        f"# {CAUTION}",
        f"issue = {s.issue}",
        f"site = {_text(site)}",
        f"gateway = {_text(gateway)}",
        f"sensor = {_text(sensor)}",
        f"made_at = {rfc3339(s.made_at)}",
        f"valid_from = {rfc3339(s.valid_from)}",
        f"valid_until = {rfc3339(s.valid_until)}",
    ]
    if s.fits_revision is not None:
        lines.append(f"fits_revision = {s.fits_revision}")
    lines += ["", "[range]"]
    lines += [f"{name} = [{_number(low)}, {_number(high)}]" for name, (low, high) in s.ranges.items()]
    u = np.sqrt(np.diag(s.covariance))
    for form in s.candidate.steps:
        lines += ["", "[[step]]", f'kind = "{form.kind}"']
        lines += _step(form, s.parameters, u)
    for i, j in combinations(range(len(s.parameters)), 2):
        if s.covariance[i, j] != 0.0:
            names = f'["{s.candidate.names[i]}", "{s.candidate.names[j]}"]'
            lines += ["", "[[covariance]]", f"of = {names}", f"value = {_number(s.covariance[i, j])}"]
    u_residual, relative = s.residual
    lines += ["", "[residual]", f"{s.channel} = {{ u = {_number(u_residual, 6)}, relative = {_number(relative, 6)} }}"]
    if s.u_rh is not None:
        lines += ["", "[climate]", f"u_rh = {_number(s.u_rh)}"]
    lines += [
        "",
        "[basis]",
        f"reference = {_text(s.reference_words)}",
        f'data = "{s.data}"',
        f"hours = {_number(s.hours)}",
    ]
    metrics = ", ".join(f"{name} = {_number(value, 6)}" for name, value in s.metrics.items())
    lines.append(f"metrics = {{ {metrics} }}")
    return lines


def _step(form: StepForm, parameters: Floats, u: Floats) -> list[str]:
    lines = []
    for name, setting in form.settings.items():
        shown = f"[{', '.join(map(_number, setting))}]" if isinstance(setting, tuple) else _number(setting)
        lines.append(f"{name} = {shown}")
    for name, place in form.parameters.items():
        if isinstance(place, tuple):
            listed = ", ".join(_estimate(parameters[p], u[p]) for p in place)
            lines.append(f"{name} = [{listed}]")
        elif isinstance(place, int):
            lines.append(f"{name} = {_estimate(parameters[place], u[place])}")
        else:
            lines.append(f"{name} = {_estimate(place, 0.0)}")
    return lines


def _estimate(value: float, u: float) -> str:
    return f"{{ value = {_number(value)}, u = {_number(u)} }}"


def _number(value: float, digits: int = SETTING_DIGITS) -> str:
    """A TOML float: always with a point or an exponent."""
    text = f"{float(value):.{digits}g}"
    return text if any(c in text for c in ".en") else f"{text}.0"


def _text(words: str) -> str:
    return json.dumps(words, ensure_ascii=False)
