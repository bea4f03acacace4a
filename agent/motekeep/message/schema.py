"""JSON Schema of every document and an AsyncAPI 3 description of every topic, generated from the models.

Owns the table of which document goes on which topic, in which direction, retained or not.
"""

from dataclasses import dataclass

from pydantic.json_schema import models_json_schema

from motekeep.message.documents import (
    AmendDocument,
    CalibrationOfferRequest,
    CalibrationStateDocument,
    Document,
    FindingDocument,
    HealthDocument,
    HourlyDocument,
    LateDocument,
    ReadingDocument,
    ResendRequest,
    ServiceDocument,
    TakenReceipt,
)


@dataclass(frozen=True, slots=True)
class Channel:
    """One topic: `address` below the gateway's own prefix; `to_device` is the direction."""

    address: str
    document: type[Document]
    retained: bool
    to_device: bool
    what: str


CHANNELS = (
    Channel("reading/{sensor}", ReadingDocument, False, False, "one reading, after it is durable on the device"),
    Channel("late/{sensor}", LateDocument, False, False, "readings of an outage, oldest first"),
    Channel("hourly/{sensor}", HourlyDocument, True, False, "the last full hour, with NowCast and AQI"),
    Channel("amend/{sensor}", AmendDocument, False, False, "a flag or a time stamp of earlier readings changed"),
    Channel("health", HealthDocument, True, False, "the health status; also the will, with status offline"),
    Channel("finding", FindingDocument, False, False, "a finding opened or closed"),
    Channel("service", ServiceDocument, False, False, "what a person did at a sensor"),
    Channel(
        "calibration/{sensor}/state",
        CalibrationStateDocument,
        True,
        False,
        "what is in force, what was refused and why",
    ),
    Channel("calibration/{sensor}/offer", CalibrationOfferRequest, True, True, "a signed calibration document"),
    Channel("resend", ResendRequest, False, True, "send this range of readings again; answered on late"),
    Channel("taken/{sensor}", TakenReceipt, True, True, "an archive has stored all readings up to this one"),
)


def name_of(document: type[Document]) -> str:
    """The name of a document in the schemas: `reading`, `late`, `health`, ..."""
    return document.__name__.removesuffix("Document").removesuffix("Request").removesuffix("Receipt").lower()


def json_schemas() -> dict[str, object]:
    """One JSON Schema (2020-12) a document, by its name."""
    return {
        name_of(c.document): {
            "$schema": "https://json-schema.org/draft/2020-12/schema",
            **c.document.model_json_schema(by_alias=True),
        }
        for c in CHANNELS
    }


def asyncapi(version: str) -> dict[str, object]:
    """The topic tree as an AsyncAPI 3.0 document, seen from the device: it sends readings and receives requests."""
    channels, operations, messages = {}, {}, {}
    _, schemas = models_json_schema(
        [(c.document, "validation") for c in CHANNELS], by_alias=True, ref_template="#/components/schemas/{model}"
    )
    for c in CHANNELS:
        name = name_of(c.document)
        parameters = {"root": {"default": "motekeep"}, "site": {}, "gateway": {}}
        if "{sensor}" in c.address:
            parameters["sensor"] = {}
        channels[name] = {
            "address": "{root}/{site}/{gateway}/" + c.address,
            "description": c.what,
            "parameters": parameters,
            "messages": {name: {"$ref": f"#/components/messages/{name}"}},
        }
        operations[f"{'receive' if c.to_device else 'send'}-{name}"] = {
            "action": "receive" if c.to_device else "send",
            "channel": {"$ref": f"#/channels/{name}"},
            "bindings": {"mqtt": {"qos": 1, "retain": c.retained, "bindingVersion": "0.2.0"}},
        }
        messages[name] = {
            "contentType": "application/json",
            "payload": {
                "schemaFormat": "application/schema+json;version=draft-2020-12",
                "schema": {"$ref": f"#/components/schemas/{c.document.__name__}"},
            },
        }
    return {
        "asyncapi": "3.0.0",
        "info": {"title": "motekeep gateway", "version": version},
        "defaultContentType": "application/json",
        "channels": channels,
        "operations": operations,
        "components": {"messages": messages, "schemas": schemas["$defs"]},
    }
