"""The access rules that we ship for the broker: against the topic tree, and in a real mosquitto."""

import inspect
import socket
import subprocess
import threading
from collections.abc import Iterator
from pathlib import Path

import paho.mqtt.client as mqtt
import pytest
from paho.mqtt.enums import CallbackAPIVersion
from paho.mqtt.subscribeoptions import SubscribeOptions

from motekeep.message.topics import Topics

ACL = Path(__file__).parents[2] / "systemd/mosquitto-acl.example"
OURS = "motekeep/quarry/east-gate"
OTHERS = "motekeep/quarry/west-gate"

# The topic tree: what the device writes, what comes to it.
MADE = ["reading/north", "late/north", "amend/north", "hourly/north", "health", "finding", "service"]
MADE += ["calibration/north/state"]
MEANT = ["calibration/north/offer", "resend", "taken/north"]


def rules(user: str | None) -> list[tuple[str, str]]:
    """(access, topic) of a user's section, or of the patterns for all (None), with %u filled in for our gateway."""
    section, found = None, []
    for line in ACL.read_text().splitlines():
        match line.split():
            case ["user", name]:
                section = name
            case ["pattern", access, topic] if user is None:
                found.append((access, topic.replace("%u", "quarry/east-gate")))
            case ["topic", access, topic] if section == user and user is not None:
                found.append((access, topic))
    return found


def allows(user: str | None, access: str, topic: str) -> bool:
    return any(
        given in (access, "readwrite") and mqtt.topic_matches_sub(pattern, topic) for given, pattern in rules(user)
    )


class TestTree:
    def test_every_topic_of_the_code_is_written_or_read_by_the_gateway(self) -> None:
        topics = Topics("motekeep", "quarry", "east-gate")
        spelled = []
        for name, member in inspect.getmembers(Topics):
            if name.startswith("_") or name in ("root", "site", "gateway"):
                continue
            value = getattr(topics, name)
            spelled.append(value("north") if inspect.isfunction(member) else value)

        assert len(spelled) >= 8
        assert [t for t in spelled if not allows(None, "write", t) and not allows(None, "read", t)] == []

    def test_the_gateway_has_exactly_the_ways_of_the_design(self) -> None:
        every = MADE + MEANT

        assert [t for t in every if allows(None, "write", f"{OURS}/{t}")] == MADE
        assert [t for t in every if allows(None, "read", f"{OURS}/{t}")] == MEANT

    def test_nothing_is_allowed_in_the_tree_of_another_gateway(self) -> None:
        ways = [(access, t) for access in ("read", "write") for t in MADE + MEANT]

        assert [way for way in ways if allows(None, way[0], f"{OTHERS}/{way[1]}")] == []

    @pytest.mark.parametrize("user", ["operator", "archive", "viewer"])
    def test_people_read_all_and_write_nothing_in_a_gateways_name(self, user: str) -> None:
        assert all(allows(user, "read", f"{OURS}/{t}") for t in MADE + MEANT)
        assert [t for t in MADE if allows(user, "write", f"{OURS}/{t}")] == []


@pytest.fixture
def broker(tmp_path: Path) -> Iterator[int]:
    """A mosquitto with our rules; anybody may claim any name, since passwords are not what is tested."""
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        port = free.getsockname()[1]
    acl = tmp_path / "acl"
    acl.write_text(ACL.read_text())
    acl.chmod(0o644)
    config = tmp_path / "mosquitto.conf"
    config.write_text(f"listener {port} 127.0.0.1\nallow_anonymous true\nuser root\nacl_file {acl}\n")
    with subprocess.Popen(["mosquitto", "-c", config], stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL) as process:
        for _ in range(200):
            with socket.socket() as probe:
                if probe.connect_ex(("127.0.0.1", port)) == 0:
                    break
            threading.Event().wait(0.05)
        yield port
        process.terminate()


class Somebody:
    """A client under a name; collects what it is sent."""

    def __init__(self, port: int, name: str) -> None:
        self.got: list[str] = []
        self._acknowledged: dict[int, bool] = {}
        self._changed = threading.Condition()
        self._client = mqtt.Client(CallbackAPIVersion.VERSION2, protocol=mqtt.MQTTv5)
        self._client.username_pw_set(name)
        self._client.on_message = lambda _client, _data, message: self._keep(message.topic)
        self._client.on_publish = lambda _client, _data, mid, reason, _properties: self._acknowledge(
            mid, not reason.is_failure
        )
        self._subscribed = threading.Event()
        self._client.on_subscribe = lambda *_: self._subscribed.set()
        self._client.connect("127.0.0.1", port)
        self._client.loop_start()
        # as sent by others, not by itself
        self._client.subscribe("motekeep/#", options=SubscribeOptions(qos=1, noLocal=True))
        assert self._subscribed.wait(10)

    def _keep(self, topic: str) -> None:
        with self._changed:
            self.got.append(topic)
            self._changed.notify_all()

    def _acknowledge(self, mid: int, taken: bool) -> None:
        with self._changed:
            self._acknowledged[mid] = taken
            self._changed.notify_all()

    def publish(self, topic: str) -> bool:
        """Whether the broker took it."""
        mid = self._client.publish(topic, "{}", qos=1).mid
        with self._changed:
            assert self._changed.wait_for(lambda: mid in self._acknowledged, 10)
            return self._acknowledged[mid]

    def heard(self, last: str) -> list[str]:
        """All it was sent, up to `last`."""
        with self._changed:
            assert self._changed.wait_for(lambda: last in self.got, 10)
            return [topic for topic in self.got if topic != last]

    def leave(self) -> None:
        self._client.disconnect()
        self._client.loop_stop()


@pytest.mark.whole
def test_a_real_broker_takes_and_hands_out_exactly_that(broker: int) -> None:
    gateway, operator, archive = (Somebody(broker, name) for name in ("quarry/east-gate", "operator", "archive"))
    try:
        every = MADE + MEANT
        assert [t for t in every if gateway.publish(f"{OURS}/{t}")] == MADE
        assert [t for t in every if gateway.publish(f"{OTHERS}/{t}")] == []
        assert [t for t in every if operator.publish(f"{OURS}/{t}")] == ["calibration/north/offer", "resend"]
        assert [t for t in every if archive.publish(f"{OURS}/{t}")] == ["resend", "taken/north"]
        assert operator.publish(f"{OTHERS}/resend")
        assert operator.publish(f"{OURS}/calibration/last/offer")

        heard = gateway.heard(f"{OURS}/calibration/last/offer")
        assert sorted(set(heard)) == sorted(f"{OURS}/{t}" for t in MEANT)
        assert set(operator.got) >= {f"{OURS}/{t}" for t in MADE}
    finally:
        for somebody in (gateway, operator, archive):
            somebody.leave()
