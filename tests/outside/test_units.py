"""Units as others read them: UCUM in the documents, RFC 8428 and RFC 8798 in SenML."""

import json

import pytest
from lark.exceptions import UnexpectedInput
from ucumvert import PintUcumRegistry, get_ucum_parser

from intervals import MARCH, interval
from motekeep.measure.interval import Climate
from motekeep.measure.reading import make_reading, uncorrected
from motekeep.measure.steps import STEPS
from motekeep.message import cf, senml
from motekeep.message.compose import Place, reading_document
from motekeep.message.documents import HourlyDocument, ReadingDocument

READING = reading_document(
    make_reading(interval(climate=Climate(71.2, 11.4, "frame")), uncorrected, {}), Place("quarry", "east-gate"), 1
)


@pytest.fixture(scope="module")
def ucum() -> object:
    return get_ucum_parser()


@pytest.mark.parametrize("unit", ["ug/m3", "/dL", "1/cm3", "%", "Cel", "L/min", "um", "s"])
def test_units_that_documents_use_are_ucum(ucum: object, unit: str) -> None:
    ucum.parse(unit)  # type: ignore[attr-defined]


@pytest.mark.parametrize("unit", ["µg/m3", "ug/m^3"])
def test_spellings_that_look_right_and_are_not(ucum: object, unit: str) -> None:
    with pytest.raises(UnexpectedInput):
        ucum.parse(unit)  # type: ignore[attr-defined]


def test_the_units_stated_by_the_models_and_the_steps_are_ucum(ucum: object) -> None:
    for model in (ReadingDocument, HourlyDocument):
        ucum.parse(model.model_json_schema()["properties"]["unit"]["const"])  # type: ignore[attr-defined]
    for kind in STEPS.values():
        for parameter in (*kind.parameters, *kind.settings):
            ucum.parse(parameter.unit)  # type: ignore[attr-defined]


def test_a_count_per_decilitre_is_one_per_tenth_of_a_litre_and_ten_thousand_per_cubic_metre() -> None:
    registry = PintUcumRegistry()
    per_m3 = registry.from_ucum("/dL").to("1/m**3").magnitude
    assert per_m3 == pytest.approx(1e4)
    assert per_m3 == pytest.approx(cf.PER_M3_BY_DL)
    assert registry.from_ucum("ug/m3").to("kg/m**3").magnitude == pytest.approx(1e-9)


# Units of RFC 8428, section 12.1, and the secondary units of RFC 8798, section 3: factor to their SI unit.
REGISTERED = {"%RH", "Cel", "count", "s", "/", "kg/m3"}
SECONDARY = {"ug/m3": ("kg/m3", 1e-9)}


def test_every_unit_in_a_pack_is_registered_and_secondary_ones_are_announced() -> None:
    records = json.loads(senml.pack([READING]))
    used = {r["u"] for r in records if "u" in r}
    assert used <= REGISTERED | set(SECONDARY)
    assert used & set(SECONDARY)
    # RFC 9100 (from memory): version 10 plus 2 to the power of each feature's code; secondary units have code 4.
    assert records[0]["bver"] == 10 + 2**4


def test_a_microgram_is_a_billionth_of_a_kilogram() -> None:
    """RFC 8798: ug/m3 = 1e-9 kg/m3."""
    (record,) = [r for r in json.loads(senml.pack([READING])) if r["n"] == "pm2_5"]
    unit, factor = SECONDARY[record["u"]]
    assert (unit, record["v"] * factor) == ("kg/m3", pytest.approx(12.0e-9))
    assert json.loads(senml.pack([READING]))[0]["bt"] == MARCH
