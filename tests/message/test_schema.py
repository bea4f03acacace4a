"""The schemas printed for others describe what is really published."""

import json

import jsonschema
import pytest

from motekeep.message.documents import HealthDocument, ReadingDocument, health_offline
from motekeep.message.schema import CHANNELS, asyncapi, json_schemas
from motekeep.message.topics import Topics

READING = {
    "schema": "motekeep/reading/1", "site": "quarry", "gateway": "east-gate", "sensor": "north", "seq": 18231,
    "start": "2026-12-01T09:15:00Z", "seconds": 60, "clock": "synced", "boot": "5f0c", "boot_s": 90211.4,
    "pm2_5": {"raw": 7.9, "value": 6.2, "u": 1.4}, "unit": "ug/m3", "k": 1,
    "counts_per_dL": {"0.3": 1421, "10": None}, "climate": {"rh": 71.2, "t": 11.4},
    "frames": {"good": 60, "bad": 0, "missing": 0}, "calibration": {"issue": 7, "digest": "sha256:00"},
    "flag": 1, "reasons": [],
}  # fmt: skip


def test_a_reading_round_trips_through_its_model_and_meets_its_schema() -> None:
    text = ReadingDocument.model_validate(READING).json_text()
    assert json.loads(text) == READING
    jsonschema.validate(json.loads(text), json_schemas()["reading"])


def test_a_reading_of_another_shape_does_not_meet_the_schema() -> None:
    with pytest.raises(jsonschema.ValidationError):
        jsonschema.validate({**READING, "pm2_5": 6.2}, json_schemas()["reading"])


def test_the_will_is_a_health_document_of_the_same_schema() -> None:
    will = json.loads(health_offline("quarry", "east-gate", "5f0c").json_text())
    assert will["status"] == "offline"
    jsonschema.validate(will, json_schemas()["health"])
    HealthDocument.model_validate(will)


def test_every_schema_is_itself_valid() -> None:
    for schema in json_schemas().values():
        jsonschema.Draft202012Validator.check_schema(schema)


def test_asyncapi_names_every_topic_and_every_reference_in_it_resolves() -> None:
    document = asyncapi("1.2.3")
    text = json.dumps(document)
    for reference in {part.split('"')[0] for part in text.split('"$ref": "')[1:]}:
        found: object = document
        for level in reference.removeprefix("#/").split("/"):
            assert isinstance(found, dict)
            found = found[level]
    topics = Topics("{root}", "{site}", "{gateway}")
    addresses = {c["address"] for c in document["channels"].values()}  # type: ignore[attr-defined]
    known = {topics.health, topics.finding, topics.resend, topics.reading("{sensor}"), topics.late("{sensor}")}
    assert known <= addresses
    assert len(addresses) == len(CHANNELS)
