"""A calibration installed while the power goes: does the device always start with the old or the new document, whole?

A real daemon on a real broker gets a new signed document, one issue after the other, and SIGKILL at a random moment of
its installation; then it is started again, and everything that tells what is in force is compared: the state that it
publishes, the journal, the pair in front of the folder and the one that is kept, both verified by `ssh-keygen`, and the
readings. It must be all of the old document or all of the new one. The offers are not retained and of QoS 0, so that a
start shows what the kill left and not what the broker repeats.

Half of the kills fall evenly into the time that an installation takes, half right behind the first file that it writes:
the change itself lasts some ten milliseconds of it.

    tools/bench/install_kill.py --kills 200
"""

import argparse
import random
import sqlite3
import sys
import tempfile
import time
from collections import Counter
from contextlib import ExitStack
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parents[2]
sys.path[:0] = [str(ROOT / "tests"), str(Path(__file__).parent), str(ROOT / "agent")]

from outage import Nursery  # noqa: E402

from calibration_site import Calibrated, accepted, document, state_when  # noqa: E402  (the paths above come first)
from fast_daemon import EPOCH  # noqa: E402
from motekeep.edges.signers import Signers  # noqa: E402
from motekeep.instant import from_rfc3339  # noqa: E402
from motekeep.measure.document import digest  # noqa: E402
from motekeep.message.calibration_record import CalibrationRecord, recalled, record_name  # noqa: E402
from whole_site import Subscriber, boot_s, gateway, readings  # noqa: E402

SPEED = 10.0
# From the offer to the end of its installation on this clock; the bulk is the wait for the next turn.
WHOLE_S = 0.6
# The change itself, from its first file to the last.
CHANGE_S = 0.02
PATIENCE_S = 30.0
STATE = "calibration/north/state"


@dataclass
class Tally:
    """`old` and `new`: what the starts began with; `wrong`: what was neither, in words. `inside`: kills that left the
    new files on the shelf and the old document in force, or the new one in force and the old pair in front."""

    old: int = 0
    new: int = 0
    inside: int = 0
    wrong: list[str] = field(default_factory=list)
    reasons: Counter[str] = field(default_factory=Counter)


def record_of(store: Path) -> CalibrationRecord | None:
    connection = sqlite3.connect(f"file:{store}?mode=ro", uri=True)
    try:
        row = connection.execute("SELECT value FROM kept WHERE name = ?", (record_name("north"),)).fetchone()
    finally:
        connection.close()
    return None if row is None else recalled(row[0])


