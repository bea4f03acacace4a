"""The calibration folder: accepted documents are kept whole under the name of their content, one pair is in front."""

from pathlib import Path

import pytest

from motekeep.edges.shelf import Shelf
from motekeep.errors import StoreError
from motekeep.measure.document import digest
from motekeep.measure.document_text import LARGEST_BYTES
from signed_gateway import document

ONE, TWO = document(1), document(2)


@pytest.fixture
def shelf(tmp_path: Path) -> Shelf:
    return Shelf(tmp_path / "calibration", "quarry", "gate")


def test_what_is_kept_comes_back_with_its_signature(shelf: Shelf) -> None:
    shelf.keep("north", ONE, b"signature of one")
    shelf.keep("north", TWO, b"signature of two")
    assert shelf.kept("north", digest(ONE)) == (ONE, b"signature of one")
    assert sorted(shelf.all_kept("north")) == sorted([(ONE, b"signature of one"), (TWO, b"signature of two")])
    assert shelf.kept("south", digest(ONE)) is None


def test_a_kept_file_that_has_changed_is_not_there(shelf: Shelf, tmp_path: Path) -> None:
    shelf.keep("north", ONE, b"s")
    [path] = (tmp_path / "calibration/kept/north").glob("*.toml")
    path.write_bytes(ONE[:-1])
    assert shelf.kept("north", digest(ONE)) is None
    assert shelf.all_kept("north") == []


def test_showing_a_pair_is_no_change_that_somebody_else_has_made(shelf: Shelf) -> None:
    assert shelf.changed("north")
    shelf.keep("north", ONE, b"s")
    shelf.show("north", ONE, b"s")
    assert not shelf.changed("north")
    assert shelf.shown("north") == (ONE, b"s")
    found = shelf.in_force("north")
    assert found is not None
    assert found.issue == 1
    shelf.hide("north")
    assert not shelf.changed("north")
    assert shelf.shown("north") is None


def test_a_signature_that_comes_later_is_a_change(shelf: Shelf, tmp_path: Path) -> None:
    (tmp_path / "calibration").mkdir()
    (tmp_path / "calibration/north.toml").write_bytes(ONE)
    assert shelf.changed("north")
    assert shelf.shown("north") == (ONE, b"")
    (tmp_path / "calibration/north.toml.sig").write_bytes(b"s")
    assert shelf.changed("north")
    assert shelf.shown("north") == (ONE, b"s")


def test_pruning_leaves_what_is_wanted_and_nothing_half_written(shelf: Shelf, tmp_path: Path) -> None:
    shelf.keep("north", ONE, b"s")
    shelf.keep("north", TWO, b"s")
    folder = tmp_path / "calibration/kept/north"
    (folder / ".half.toml.new").write_bytes(b"half")
    shelf.prune("north", [digest(TWO)])
    assert sorted(path.name for path in folder.iterdir()) == [f"{digest(TWO)[7:]}.toml", f"{digest(TWO)[7:]}.toml.sig"]


def test_what_was_put_there_and_is_refused_lies_beside(shelf: Shelf, tmp_path: Path) -> None:
    shelf.keep("north", ONE, b"s")
    shelf.show("north", ONE, b"s")
    shelf.set_aside("north")
    assert not shelf.changed("north")
    assert (tmp_path / "calibration/north.toml.refused").read_bytes() == ONE
    assert shelf.shown("north") is None


def test_no_more_is_read_than_shows_that_it_is_too_long(shelf: Shelf, tmp_path: Path) -> None:
    (tmp_path / "calibration").mkdir()
    (tmp_path / "calibration/north.toml").write_bytes(b"x" * 1_000_000)
    shown = shelf.shown("north")
    assert shown is not None
    assert len(shown[0]) == LARGEST_BYTES + 1


def test_a_folder_that_cannot_be_written_is_said(shelf: Shelf, tmp_path: Path) -> None:
    (tmp_path / "calibration").write_text("a file in its place")
    with pytest.raises(StoreError, match="writable for motekeep"):
        shelf.keep("north", ONE, b"s")
    with pytest.raises(StoreError, match="writable for motekeep"):
        shelf.show("north", ONE, b"s")
