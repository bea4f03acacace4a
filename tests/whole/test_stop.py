"""SIGTERM keeps what was measured, says goodbye and is quick about it, whatever the broker does; SIGKILL is noticed."""

import sqlite3
import time
from itertools import pairwise
from pathlib import Path

import pytest

from mosquitto import free_port
from proxy import proxied
from whole_site import DaemonProcess, Gateway, gateway, readings, wait_for

pytestmark = pytest.mark.whole

INTERVAL_S = 10.0
STOP_S = 5.0  # what the issue allows between SIGTERM and the exit
TENTH_S = 0.06  # a reading tells its length to a tenth of a second


def spans(store: Path) -> list[tuple[int, float, float]]:
    """(seq, start, end) of every reading in the journal, read by a connection that cannot write."""
    try:
        connection = sqlite3.connect(f"file:{store}?mode=ro", uri=True)
        try:
            return connection.execute("SELECT seq, start, start + seconds FROM readings ORDER BY seq").fetchall()
        finally:
            connection.close()
    except sqlite3.OperationalError:  # no file, or no table in it yet
        return []


def stop_and_check(site: Gateway, daemon: DaemonProcess) -> None:
    """SIGTERM: exit code 0 in time, and the journal holds all time from the first reading to the stop."""
    asked = time.time()
    code, took_s = daemon.terminate()
    assert code == 0, daemon.log.read_text()
    assert took_s < STOP_S
    stored = spans(site.store)
    assert [seq for seq, *_ in stored] == list(range(1, len(stored) + 1))
    for (_, _, end), (_, start, _) in pairwise(stored):
        assert start == pytest.approx(end, abs=TENTH_S), "no time is left out between two readings"
    last_border = asked - asked % INTERVAL_S
    assert stored[-1][2] >= last_border - TENTH_S, "every closed interval is there"
    if asked - last_border > 1.5:  # less than a second is no reading
        assert stored[-1][2] > last_border + 1.0 - TENTH_S, "and what was measured of the one under way"


def test_sigterm_keeps_the_closed_intervals_says_offline_and_exits_in_time(tmp_path: Path) -> None:
    with gateway(tmp_path) as site:
        subscriber = site.subscribe()
        daemon = site.start_daemon()
        subscriber.wait_on("reading/north", lambda d: d["seq"] == 1)
        stop_and_check(site, daemon)
        assert subscriber.wait_on("health", lambda d: d["status"] == "offline")["boot"]
        assert daemon.events("link.closed")[0]["farewell"] is True


def test_sigterm_is_obeyed_in_time_while_the_broker_is_stalled(tmp_path: Path) -> None:
    with gateway(tmp_path) as site, proxied(site.mosquitto.port) as proxy:
        site.write_config(broker_port=proxy.port)
        subscriber = site.subscribe()
        daemon = site.start_daemon()
        subscriber.wait_on("reading/north", lambda d: d["seq"] == 1)
        proxy.stalled = True
        wait_for(lambda: len(spans(site.store)) > 1, "a reading that the broker cannot answer")
        stop_and_check(site, daemon)
        assert daemon.events("link.closed")[0]["farewell"] is False


def test_sigterm_is_obeyed_in_time_without_any_broker_and_the_next_life_delivers(tmp_path: Path) -> None:
    with gateway(tmp_path) as site:
        site.write_config(broker_port=free_port())
        daemon = site.start_daemon()
        wait_for(lambda: spans(site.store), "a reading in the journal")
        stop_and_check(site, daemon)
        kept = {seq for seq, *_ in spans(site.store)}
        subscriber = site.subscribe()
        site.write_config()
        site.start_daemon()
        assert subscriber.wait(lambda heard: kept <= {d["seq"] for _, d in readings(heard)})


def test_after_sigkill_the_broker_publishes_the_will_and_the_next_life_takes_it_back(tmp_path: Path) -> None:
    with gateway(tmp_path) as site:
        subscriber = site.subscribe()
        daemon = site.start_daemon()
        first = subscriber.wait_on("health", lambda d: d["status"] != "offline")
        daemon.kill()
        will = subscriber.wait_on("health", lambda d: d["status"] == "offline")
        assert will["boot"] == first["boot"], "which life it is about can be told"
        assert all(h.document["status"] != "offline" for h in subscriber.on("health")[:-1]), "it was not said before"
        site.start_daemon()
        again = subscriber.wait_on("health", lambda d: d.get("life") == 2)
        assert again["status"] != "offline"
