"""The journal on a real file system that is full, fails, or comes back. Needs root and loop devices."""

from collections.abc import Iterator
from pathlib import Path

import pytest

from journal_site import MIB, Site
from loop_disk import LoopDisk, mounted, new_disk, why_not
from motekeep.errors import StoreError

pytestmark = [
    pytest.mark.whole,
    pytest.mark.skipif(why_not() is not None, reason=f"no real file system can be made full here: {why_not()}"),
]


@pytest.fixture
def disk(tmp_path: Path) -> Iterator[LoopDisk]:
    with new_disk(tmp_path, 40) as disk:
        yield disk


@pytest.fixture
def site(disk: LoopDisk) -> Iterator[Site]:
    site = Site(disk.mount / "a", max_bytes=64 * MIB, pad="a long reason " * 300)
    yield site
    site._abandon()


def ballast(site: Site) -> Path:
    return site.path.with_name("journal.db.ballast")


def test_the_ballast_carries_the_journal_over_a_full_disk(disk: LoopDisk, site: Site) -> None:
    site.minutes(20)
    assert ballast(site).stat().st_size == 4 * MIB
    disk.fill()
    assert disk.free() == 0
    site.minutes(80)  # some 0.8 MB, past what its log has room for
    assert ballast(site).stat().st_size < 4 * MIB
    state = site.journal.state()
    assert (state.in_memory, state.full, state.degraded, state.lost) == (0, False, None, {})
    site.restart()
    assert site.numbers() == list(range(1, 101))


def test_without_any_room_readings_go_out_from_memory_and_are_stored_when_there_is_some(
    disk: LoopDisk, site: Site
) -> None:
    site.minutes(5)
    disk.fill()
    ballast(site).unlink()
    disk.fill()
    site.minutes(120)
    state = site.journal.state()
    assert site.numbers("north") == site.numbers("south") == list(range(1, 126))
    assert state.full
    assert state.in_memory or "merged" in state.lost
    site.deliver_all()
    site.minute()
    assert site.numbers() == [126]
    disk.clear()
    site.minute()
    state = site.journal.state()
    assert (state.in_memory, state.degraded) == (0, None)
    site.restart()
    assert site.numbers() == [126, 127]
    assert site.journal.next_seq("north") == 128


def test_beside_others_that_keep_the_disk_full_the_journal_lives_within_its_pages(disk: LoopDisk, site: Site) -> None:
    disk.fill()
    for _ in range(10):
        site.minutes(20)
        site.deliver_all()
        disk.fill()
    state = site.journal.state()
    # delivered history made room, commit by commit; nothing had to wait in memory
    assert (state.in_memory, state.degraded) == (0, None)
    assert set(state.lost) == {"history"}
    site.minutes(5)
    site.restart()
    assert len(site.numbers()) == 5


def test_numbers_used_while_the_disk_was_full_are_not_used_again_after_a_kill(disk: LoopDisk, site: Site) -> None:
    site.minutes(3)
    disk.fill()
    ballast(site).unlink()
    disk.fill()
    site.minutes(400)
    used = site.journal.next_seq("north")
    site._abandon()
    disk.clear()
    site.start()
    assert site.journal.next_seq("north") >= used
    site.minute()
    assert site.numbers()[-1] >= used


def test_a_journal_that_starts_on_a_full_disk_starts(disk: LoopDisk, site: Site) -> None:
    site.minutes(3)
    site.reader.close()
    site.journal.close()
    disk.fill()
    site.start()
    site.minutes(3)
    assert site.numbers() == [1, 2, 3, 4, 5, 6]
    site.restart()
    assert site.numbers() == [1, 2, 3, 4, 5, 6]


def test_a_first_start_on_a_full_disk_says_so_and_works_once_there_is_room(disk: LoopDisk) -> None:
    disk.fill()
    with pytest.raises((StoreError, OSError)) as raised:
        Site(disk.mount, max_bytes=64 * MIB)
    assert isinstance(raised.value, StoreError)
    disk.clear()
    site = Site(disk.mount, max_bytes=64 * MIB)
    site.minute()
    assert site.numbers() == [1]
    site._abandon()


def test_a_failing_file_system_is_survived_in_memory_and_after_repair_nothing_acknowledged_is_lost(
    tmp_path: Path,
) -> None:
    with new_disk(tmp_path, 40) as disk:
        site = Site(disk.mount / "a", max_bytes=16 * MIB)
        site.minutes(10)
        disk.fail()
        site.minutes(5)
        assert site.numbers() == list(range(1, 16))
        state = site.journal.state()
        assert state.in_memory == 10
        assert "held in memory" in (state.degraded or "")
        site.journal.prune(site.clock.now())
        site._abandon()
        image = tmp_path / "kept.img"
        image.write_bytes(disk.image.read_bytes())
    with mounted(image, tmp_path / "again") as repaired:
        site.folder = repaired.mount / "a"
        site.start()
        assert site.numbers() == list(range(1, 11))
        site.minute()
        site._abandon()
