"""Documents on their way: what is refused before anything is sent, and the way back as a new issue."""

from dataclasses import replace
from pathlib import Path

import pytest

from emulated_fleet import document_text, make_key, write_signed
from ferry.rolling import NORTH, NOW, offer
from moteferry.roll.fleet import Seat
from moteferry.roll.gate import Before
from moteferry.roll.offer import RollError, check_apart, check_signatures, offer_of, read_offer
from moteferry.roll.register import Register
from moteferry.roll.undo import NoWayBack, WayBack, reissued, way_back, write_and_sign
from moteferry.signing import sign, signature_path
from motekeep.measure.document_text import parse


def test_a_document_without_a_signature_is_told_how_to_get_one(tmp_path: Path) -> None:
    path = tmp_path / "north.toml"
    path.write_text(document_text(NORTH, 8))
    with pytest.raises(RollError, match=r"there is no north\.toml\.sig beside it; sign it"):
        read_offer(path)
    signature_path(path).write_text("yes, it is fine")
    with pytest.raises(RollError, match="it is no SSH signature"):
        read_offer(path)


def test_a_document_that_no_device_would_take_is_refused_with_its_key(tmp_path: Path) -> None:
    path = tmp_path / "north.toml"
    path.write_text(document_text(NORTH, 8).replace("issue = 8", "issue = 0"))
    signature_path(path).write_text("-----BEGIN SSH SIGNATURE-----\n")
    with pytest.raises(RollError, match="issue"):
        read_offer(path)


def test_a_true_signature_passes_and_one_of_other_bytes_does_not(tmp_path: Path) -> None:
    key = make_key(tmp_path)
    [path] = write_signed(tmp_path / "documents", key, {NORTH: document_text(NORTH, 8)})
    read = read_offer(path)
    check_signatures([read])
    with pytest.raises(RollError, match="issue 8 for quarry/east-gate/north"):
        check_signatures([read, replace(read, document=read.document.replace("0.92", "0.93"))])


def test_two_documents_for_one_sensor_are_refused() -> None:
    with pytest.raises(RollError, match="issue 8 and issue 9 are both for it"):
        check_apart([offer(8), offer(9)])
    check_apart([offer(8)])


@pytest.mark.parametrize("spelling", ["issue = 6", "issue=6", "  issue   =   6", "issue = 6 # the sixth"])
def test_a_new_issue_has_the_same_meaning_and_says_why(spelling: str) -> None:
    text = document_text(NORTH, 6).replace("issue = 6", spelling)
    changed = reissued(offer_of(text.encode(), ""), 9, "undoes 8")
    old, new = parse(text.encode()), parse(changed)
    assert replace(old, issue=9, digest=new.digest) == new
    assert changed.startswith(b"# undoes 8\n")


def test_a_text_that_cannot_be_changed_in_the_issue_alone_is_not_guessed_at() -> None:
    trap = 'site = """\nissue = 1"""\n' + document_text(NORTH, 6).replace('site = "quarry"\n', "")
    with pytest.raises(RollError, match=r"cannot be changed in the issue alone; write issue 9 by hand"):
        reissued(offer_of(trap.encode(), ""), 9, "undoes 8")


def test_the_way_back_is_signed_once_and_stays_the_same_issue(tmp_path: Path) -> None:
    key = make_key(tmp_path)
    earlier, undone = offer(6, slope=0.8), offer(7)
    was = Before(in_force=Seat(issue=6, digest=earlier.digest))
    with Register(tmp_path / "register.db") as register:
        with register.transaction():
            register.keep([earlier, undone])
        way = way_back(register, undone, was, NOW, 7)
        assert isinstance(way, WayBack)
        [signed] = write_and_sign([way], tmp_path / "undo", lambda path: sign(path, key), register)
        check_signatures([signed])
        assert signed.issue == 8
        again = way_back(register, undone, was, NOW, 20)
        assert isinstance(again, WayBack)
        assert list(write_and_sign([again], tmp_path / "none", pytest.fail, register)) == [signed]
        assert not (tmp_path / "none").exists()


@pytest.mark.parametrize(
    ("was", "now", "why"),
    [
        (None, NOW, "had no document before"),
        (Seat(issue=5, digest="sha256:unknown"), NOW, "the text of issue 5 is not in the register"),
        (Seat(issue=6, digest=offer(6).digest), 4_100_000_000.0, "was valid until 2099"),
    ],
)
def test_where_there_is_no_way_back_it_says_why(tmp_path: Path, was: Seat | None, now: float, why: str) -> None:
    with Register(tmp_path / "register.db") as register:
        with register.transaction():
            register.keep([offer(6)])
        found = way_back(register, offer(7), Before(in_force=was), now, 7)
    assert isinstance(found, NoWayBack)
    assert why in found.why
