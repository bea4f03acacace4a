"""Readings as SenML packs (RFC 8428), with the secondary unit `ug/m3` of RFC 8798.

Owns the names of the records and their units. Knows no file.

A reading becomes one run of records with a base name `site/gateway/sensor/` and a base time, its start. Records carry
no base unit, since a flag has none. `ug/m3` is a secondary unit (1e-9 kg/m3), which a reader must be told that it has
to understand: feature bit 4, so `bver` is 10 + 16 = 26 (RFC 9100; from memory). Counts have the unit `count` and say in
their name that they are those of 0.1 L: no unit per volume of air is registered. What was not measured has no record.
"""

import json
import re
from collections.abc import Iterable
from typing import NotRequired, TypedDict

from motekeep.instant import from_rfc3339
from motekeep.measure.document import CHANNELS
from motekeep.message.documents import ReadingDocument, ValueDocument

VERSION = 26

# RFC 8428, 4.5.3: a smaller number is an offset from now. It is reached only by a clock that starts in 1970.
LEAST_ABSOLUTE_S = float(2**28)


class Record(TypedDict):
    """The fields of one record, by the labels of RFC 8428, section 4."""

    bn: NotRequired[str]
    bt: NotRequired[float]
    bver: NotRequired[int]
    n: str
    u: NotRequired[str]
    v: NotRequired[float]
    vs: NotRequired[str]


def records(document: ReadingDocument) -> list[Record]:
    """One reading as records; none when its time cannot be told from an offset, which whoever exports has to count."""
    start = from_rfc3339(document.start)
    if start < LEAST_ABSOLUTE_S:
        return []
    plain: list[Record] = []
    for channel in CHANNELS:
        value: ValueDocument | None = getattr(document, channel)
        if value is not None:
            parts = {"": value.value, ":raw": value.raw, ":u": value.u}
            plain += [_number(channel + part, v, "ug/m3") for part, v in parts.items() if v is not None]
    for size, count in (document.counts_per_dL or {}).items():
        if count is not None:
            plain.append(_number(f"count:{size}um:per-0.1L", count, "count"))
    if document.climate is not None:
        plain.append(_number("rh", document.climate.rh, "%RH"))
        if document.climate.t is not None:
            plain.append(_number("t", document.climate.t, "Cel"))
    plain.append(_number("seconds", document.seconds, "s"))
    plain.append(_number("seq", document.seq, None))
    plain.append(_number("flag", document.flag, None))
    plain += [{"n": "clock", "vs": document.clock}, {"n": "reasons", "vs": " ".join(document.reasons)}]
    first: Record = {"bver": VERSION, "bn": base_name(document), "bt": start, "n": plain[0]["n"]}
    return [first | plain[0], *plain[1:]]


def pack(documents: Iterable[ReadingDocument]) -> str:
    """A SenML pack as JSON. Every reading restates its base fields; oldest first is the order to hand in."""
    return json.dumps([record for document in documents for record in records(document)], separators=(",", ":"))


def base_name(document: ReadingDocument) -> str:
    """`site/gateway/sensor/` in the characters that RFC 8428, 4.5.1, allows; it must begin with a letter or a digit."""
    name = re.sub(r"[^A-Za-z0-9:./_-]", "-", f"{document.site}/{document.gateway}/{document.sensor}/")
    return name if name[0].isalnum() else "x" + name


def _number(name: str, value: float, unit: str | None) -> Record:
    return {"n": name, "v": value} if unit is None else {"n": name, "u": unit, "v": value}
