"""A fleet of light gateways at message level, all spoken for by one client; and signed documents for them.

A gateway keeps the rules that a roll depends on: retained health and calibration state, an issue above the highest ever
accepted, the answer on the state topic. It measures nothing and verifies no signature. Some misbehave on request.
"""

import json
import subprocess
import threading
import time
from collections.abc import Iterable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path

import paho.mqtt.client as mqtt
from paho.mqtt.enums import CallbackAPIVersion

from moteferry.roll.offer import Target
from motekeep.instant import rfc3339
from motekeep.measure.document import digest
from motekeep.measure.document_text import parse
from motekeep.message.topics import Topics

ROOT = "motekeep"
PATIENCE_S = 15.0

# What a gateway may do instead of accepting and staying well.
BEHAVIOURS = ("well", "refuses", "fails", "silent", "withdraws", "flags")


@dataclass(slots=True)
class Gateway:
    """One sensor on one gateway. `offers` are (issue, digest) of each offer that came, doubles included."""

    target: Target
    behaviour: str = "well"
    status: str = "normal"
    findings: list[dict[str, object]] = field(default_factory=list)
    in_force: tuple[int, str] | None = None
    since: float = 0.0
    highest: int = 0
    refused: dict[str, object] | None = None
    offers: list[tuple[int, str]] = field(default_factory=list)

    def health(self, every_s: float = 60.0) -> dict[str, object]:
        now = time.time()
        return {
            "schema": "motekeep/health/1",
            "site": self.target.site,
            "gateway": self.target.gateway,
            "status": self.status,
            "at": rfc3339(now),
            "next_by": rfc3339(now + every_s),
            "clock": "synced",
            "sensors": {self.target.sensor: {"status": self.status, "findings": self.findings}},
            "findings": [],
        }

    def state(self) -> dict[str, object]:
        seat = None
        if self.in_force is not None:
            seat = {"issue": self.in_force[0], "digest": self.in_force[1], "signer": "operator", "key": None}
            seat |= {"since": rfc3339(self.since), "by": "offer", "valid_until": "2100-01-01T00:00:00Z"}
        return {
            "schema": "motekeep/calibration/1",
            **self.target._asdict(),
            "at": rfc3339(time.time()),
            "in_force": seat,
            "highest_issue": self.highest or None,
            "soak_until": None,
            "refused": self.refused,
        }

    def take(self, document: bytes) -> None:
        """What the rules of a device make of an offer."""
        parsed = parse(document)
        own = digest(document)
        self.offers.append((parsed.issue, own))
        if self.in_force is not None and self.in_force[1] == own:
            return
        if self.behaviour == "refuses":
            self._refuse(parsed.issue, own, "too-far", "it moves readings by 90 %")
        elif parsed.issue <= self.highest:
            self._refuse(parsed.issue, own, "old-issue", f"issue {self.highest} was accepted before")
        else:
            self.before = self.in_force
            self.in_force, self.highest, self.since = (parsed.issue, own), parsed.issue, time.time()

    def withdraw(self, before: tuple[int, str] | None) -> None:
        assert self.in_force is not None
        self._refuse(*self.in_force, "withdrawn", "readings became invalid", withdrawn=True)
        self.in_force, self.since = before, time.time()

    def fail(self, code: str = "calibration-out-of-range", category: str = "out_of_specification") -> None:
        self.status = category
        self.findings = [
            {"code": code, "category": category, "since": rfc3339(time.time())}
            | {"confidence": 1.0, "evidence": "emulated", "remedy": "none"}
        ]

    def reading(self, flag: int) -> dict[str, object]:
        provenance = {"issue": self.in_force[0], "digest": self.in_force[1]} if self.in_force else None
        return {"schema": "motekeep/reading/1", "flag": flag, "reasons": ["limits-fail"], "calibration": provenance}

    def _refuse(self, issue: int, own: str, reason: str, why: str, *, withdrawn: bool = False) -> None:
        at = rfc3339(time.time())
        self.refused = {"at": at, "issue": issue, "digest": own, "reason": reason, "why": why, "withdrawn": withdrawn}

    before: tuple[int, str] | None = None


