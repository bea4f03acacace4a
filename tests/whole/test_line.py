"""A sensor that is unplugged and plugged in again, at the real serial edge."""

from pathlib import Path

import pytest

from whole_site import gateway

pytestmark = pytest.mark.whole


def test_unplugging_opens_frames_missing_and_plugging_in_again_closes_it(tmp_path: Path) -> None:
    with gateway(tmp_path, ("north", "south"), speed=40.0) as site:
        subscriber = site.subscribe()
        daemon = site.start_daemon()
        subscriber.wait_on("reading/north", lambda d: d["frames"]["good"] >= 9)
        site.sensors.unplug("north")
        opened = subscriber.wait_on("finding", lambda d: d["code"] == "frames-missing")
        assert (opened["event"], opened["sensor"], opened["category"]) == ("opened", "north", "failure")
        assert "port gone" in str(opened["evidence"])
        subscriber.wait_on("health", lambda d: d["status"] == "failure")
        subscriber.wait_on("reading/north", lambda d: d["flag"] == 9 and d["frames"]["missing"] >= 9)
        site.sensors.plug("north")
        closed = subscriber.wait_on("finding", lambda d: d["code"] == "frames-missing" and d["event"] == "closed")
        assert closed["sensor"] == "north"
        assert subscriber.wait(lambda _: subscriber.on("health")[-1].document["status"] == "normal")
        last = subscriber.on("reading/north")[-1].document
        assert last["frames"]["good"] >= 9
        gone = [d for d in (h.document for h in subscriber.on("finding")) if d["sensor"] == "south"]
        assert not [d for d in gone if d["code"] != "warming-up"], "its neighbour has nothing to do with it"
        assert daemon.running
