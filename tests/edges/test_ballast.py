"""The file that only takes up room."""

from pathlib import Path

import pytest

from motekeep.edges.ballast import PLENTY, SLICES, Ballast, free_bytes

SIZE = 1 << 16


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "journal.db.ballast"


def test_it_takes_real_blocks_when_the_disk_has_plenty(path: Path) -> None:
    assert Ballast(path, SIZE).restore(PLENTY * SIZE)
    assert path.stat().st_size == SIZE
    assert path.stat().st_blocks * 512 >= SIZE


def test_it_is_not_laid_down_on_a_disk_that_could_miss_the_room(path: Path) -> None:
    ballast = Ballast(path, SIZE)
    assert not ballast.restore(PLENTY * SIZE - 1)
    assert not ballast.restore(None)
    assert not path.exists()


def test_it_goes_slice_by_slice_and_says_when_it_is_gone(path: Path) -> None:
    ballast = Ballast(path, SIZE)
    ballast.restore(1 << 40)
    left = []
    while ballast.give_back():
        left.append(ballast.left)
    assert left == [SIZE * (SLICES - n) // SLICES for n in range(1, SLICES + 1)]
    assert not path.exists()
    assert ballast.low


def test_half_of_it_gone_is_low(path: Path) -> None:
    ballast = Ballast(path, SIZE)
    ballast.restore(1 << 40)
    for _ in range(SLICES // 2 - 1):
        ballast.give_back()
    assert not ballast.low
    ballast.give_back()
    assert ballast.low


def test_a_part_of_it_is_made_whole_again(path: Path) -> None:
    ballast = Ballast(path, SIZE)
    ballast.restore(1 << 40)
    ballast.give_back()
    assert ballast.restore(1 << 40)
    assert path.stat().st_blocks * 512 >= SIZE


def test_a_folder_that_is_gone_is_no_error(tmp_path: Path) -> None:
    ballast = Ballast(tmp_path / "gone" / "ballast", SIZE)
    assert not ballast.restore(1 << 40)
    assert not ballast.give_back()
    assert free_bytes(tmp_path / "gone") is None
