"""An hour leaves the device as a document, and stored readings give back the samples they were made from."""

import json

import pytest

from intervals import MARCH, correction, interval
from motekeep.measure.hourly import HOUR_S, Hourly, sample_of
from motekeep.measure.reading import Reading, Value, make_reading, uncorrected
from motekeep.message.compose import Place, reading_document
from motekeep.message.documents import HourlyDocument, ReadingDocument, ValueDocument
from motekeep.message.hourly import hourly_document, sample_of_document

PLACE = Place("quarry", "east-gate")
LINE = """
[[step]]
kind = "linear"
slope = { value = 0.9, u = 0.04 }
offset = { value = 0.5, u = 0.3 }
"""


def reading(minute: int = 0, **kw: object) -> Reading:
    return make_reading(interval(at=MARCH + 60.0 * minute, **kw), correction(LINE, scale=60.0), {})  # type: ignore[arg-type]


def document_of(made: Reading, seq: int = 1) -> ReadingDocument:
    """As published, with the random part of u beside u."""
    plain = reading_document(made, PLACE, seq)
    values = {
        name: ValueDocument(raw=v.raw, value=v.value, u=v.u, u_random=v.u_random) for name, v in made.values.items()
    }
    return plain.model_copy(update=values)


def test_a_full_hour_becomes_a_document_that_the_schema_knows() -> None:
    hourly = Hourly()
    for m in range(120):
        hourly.add(sample_of(reading(m)))
    hour = hourly.due(MARCH + 2 * HOUR_S)[-1]
    text = hourly_document(hour, PLACE, "north").json_text()
    sent = json.loads(text)
    assert HourlyDocument.model_validate(sent).json_text() == text
    assert sent["schema"] == "motekeep/hourly/1"
    assert sent["start"] == "2027-03-01T01:00:00Z"
    assert sent["pm2_5"]["mean"] == 11.3
    assert sent["pm2_5"]["nowcast"] == 11.3
    assert sent["pm2_5"]["aqi"] == 55
    assert sent["pm2_5"]["category"] == "moderate"
    assert sent["pm2_5"]["mean_24h"] is None
    assert sent["pm2_5"]["hours_24h"] == 2
    assert sent["flag"] == 1
    assert "nowcast" not in sent["pm1"]


def test_an_incomplete_hour_says_null_and_not_nothing() -> None:
    hourly = Hourly()
    for m in range(30):
        hourly.add(sample_of(reading(m)))
    sent = json.loads(hourly_document(hourly.due(MARCH + HOUR_S)[0], PLACE, "north").json_text())
    assert sent["flag"] == 9
    assert sent["pm2_5"]["mean"] is None
    assert sent["pm2_5"]["completeness"] == 0.5


def test_stored_readings_make_the_same_hours_as_live_ones() -> None:
    live, again = Hourly(), Hourly()
    for m in range(60):
        made = reading(m, mass=(5.0 + m / 7, 9.0 + m / 3, 20.0))
        live.add(sample_of(made))
        sample = sample_of_document(ReadingDocument.model_validate_json(document_of(made).json_text()))
        assert sample is not None
        again.add(sample)
    a, b = [h.due(MARCH + HOUR_S)[0] for h in (live, again)]
    for name, figure in a.figures.items():
        assert b.figures[name].mean == pytest.approx(figure.mean, abs=0.005)
        assert b.figures[name].u == (None if figure.u is None else pytest.approx(figure.u, abs=0.005))
    assert (a.flag, a.reasons) == (b.flag, b.reasons)


def test_an_unsynced_reading_belongs_to_no_hour_until_it_was_stamped() -> None:
    made = make_reading(interval(trusted=False), uncorrected, {})
    document = reading_document(made, PLACE, 1)
    assert sample_of_document(document) is None
    assert sample_of_document(document.model_copy(update={"clock": "bounded"})) is None
    stamped = sample_of_document(document.model_copy(update={"clock": "corrected"}))
    assert stamped is not None
    assert stamped.figures["pm2_5"] == Value(12.0, 12.0, None)