class EmulatedFleet:
    """All gateways behind one MQTT client. Callbacks run on its network thread, under `lock`."""

    def __init__(self, port: int, gateways: Iterable[Gateway]) -> None:
        self.gateways: Mapping[Target, Gateway] = {gateway.target: gateway for gateway in gateways}
        self.lock = threading.Lock()
        self._subscribed = threading.Event()
        self._client = mqtt.Client(CallbackAPIVersion.VERSION2, "emulated-fleet", protocol=mqtt.MQTTv5)
        self._client.max_inflight_messages_set(100)
        self._client.on_connect = lambda client, *_: client.subscribe(f"{ROOT}/+/+/calibration/+/offer", qos=1)
        self._client.on_subscribe = lambda *_: self._subscribed.set()
        self._client.on_message = self._offered
        self._client.connect("127.0.0.1", port)

    @contextmanager
    def running(self) -> Iterator["EmulatedFleet"]:
        self._client.loop_start()
        try:
            assert self._subscribed.wait(PATIENCE_S)
            sent = []
            for gateway in self.gateways.values():
                sent += [self.say_health(gateway), self.say_state(gateway)]
            for info in sent:
                info.wait_for_publish(PATIENCE_S)
            yield self
        finally:
            self._client.disconnect()
            self._client.loop_stop()

    def say_health(self, gateway: Gateway, every_s: float = 60.0) -> mqtt.MQTTMessageInfo:
        return self._say(self._topics(gateway).health, gateway.health(every_s), retain=True)

    def say_state(self, gateway: Gateway) -> mqtt.MQTTMessageInfo:
        topic = self._topics(gateway).calibration_state(gateway.target.sensor)
        return self._say(topic, gateway.state(), retain=True)

    def say_reading(self, gateway: Gateway, flag: int) -> mqtt.MQTTMessageInfo:
        return self._say(self._topics(gateway).reading(gateway.target.sensor), gateway.reading(flag), retain=False)

    def _topics(self, gateway: Gateway) -> Topics:
        return Topics(ROOT, gateway.target.site, gateway.target.gateway)

    def _say(self, topic: str, document: object, *, retain: bool) -> mqtt.MQTTMessageInfo:
        return self._client.publish(topic, json.dumps(document), qos=1, retain=retain)

    def _offered(self, _client: mqtt.Client, _userdata: object, message: mqtt.MQTTMessage) -> None:
        _, site, gateway_name, _, sensor, _ = message.topic.split("/")
        gateway = self.gateways.get(Target(site, gateway_name, sensor))
        if gateway is None or not message.payload:
            return
        with self.lock:
            gateway.take(json.loads(message.payload)["document"].encode())
            accepted = gateway.in_force is not None and gateway.in_force == gateway.offers[-1]
            if gateway.behaviour == "silent":
                return
            self.say_state(gateway)
            if not accepted:
                return
            match gateway.behaviour:
                case "fails":
                    gateway.fail()
                    self.say_health(gateway)
                case "withdraws":
                    gateway.withdraw(gateway.before)
                    self.say_state(gateway)
                case "flags":
                    for _ in range(2):
                        self.say_reading(gateway, 4)
                case "well":
                    self.say_health(gateway)


def document_text(target: Target, issue: int, slope: float = 0.92) -> str:
    """A document that any device could take."""
    return f"""issue = {issue}
site = "{target.site}"
gateway = "{target.gateway}"
sensor = "{target.sensor}"
made_at = 2026-01-20T10:00:00Z
valid_from = 2026-01-20T12:00:00Z
valid_until = 2099-01-20T00:00:00Z

[range]
pm2_5 = [0.0, 150.0]

[[step]]
kind = "linear"
slope = {{ value = {slope}, u = 0.03 }}
offset = {{ value = 0.4, u = 0.2 }}

[residual]
pm2_5 = {{ u = 0.8, relative = 0.05 }}
"""


def make_key(folder: Path) -> Path:
    key = folder / "key"
    subprocess.run(["ssh-keygen", "-q", "-t", "ed25519", "-N", "", "-f", str(key)], check=True)
    return key


def write_signed(folder: Path, key: Path, documents: Mapping[Target, str]) -> list[Path]:
    """A file and its signature each; `ssh-keygen` signs many in one run."""
    folder.mkdir(parents=True, exist_ok=True)
    paths = []
    for target, text in documents.items():
        path = folder / f"{'-'.join(target)}-{parse(text.encode()).issue}.toml"
        path.write_text(text)
        paths.append(path)
    for start in range(0, len(paths), 200):
        some = [str(path) for path in paths[start : start + 200]]
        command = ["ssh-keygen", "-q", "-Y", "sign", "-n", "calibration@motekeep", "-f", str(key), *some]
        subprocess.run(command, check=True, capture_output=True)
    return paths
