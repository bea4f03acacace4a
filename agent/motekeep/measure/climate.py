"""Plausible climate or none: an absurd humidity must never reach a correction.

Owns the bounds. Knows no source; `edges/climate.py` and the inbox bring numbers here.
"""

import json
from math import isfinite

from motekeep.measure.interval import Climate

FIXED = "fixed"  # the source of a climate that somebody wrote down: it does not age

# Capacitive sensors read a few percent over 100 in fog: held at 100. Beyond that the number is a fault.
RH_TOP_PCT = 105.0
# What such sensors are rated for (common practice, no source).
COLDEST_C, WARMEST_C = -60.0, 85.0


def plausible(rh_pct: float, temperature_c: float | None, source: str, age_s: float = 0.0) -> Climate:
    """Climate from numbers as they came. Raises ValueError saying which number is absurd."""
    if not isfinite(rh_pct) or not 0.0 <= rh_pct <= RH_TOP_PCT:
        raise ValueError(f"relative humidity of {rh_pct:g} % is outside 0 to {RH_TOP_PCT:g}")
    if temperature_c is not None and not (isfinite(temperature_c) and COLDEST_C <= temperature_c <= WARMEST_C):
        raise ValueError(f"temperature of {temperature_c:g} degC is outside {COLDEST_C:g} to {WARMEST_C:g}")
    return Climate(min(rh_pct, 100.0), temperature_c, source, age_s)


def from_message(payload: bytes, source: str) -> Climate:
    """Climate from an MQTT payload {"rh": %, "t": Cel}; `t` may be absent. Raises ValueError."""
    if len(payload) > 1024:
        raise ValueError(f"{len(payload)} bytes are no climate message")
    try:
        document = json.loads(payload)
    except RecursionError as error:
        raise ValueError("nested too deeply") from error
    if not isinstance(document, dict):
        raise ValueError("not a JSON object")
    humid, warm = document.get("rh"), document.get("t")
    if not isinstance(humid, int | float) or isinstance(humid, bool):
        raise ValueError('no number under "rh"')
    if warm is not None and (not isinstance(warm, int | float) or isinstance(warm, bool)):
        raise ValueError('"t" is not a number')
    return plausible(float(humid), None if warm is None else float(warm), source)
