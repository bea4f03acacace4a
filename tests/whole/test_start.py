"""The daemon starts without its configuration, port, broker or disk, says so, and goes on by itself once it has it."""

import subprocess
from pathlib import Path
from typing import Any

import pytest

from motekeep.edges.journal_view import JournalView
from motekeep.loops.recorder import HEALTH
from whole_site import MOTEKEEP, Gateway, Subscriber, gateway, readings, wait_for

pytestmark = pytest.mark.whole

SPEED = 40.0  # findings open and close after minutes of the daemon's own time


def codes(document: dict[str, Any], sensor: str | None = None) -> dict[str, str]:
    """Open findings of a health document, code to evidence; of the gateway itself without a sensor."""
    part = document if sensor is None else document.get("sensors", {}).get(sensor, {})
    return {finding["code"]: finding["evidence"] for finding in part.get("findings") or []}


def status(site: Gateway) -> str:
    """What `motekeep status` says to somebody at the gateway."""
    command = [str(MOTEKEEP), "status", "--config", str(site.config)]
    return subprocess.run(command, capture_output=True, text=True, check=False, timeout=30).stdout


def told_at_the_gateway(site: Gateway) -> str:
    with JournalView(site.store) as view:
        return view.kept(HEALTH) or ""


def numbers(subscriber: Subscriber, sensor: str = "north") -> set[int]:
    return {d["seq"] for _, d in readings(subscriber.heard) if d["sensor"] == sensor}


def test_without_a_configuration_it_waits_says_so_and_starts_when_the_file_appears(tmp_path: Path) -> None:
    with gateway(tmp_path) as site:
        subscriber = site.subscribe()
        elsewhere = site.config.with_suffix(".away")
        site.config.rename(elsewhere)
        daemon = site.start_daemon()
        told = daemon.wait_event("config.failed")
        assert str(site.config) in str(told["error"])
        assert "no such file" in str(told["error"])
        assert daemon.running
        elsewhere.rename(site.config)
        assert subscriber.wait_on("health", lambda d: d["status"] != "offline")["gateway"] == "east-gate"
        assert daemon.events("config.recovered")


def test_without_its_port_it_says_so_and_reads_once_the_adapter_is_plugged_in(tmp_path: Path) -> None:
    with gateway(tmp_path, plugged=False, speed=SPEED) as site:
        subscriber = site.subscribe()
        daemon = site.start_daemon()
        told = daemon.wait_event("line.failed")
        assert told["port"] == str(tmp_path / "ports" / "north")
        assert "no such device" in str(told["error"])
        health = subscriber.wait_on("health", lambda d: "frames-missing" in codes(d, "north"))
        assert health["status"] == "failure"
        assert "port gone" in codes(health, "north")["frames-missing"]
        assert "no such device" in codes(health, "north")["frames-missing"]
        site.sensors.plug("north")
        subscriber.wait_on("reading/north", lambda d: d["frames"]["good"] >= 9 and "pm2_5" in d)
        subscriber.wait_on("finding", lambda d: d["code"] == "frames-missing" and d["event"] == "closed")
        assert daemon.events("line.recovered")
        assert daemon.running


def test_without_a_broker_it_keeps_the_record_says_so_at_the_gateway_and_sends_all_of_it_later(tmp_path: Path) -> None:
    with gateway(tmp_path, speed=SPEED) as site:
        subscriber = site.subscribe()
        site.mosquitto.stop()
        daemon = site.start_daemon()
        assert "not reachable" in str(daemon.wait_event("link.failed")["error"])
        wait_for(lambda: "uplink-lost" in told_at_the_gateway(site), "the finding in the journal's health document")
        assert "uplink-lost" in status(site)
        assert "uplink: not connected" in status(site)
        assert daemon.running
        site.mosquitto.start()
        assert "uplink-lost" in codes(subscriber.wait_on("health", lambda d: d["status"] != "offline"))
        assert subscriber.wait(lambda _: subscriber.on("late/north") and subscriber.on("reading/north"))
        live = subscriber.on("reading/north")[0].document
        first_live = live["seq"]
        assert first_live > 30
        assert subscriber.wait(lambda _: set(range(1, first_live)) <= numbers(subscriber)), "all of it comes, from 1 on"
        assert daemon.running


def test_without_its_disk_it_says_so_in_health_and_records_once_the_folder_is_there(tmp_path: Path) -> None:
    with gateway(tmp_path, speed=SPEED) as site:
        subscriber = site.subscribe()
        site.store.parent.rmdir()
        daemon = site.start_daemon()
        assert str(site.store) in str(daemon.wait_event("journal.failed")["error"])
        health = subscriber.wait_on("health", lambda d: "store-degraded" in codes(d))
        assert "No such file or directory" in codes(health)["store-degraded"]
        assert not numbers(subscriber), "a reading without a journal would have no number of its own"
        site.store.parent.mkdir()
        assert subscriber.wait(lambda _: {1, 2, 3} <= numbers(subscriber))
        subscriber.wait_on("finding", lambda d: d["code"] == "store-degraded" and d["event"] == "closed")
        assert daemon.running
