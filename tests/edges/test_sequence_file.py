"""The side file of used numbers: torn writes, exactness, one process at a time."""

from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from motekeep.edges.sequence_file import SLOT_BYTES, STRIDE, SequenceFile, Used


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "journal.db.seq"


def test_what_was_written_last_is_read_by_the_next_process(path: Path) -> None:
    file = SequenceFile(path)
    for last in range(1, 6):
        file.write(Used({"north": last, "south": 2 * last}, exact=bool(last % 2)))
        assert SequenceFile(path).read() == Used({"north": last, "south": 2 * last}, exact=bool(last % 2))


def test_nothing_is_known_before_the_first_writing(path: Path) -> None:
    assert SequenceFile(path).read() is None
    path.touch()
    assert SequenceFile(path).read() is None


@given(st.integers(0, SLOT_BYTES - 1), st.binary(min_size=1, max_size=300))
def test_a_torn_write_leaves_the_writing_before(
    tmp_path_factory: pytest.TempPathFactory, at: int, rubbish: bytes
) -> None:
    path = tmp_path_factory.mktemp("seq") / "s"
    file = SequenceFile(path)
    file.write(Used({"north": 1}))
    file.write(Used({"north": 2}))
    with path.open("r+b") as raw:
        raw.seek(at)  # the second writing is in the first slot
        raw.write(rubbish[: SLOT_BYTES - at])
    assert SequenceFile(path).read() in (Used({"north": 1}), Used({"north": 2}))


def test_both_slots_torn_is_no_knowledge_rather_than_a_wrong_one(path: Path) -> None:
    file = SequenceFile(path)
    file.write(Used({"north": 7}))
    file.write(Used({"north": 8}))
    path.write_bytes(path.read_bytes().replace(b'"north":', b'"north":1'))
    assert SequenceFile(path).read() is None


def test_a_new_process_goes_on_with_the_serial_of_the_one_before(path: Path) -> None:
    SequenceFile(path).write(Used({"north": 1}))
    second = SequenceFile(path)
    second.read()
    second.write(Used({"north": 2}))
    assert SequenceFile(path).read() == Used({"north": 2})


def test_the_file_never_changes_its_size(path: Path) -> None:
    file = SequenceFile(path)
    file.write(Used({"north": 1}))
    size = path.stat().st_size
    for last in range(40):
        file.write(Used({"north": 10**last}))
    assert path.stat().st_size == size == 2 * SLOT_BYTES
    assert path.stat().st_blocks * 512 >= size


def test_inexact_knowledge_skips_a_stride_and_exact_knowledge_nothing() -> None:
    assert Used({"north": 40}, exact=True).beyond("north") == 40
    assert Used({"north": 40}, exact=False).beyond("north") == 40 + STRIDE
    assert Used({"north": 40}, exact=False).beyond("south") == 0


def test_sixteen_sensors_with_the_longest_names_fit(path: Path) -> None:
    used = Used({f"{n:064d}": 10**9 for n in range(16)})
    SequenceFile(path).write(used)
    assert SequenceFile(path).read() == used


def test_one_process_holds_the_claim_until_it_lets_go(path: Path) -> None:
    first, second = SequenceFile(path), SequenceFile(path)
    assert first.claim()
    assert first.claim()
    assert not second.claim()
    first.release()
    assert second.claim()
    second.release()
