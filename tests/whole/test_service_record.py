"""`service add` beside a running daemon: what is typed is published and listed within seconds, and outlives SIGKILL."""

import json
import subprocess
from pathlib import Path

import pytest

from whole_site import MOTEKEEP, Gateway, gateway, wait_for

pytestmark = pytest.mark.whole


def service(site: Gateway, *words: str) -> str:
    command = [str(MOTEKEEP), "service", words[0], "--config", str(site.config), *words[1:]]
    return subprocess.run(command, check=True, capture_output=True, text=True, timeout=30.0).stdout


def states(site: Gateway) -> list[tuple[str, str]]:
    return [(line["kind"], line["state"]) for line in map(json.loads, service(site, "list", "--json").splitlines())]


def test_a_record_is_published_and_listed_and_marks_the_readings_around_it(tmp_path: Path) -> None:
    with gateway(tmp_path) as site:
        subscriber = site.subscribe()
        daemon = site.start_daemon()
        subscriber.wait_on("reading/north", lambda d: d["seq"] == 1)
        service(site, "add", "north", "cleaned", "--note", "dry air")
        told = subscriber.wait_on("service", lambda d: d["kind"] == "cleaned", 15.0)
        assert (told["schema"], told["sensor"], told["note"]) == ("motekeep/service/1", "north", "dry air")
        assert states(site) == [("cleaned", "recorded")]
        subscriber.wait_on("finding", lambda d: d["code"] == "service-visit" and d["event"] == "opened")
        amended = subscriber.wait_on("amend/north", lambda d: d["reasons"] == ["service-visit"])
        assert amended["flag"] == 3
        marked = subscriber.wait_on("reading/north", lambda d: "service-visit" in d["reasons"])
        assert marked["flag"] == 3
        wait_for(lambda: not list((site.store.parent / "service").iterdir()), "the spool is empty")
        daemon.kill()


def test_without_a_daemon_it_waits_and_the_next_one_takes_it_once(tmp_path: Path) -> None:
    with gateway(tmp_path) as site:
        service(site, "add", "north", "note")
        assert states(site) == [("note", "pending")]
        subscriber = site.subscribe()
        daemon = site.start_daemon()
        subscriber.wait_on("service", lambda d: d["kind"] == "note")
        daemon.kill()
        daemon = site.start_daemon()
        subscriber.wait_on("reading/north", lambda d: d["seq"] >= 2)
        assert states(site) == [("note", "recorded")]
        assert len({h.document["id"] for h in subscriber.on("service")}) == 1
        assert daemon.terminate()[0] == 0
