"""Makers for tests of rolls: offers, health and state as a fleet would say them."""

import json
from typing import Any

from emulated_fleet import document_text
from moteferry.roll.fleet import CalibrationState, Fleet
from moteferry.roll.offer import Offer, Target, offer_of
from motekeep.instant import rfc3339

NOW = 1_800_000_000.0
NORTH = Target("quarry", "east-gate", "north")


def offer(issue: int = 8, target: Target = NORTH, slope: float = 0.9) -> Offer:
    return offer_of(document_text(target, issue, slope).encode(), "signature")


def finding(code: str, category: str) -> dict[str, Any]:
    return {"code": code, "category": category, "since": rfc3339(NOW), "confidence": 1, "evidence": "", "remedy": ""}


def health(
    *findings: dict[str, Any], at: float = NOW, target: Target = NORTH, status: str = "normal", **more: Any
) -> dict[str, Any]:
    return {
        "status": status,
        "at": rfc3339(at),
        "next_by": rfc3339(at + 60),
        "clock": "synced",
        "sensors": {target.sensor: {"status": status, "findings": list(findings)}},
        "findings": [],
    } | more


def state(
    in_force: Offer | None = None,
    *,
    since: float = NOW,
    refused: dict[str, Any] | None = None,
    highest: int | None = None,
) -> dict[str, Any]:
    seat = None
    if in_force is not None:
        seat = {"issue": in_force.issue, "digest": in_force.digest, "signer": "operator", "since": rfc3339(since)}
        highest = highest or in_force.issue
    return {"at": rfc3339(NOW), "in_force": seat, "highest_issue": highest, "refused": refused}


def refusal(of: Offer, reason: str = "moves-too-far", *, at: float = NOW, withdrawn: bool = False) -> dict[str, Any]:
    own = {"issue": of.issue, "digest": of.digest}
    return {**own, "at": rfc3339(at), "reason": reason, "why": "by 90 %", "withdrawn": withdrawn}


def heard(
    *,
    health: dict[str, Any] | None = None,
    state: dict[str, Any] | None = None,
    target: Target = NORTH,
    now: float = NOW,
    retained: bool = True,
) -> Fleet:
    """A fleet that has said this of one target."""
    fleet = Fleet("motekeep", [target])
    place = f"motekeep/{target.site}/{target.gateway}"
    for topic, document in ((f"{place}/health", health), (f"{place}/calibration/{target.sensor}/state", state)):
        if document is not None:
            assert list(fleet.hear(topic, json.dumps(document).encode(), retained=retained, now=now)) == [target]
    return fleet


def state_of(document: dict[str, Any]) -> CalibrationState:
    return CalibrationState.model_validate_json(json.dumps(document))
