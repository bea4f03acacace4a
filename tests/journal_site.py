"""A gateway for the journal's tests: makes readings, keeps a journal, and can lose its power.

Numbers are our own invention. `power_cut` carries on with a copy of the files as they are on the disk at that moment,
the log not checkpointed: what a killed process leaves behind.
"""

import shutil
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path

from clocks import FakeClock
from motekeep.edges.journal import Journal, JournalSettings
from motekeep.edges.journal_reader import Reader
from motekeep.edges.ports import Batch, NewReading, Notice, Row
from motekeep.instant import rfc3339
from motekeep.message.documents import FramesDocument, ReadingDocument, ValueDocument
from motekeep.message.topics import Topics

TOPICS = Topics("motekeep", "quarry", "east-gate")
MIB = 1 << 20


@contextmanager
def ram_folder() -> Iterator[Path]:
    """A folder in memory where there is one: hundreds of durable commits then take no time. What a power cut or a full
    disk does is tested on real file systems, in `test_journal_disk.py` and `tools/bench/powercut.py`."""
    shared = Path("/dev/shm")
    with tempfile.TemporaryDirectory(prefix="motekeep-", dir=shared if shared.is_dir() else None) as folder:
        yield Path(folder)


def document(sensor: str, seq: int, start: float, **changes: object) -> ReadingDocument:
    """A reading of 60 s with plain figures; `changes` by field name."""
    fields: dict[str, object] = {
        "schema": "motekeep/reading/1",
        "site": "quarry",
        "gateway": "east-gate",
        "sensor": sensor,
        "seq": seq,
        "start": rfc3339(start),
        "seconds": 60,
        "clock": "synced",
        "boot": "b" * 32,
        "boot_s": 100.0,
        "pm1": ValueDocument(raw=5.1, value=4.0, u=0.9),
        "pm2_5": ValueDocument(raw=7.9, value=6.2, u=1.4),
        "pm10": ValueDocument(raw=9.4, value=7.7, u=2.1),
        "unit": "ug/m3",
        "k": 1,
        "counts_per_dL": {"0.3": 1421.0, "0.5": 392.0, "1.0": 61.0, "2.5": 4.4, "5.0": 0.6, "10": 0.1},
        "frames": FramesDocument(good=60, bad=0, missing=0),
        "flag": 2,
        "reasons": ["uncalibrated"],
    }
    return ReadingDocument.model_validate(fields | changes)


def new_reading(made: ReadingDocument, start: float) -> NewReading:
    return NewReading(
        made.sensor, made.seq, made.boot, made.boot_s, start, made.seconds, made.clock, made.flag, made.json_text()
    )


@dataclass
class Site:
    """`minute` lets a minute pass and commits a reading of every sensor, as the recorder would."""

    folder: Path
    sensors: tuple[str, ...] = ("north", "south")
    max_bytes: int = 16 * MIB
    keep_days: int = 400
    clock_wait_s: float = 900.0
    step_s: int = 60
    pad: str = ""
    clock: FakeClock = field(default_factory=FakeClock)
    cuts: int = 0

    def __post_init__(self) -> None:
        self.folder.mkdir(parents=True, exist_ok=True)
        self.journal = self._open()

    @property
    def path(self) -> Path:
        return self.folder / "journal.db"

    def _open(self) -> Journal:
        settings = JournalSettings(self.path, TOPICS, self.keep_days, self.max_bytes, self.clock_wait_s)
        journal = Journal(settings, self.clock)
        self.reader: Reader = journal.reader()
        return journal

    def reading(self, sensor: str, **changes: object) -> NewReading:
        """The reading of the minute (or what `step_s` says) that has just passed."""
        at = self.clock.now()
        clock = "synced" if at.trusted else "unsynced"
        start = at.utc - self.step_s
        base: dict[str, object] = {
            "clock": clock,
            "boot": at.boot_id,
            "boot_s": round(at.boot_s - self.step_s, 1),
            "seconds": self.step_s,
        }
        if self.pad:
            base["reasons"] = [self.pad]
        made = document(sensor, self.journal.next_seq(sensor), start, **(base | changes))
        return new_reading(made, start)

    def minute(self, *notices: Notice, keep: dict[str, str] | None = None, **changes: object) -> list[NewReading]:
        self.clock.advance(self.step_s)
        readings = [self.reading(sensor, **changes) for sensor in self.sensors]
        self.journal.commit(Batch(readings, notices, keep or {}), self.clock.now())
        return readings

    def minutes(self, count: int, **changes: object) -> None:
        for _ in range(count):
            self.minute(**changes)

    def waiting(self, sensor: str = "north", limit: int = 100_000) -> list[Row]:
        return self.reader.waiting(sensor, 0, limit)

    def numbers(self, sensor: str = "north") -> list[int]:
        """Every number that waiting readings stand for, in the order in which they would go out."""
        return [n for row in self.waiting(sensor) for n in range(row.from_seq, row.seq + 1)]

    def deliver(self, sensor: str = "north", limit: int = 100_000) -> list[Row]:
        rows = self.waiting(sensor, limit)
        self.reader.mark_delivered(rows)
        return rows

    def deliver_all(self) -> None:
        for sensor in self.sensors:
            self.deliver(sensor)

    def restart(self) -> None:
        """A clean stop and start."""
        self.reader.close()
        self.journal.close()
        self.journal = self._open()

    def power_cut(self) -> None:
        """The process dies where it stands; the next one finds the files as they are."""
        self.cuts += 1
        after = self.folder.parent / f"{self.folder.name}-{self.cuts}"
        after.mkdir()
        for file in self.folder.iterdir():
            if not file.name.endswith("-shm"):  # memory shared by processes: gone with the power
                shutil.copy(file, after / file.name)
        self._abandon()
        self.folder = after
        self.journal = self._open()

    def die(self) -> None:
        """The process dies, nothing is opened yet: the files may now be damaged."""
        self.cuts += 1
        after = self.folder.parent / f"{self.folder.name}-{self.cuts}"
        shutil.copytree(self.folder, after)
        self._abandon()
        self.folder = after

    def start(self) -> None:
        self.journal = self._open()

    def _abandon(self) -> None:
        """Let go of the old files without writing a byte into the copied ones."""
        self.reader.close()
        self.journal._file.close()
        self.journal._file.release()