class Campaign:
    def __init__(self, site: Calibrated, subscriber: Subscriber, nursery: Nursery, rng: random.Random) -> None:
        self._site = site
        self._subscriber = subscriber
        self._nursery = nursery
        self._rng = rng
        self._issue = 1
        self.tally = Tally()
        self._current = document(1, 0.8)

    def play(self, kills: int) -> Tally:
        self._nursery.start()
        self._subscriber.wait_on("reading/north", lambda d: d["seq"] >= 4)
        self._site.offer(self._site.signed(self._current), retain=False, qos=0)
        accepted(self._subscriber, self._current)
        for n in range(kills):
            self._cut(n)
        self._nursery.stop()
        return self.tally

    def _cut(self, n: int) -> None:
        self._issue += 1
        old, new = self._current, document(self._issue, round(self._rng.uniform(0.7, 1.0), 3))
        payload = self._site.signed(new)
        files = self._files()
        self._site.offer(payload, retain=False, qos=0)
        if n % 2:
            deadline = time.monotonic() + PATIENCE_S
            while self._files() == files and time.monotonic() < deadline:
                pass  # the change is short: a wait would miss it
            time.sleep(self._rng.uniform(0.0, CHANGE_S))
        else:
            time.sleep(self._rng.uniform(0.0, WHOLE_S))
        self._nursery.kill()
        record, front = record_of(self._site.site.store), self._site.front
        shelved = (self._site.folder / "kept" / "north" / f"{digest(new)[7:]}.toml").exists()
        began = record.in_force if record is not None else None
        self.tally.inside += (began == digest(old) and shelved) or (began == digest(new) and front == old)
        killed_utc = EPOCH + SPEED * boot_s()
        self._nursery.start()
        self._judge(n, old, new, self._state_after(killed_utc))

    def _files(self) -> list[str]:
        return sorted(path.name for path in (self._site.folder / "kept" / "north").iterdir())

    def _state_after(self, utc: float) -> dict[str, Any]:
        """The first state of a start: what the dead one has said may still be on its way. Any: JSON."""
        return self._subscriber.wait_on(STATE, lambda state: from_rfc3339(state["at"]) >= utc, PATIENCE_S)

    def _judge(self, n: int, old: bytes, new: bytes, state: dict[str, Any]) -> None:
        told = state["in_force"]["digest"] if state["in_force"] else None
        whole = {digest(old): old, digest(new): new}
        if told not in whole:
            self.tally.wrong.append(f"kill {n}: in force is {told}")
            return
        text = self._current = whole[told]
        self.tally.old += text == old
        self.tally.new += text == new
        self.tally.reasons[str((state["refused"] or {}).get("reason"))] += 1
        record = record_of(self._site.site.store)
        kept = self._site.folder / "kept" / "north" / f"{told[7:]}.toml"
        signers = Signers(self._site.signers)
        front = self._site.folder / "north.toml"
        for path in (kept, front):
            if path.read_bytes() != text:
                self.tally.wrong.append(f"kill {n}: {path} is another document than the one in force")
                return
            signers.verify(path.read_bytes(), path.with_name(path.name + ".sig").read_bytes(), None)
        issue = state["in_force"]["issue"]
        if record is None or record.in_force != told or state["highest_issue"] != issue:
            self.tally.wrong.append(f"kill {n}: journal and state differ: {record}")
        if leftover := [name for name in self._files() if not name.endswith((".toml", ".toml.sig"))]:
            self.tally.wrong.append(f"kill {n}: half a file is left: {leftover}")


def mixed(subscriber: Subscriber) -> list[int]:
    """Readings whose figure is not raw times the slope of the document that they name; there must be none."""
    wrong = []
    for _, reading in readings(subscriber.heard):
        value, calibration = reading.get("pm2_5"), reading.get("calibration")
        if calibration is None or not value or value["value"] is None or not value["raw"]:
            continue
        issue = calibration["issue"]
        states = (h.document["in_force"] for h in subscriber.on(STATE))
        if not any(s and (s["issue"], s["digest"]) == (issue, calibration["digest"]) for s in states):
            wrong.append(reading["seq"])
    return wrong


def run(folder: Path, kills: int, seed: int) -> tuple[Tally, list[int]]:
    with ExitStack() as stack:
        one = stack.enter_context(gateway(folder, speed=SPEED))
        site = Calibrated(one, soak_s=30)
        subscriber = one.subscribe()
        nursery = Nursery(one.config, SPEED, folder / "motekeep.log")
        stack.callback(nursery.close)
        tally = Campaign(site, subscriber, nursery, random.Random(seed)).play(kills)
        state_when(subscriber, lambda s: s["in_force"])
        return tally, mixed(subscriber)


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--kills", type=int, default=200)
    parser.add_argument("--seed", type=int, default=None, help="of the moments; printed, and at random without it")
    arguments = parser.parse_args()
    seed = random.randrange(1_000_000) if arguments.seed is None else arguments.seed
    began = time.monotonic()
    with tempfile.TemporaryDirectory(prefix="motekeep-install-") as name:
        tally, strange = run(Path(name), arguments.kills, seed)
    print(f"seed {seed}, {arguments.kills} kills in {time.monotonic() - began:.0f} s")
    print(f"started with the old document {tally.old} times, with the new one {tally.new} times")
    print(f"kills inside of the change itself: {tally.inside}")
    print(f"neither, or not whole: {len(tally.wrong)}; readings of a document that was never in force: {len(strange)}")
    for line in tally.wrong[:20]:
        print(line)
    return 1 if tally.wrong or strange or tally.old + tally.new != arguments.kills else 0


if __name__ == "__main__":
    sys.exit(main())
