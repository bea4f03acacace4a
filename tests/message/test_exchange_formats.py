"""Readings in SenML and under CF names say the same as the reading, in units that others know."""

import json
import re

from intervals import MARCH, correction, interval
from motekeep.instant import rfc3339
from motekeep.measure.interval import Climate
from motekeep.measure.reading import make_reading, uncorrected
from motekeep.message import cf, senml
from motekeep.message.compose import Place, reading_document
from motekeep.message.documents import ReadingDocument

PLACE = Place("quarry", "east-gate")
LINE = '[[step]]\nkind = "linear"\nslope = { value = 0.9, u = 0.04 }\noffset = { value = 0.5, u = 0.3 }\n'


def reading(**kw: object) -> ReadingDocument:
    made = interval(climate=Climate(71.2, 11.4, "frame"), **kw)  # type: ignore[arg-type]
    return reading_document(make_reading(made, correction(LINE), {}), PLACE, 18231)


def resolved(pack: str) -> dict[str, dict[str, object]]:
    """By RFC 8428, 4.6: base fields put into every record, names whole."""
    base: dict[str, object] = {}
    out: dict[str, dict[str, object]] = {}
    for record in json.loads(pack):
        base |= {k: v for k, v in record.items() if k in ("bn", "bt", "bu", "bver")}
        plain = {k: v for k, v in record.items() if k not in ("bn", "bt", "bu", "bver")}
        name = f"{base.get('bn', '')}{plain.pop('n', '')}"
        plain["t"] = base.get("bt", 0) + plain.get("t", 0)  # type: ignore[operator]
        out[f"{name}@{plain['t']}"] = plain
    return out


def test_a_reading_resolves_to_one_record_a_figure() -> None:
    got = resolved(senml.pack([reading()]))
    at = f"@{MARCH}"
    prefix = "quarry/east-gate/north/"
    assert got[f"{prefix}pm2_5{at}"] == {"u": "ug/m3", "v": 11.3, "t": MARCH}
    assert got[f"{prefix}pm2_5:raw{at}"]["v"] == 12.0
    assert got[f"{prefix}pm2_5:u{at}"]["u"] == "ug/m3"
    assert got[f"{prefix}rh{at}"] == {"u": "%RH", "v": 71.2, "t": MARCH}
    assert got[f"{prefix}t{at}"] == {"u": "Cel", "v": 11.4, "t": MARCH}
    assert got[f"{prefix}count:0.3um:per-0.1L{at}"] == {"u": "count", "v": 1800.0, "t": MARCH}
    assert got[f"{prefix}flag{at}"] == {"v": 1, "t": MARCH}


def test_names_have_only_the_characters_that_the_rule_allows() -> None:
    """RFC 8428, 4.5.1: letters, digits and - : . / _, beginning with a letter or a digit."""
    odd = reading().model_copy(update={"site": "öde küste", "gateway": "a b"})
    for name in resolved(senml.pack([reading(), odd])):
        assert re.fullmatch(r"[A-Za-z0-9][A-Za-z0-9:./_-]*@[\d.]+", name)


def test_each_record_has_one_value_and_a_name_or_base_name() -> None:
    for record in json.loads(senml.pack([reading()])):
        assert len({"v", "vs", "vb", "vd"} & set(record)) == 1
        assert "n" in record


def test_the_version_asks_for_secondary_units_in_every_run() -> None:
    records = json.loads(senml.pack([reading(), reading(at=MARCH + 60.0)]))
    assert {r["bver"] for r in records if "bn" in r} == {26}
    assert "bver" in records[0]
    assert len({r["bt"] for r in records if "bt" in r}) == 2


def test_what_was_not_measured_has_no_record() -> None:
    bare = reading_document(make_reading(interval(censored=1), uncorrected, {}), PLACE, 1)
    names = {name.rpartition("@")[0].rpartition("/")[2] for name in resolved(senml.pack([bare]))}
    assert "rh" not in names
    assert "pm2_5:u" not in names
    assert "count:0.3um:per-0.1L" not in names
    assert "count:0.5um:per-0.1L" in names


def test_a_time_that_would_be_read_as_an_offset_makes_no_record() -> None:
    """RFC 8428, 4.5.3: below 2^28 a time is relative to now. A board whose clock begins in 1970 gets there."""
    assert senml.records(reading().model_copy(update={"start": rfc3339(2.0**28 - 1.0)})) == []
    assert senml.records(reading().model_copy(update={"start": rfc3339(2.0**28)})) != []


# -- CF --------------------------------------------------------------------


def test_every_cell_of_a_row_has_its_column() -> None:
    keys = {c.key for c in cf.columns()}
    row = cf.row(reading())
    assert set(row) <= keys
    assert {"pm2_5", "pm2_5:u", "count:0.3", "rh", "t", "flag", "calibration"} <= set(row)
    assert len({c.header for c in cf.columns()}) == len(cf.columns())


def test_units_are_those_of_the_standard_names() -> None:
    row = cf.row(reading())
    assert row["rh"] == 0.712
    assert row["t"] == 284.55
    assert row["count:0.3"] == 1800.0 * 1e4
    assert row["pm2_5"] == 11.3
    headers = {c.key: c.header for c in cf.columns()}
    assert headers["pm2_5"] == "mass_concentration_of_pm2p5_ambient_aerosol_particles_in_air [ug m-3]"
    assert headers["count:0.3"].endswith("diameter>0.3um [m-3]")
    assert headers["rh"] == "relative_humidity [1]"
    assert headers["t"] == "air_temperature [K]"


def test_a_censored_count_is_an_empty_cell() -> None:
    assert cf.row(reading(censored=1))["count:0.3"] is None


def test_flags_are_listed_with_their_meanings() -> None:
    values = cf.FLAG_ATTRIBUTES["flag_values"].split()
    meanings = cf.FLAG_ATTRIBUTES["flag_meanings"].split()
    assert dict(zip(values, meanings, strict=True))["3"] == "suspect"
