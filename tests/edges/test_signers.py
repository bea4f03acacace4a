"""Signers: `ssh-keygen` decides who signed the exact bytes; every refusal has its name, rubbish costs no process."""

from contextlib import suppress
from datetime import UTC, datetime
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from keys import Key, make_key, revocation_list
from motekeep.edges import signers as edge
from motekeep.edges import sshsig
from motekeep.edges.signers import Signer, Signers, check_files, count_keys, trust_files
from motekeep.errors import OfferRefusedError, SignersError
from motekeep.measure.document_text import LARGEST_BYTES

TEXT = b"issue = 1\n# as exact as bytes are\n"
NOW = datetime(2026, 12, 1, 12, tzinfo=UTC).timestamp()


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("keys")


@pytest.fixture(scope="module")
def anna(folder: Path) -> Key:
    return make_key(folder, "anna")


@pytest.fixture(scope="module")
def bert(folder: Path) -> Key:
    return make_key(folder, "bert")


@pytest.fixture(scope="module")
def signed(anna: Key) -> bytes:
    return anna.sign(TEXT)


def allowed(tmp_path: Path, *lines: str) -> Path:
    path = tmp_path / "signers"
    path.write_text("".join(lines))
    return path


def refusal(signers: Signers, text: bytes, signature: bytes, utc: float | None = NOW) -> str:
    with pytest.raises(OfferRefusedError) as caught:
        signers.verify(text, signature, utc)
    return caught.value.reason


def test_a_good_signature_tells_who_signed_and_with_which_key(tmp_path: Path, anna: Key, signed: bytes) -> None:
    signers = Signers(allowed(tmp_path, "# the office\n", anna.line()))
    assert signers.verify(TEXT, signed, NOW) == Signer("anna@example", anna.fingerprint)


@pytest.mark.parametrize("kind", ["rsa", "ecdsa"])
def test_other_kinds_of_keys_are_as_good(tmp_path: Path, folder: Path, kind: str) -> None:
    key = make_key(folder, kind, kind)
    assert Signers(allowed(tmp_path, key.line())).verify(TEXT, key.sign(TEXT), NOW).key == key.fingerprint


def test_one_byte_more_is_another_document(tmp_path: Path, anna: Key, signed: bytes) -> None:
    assert refusal(Signers(allowed(tmp_path, anna.line())), TEXT + b"\n", signed) == "bad-signature"


def test_an_unknown_key_is_refused_whatever_it_signs(tmp_path: Path, anna: Key, bert: Key) -> None:
    assert refusal(Signers(allowed(tmp_path, anna.line())), TEXT, bert.sign(TEXT)) == "unknown-signer"


def test_a_signature_for_another_purpose_is_refused(tmp_path: Path, anna: Key) -> None:
    signers = Signers(allowed(tmp_path, anna.line()))
    assert refusal(signers, TEXT, anna.sign(TEXT, "file")) == "other-namespace"


def test_a_key_that_is_allowed_for_another_purpose_only_is_unknown(tmp_path: Path, anna: Key, signed: bytes) -> None:
    signers = Signers(allowed(tmp_path, anna.line('namespaces="file,git"')))
    assert refusal(signers, TEXT, signed) == "unknown-signer"


@pytest.mark.parametrize("options", ['valid-before="20261130"', 'valid-after="20270101"'])
def test_a_key_outside_of_its_dates_is_refused_while_the_clock_can_be_trusted(
    tmp_path: Path, anna: Key, signed: bytes, options: str
) -> None:
    assert refusal(Signers(allowed(tmp_path, anna.line(options))), TEXT, signed) == "expired-signer"


@pytest.mark.parametrize(
    "lines",
    [
        ['valid-before="20211130"'],
        ['valid-after="20400101"'],
        ['valid-after="20200101",valid-before="20210101"'],
        ['valid-before="20211130"', 'valid-after="20400101"'],
    ],
)
def test_on_an_unsynced_clock_dates_decide_nothing(tmp_path: Path, anna: Key, signed: bytes, lines: list[str]) -> None:
    signers = Signers(allowed(tmp_path, *[anna.line(options) for options in lines]))
    assert signers.verify(TEXT, signed, None).principal == "anna@example"
    assert refusal(signers, TEXT + b"x", signed, None) == "bad-signature"


def test_a_revoked_key_is_refused_by_a_binary_list_and_by_a_list_of_keys(
    tmp_path: Path, anna: Key, bert: Key, signed: bytes
) -> None:
    lines = allowed(tmp_path, anna.line(), bert.line())
    plain = tmp_path / "plain"
    plain.write_text(anna.public + "\n")
    for revoked in (revocation_list(tmp_path / "krl", anna), plain):
        signers = Signers(lines, revoked)
        assert refusal(signers, TEXT, signed) == "revoked-signer"
        assert signers.verify(TEXT, bert.sign(TEXT), NOW).principal == "bert@example"


def test_a_revocation_list_that_cannot_be_read_trusts_nobody(tmp_path: Path, anna: Key, signed: bytes) -> None:
    rubbish = tmp_path / "krl"
    rubbish.write_text("no key\n")
    for revoked in (rubbish, tmp_path / "absent"):
        assert refusal(Signers(allowed(tmp_path, anna.line()), revoked), TEXT, signed) == "revoked-signer"


def test_a_line_for_several_people_names_one_of_them(tmp_path: Path, anna: Key, signed: bytes) -> None:
    path = allowed(tmp_path, f'"!carl@example,*@example" {anna.public}\n')
    assert Signers(path).verify(TEXT, signed, NOW).principal == "*@example"


def test_a_folder_of_trust_holds_both_files(tmp_path: Path, anna: Key, bert: Key, signed: bytes) -> None:
    folder = tmp_path / "signers"
    folder.mkdir()
    signers = Signers(folder)
    assert not signers.exist
    (folder / "allowed_signers").write_text(anna.line() + bert.line())
    assert signers.verify(TEXT, signed, NOW).principal == "anna@example"
    revocation_list(folder / "revoked", anna)
    assert refusal(signers, TEXT, signed) == "revoked-signer"
    assert trust_files(folder, tmp_path / "other") == (folder / "allowed_signers", tmp_path / "other")


def test_without_a_file_of_signers_nobody_is_trusted(tmp_path: Path, signed: bytes) -> None:
    signers = Signers(tmp_path / "absent")
    assert not signers.exist
    assert refusal(signers, TEXT, signed) == "no-signers"


@pytest.mark.parametrize(
    ("text", "signature", "reason"),
    [
        (TEXT, b"", "unsigned"),
        (TEXT, b" \n", "unsigned"),
        (TEXT, b"rubbish", "bad-signature"),
        (TEXT, b"x" * (sshsig.LARGEST_BYTES + 1), "bad-signature"),
        (b"#" * (LARGEST_BYTES + 1), b"whatever", "too-large"),
    ],
)
def test_rubbish_is_refused_without_a_process(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, text: bytes, signature: bytes, reason: str
) -> None:
    monkeypatch.setattr(edge, "PROGRAM", "no-such-program")
    assert refusal(Signers(allowed(tmp_path, "")), text, signature) == reason


def test_without_the_program_it_is_no_refusal_but_a_fault_that_is_tried_again(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, anna: Key, signed: bytes
) -> None:
    monkeypatch.setattr(edge, "PROGRAM", "no-such-program")
    with pytest.raises(SignersError, match="openssh") as caught:
        Signers(allowed(tmp_path, anna.line())).verify(TEXT, signed, NOW)
    assert caught.value.retry


def test_a_program_that_hangs_is_given_up(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, anna: Key, signed: bytes
) -> None:
    slow = tmp_path / "slow"
    slow.write_text("#!/bin/sh\nexec sleep 60\n")
    slow.chmod(0o755)
    monkeypatch.setattr(edge, "PROGRAM", str(slow))
    monkeypatch.setattr(edge, "TIMEOUT_S", 0.2)
    with pytest.raises(SignersError, match="no answer"):
        Signers(allowed(tmp_path, anna.line())).verify(TEXT, signed, NOW)


def test_no_descriptor_is_left_open(tmp_path: Path, anna: Key, bert: Key, signed: bytes) -> None:
    signers = Signers(allowed(tmp_path, anna.line()))
    before = len(list(Path("/proc/self/fd").iterdir()))
    signers.verify(TEXT, signed, NOW)
    refusal(signers, TEXT, bert.sign(TEXT))
    assert len(list(Path("/proc/self/fd").iterdir())) == before


def test_a_changed_file_of_trust_is_noticed(tmp_path: Path, anna: Key) -> None:
    path, revoked = allowed(tmp_path, anna.line()), tmp_path / "krl"
    signers = Signers(path, revoked)
    first = signers.stamp
    revocation_list(revoked, anna)
    second = signers.stamp
    path.unlink()
    assert len({first, second, signers.stamp}) == 3


def test_files_of_trust_that_others_can_write_are_told(tmp_path: Path, anna: Key) -> None:
    path = allowed(tmp_path, anna.line())
    tmp_path.chmod(0o755)
    path.chmod(0o644)
    assert check_files(path, None) is None
    path.chmod(0o664)
    assert "written by others" in (check_files(path, None) or "")
    path.chmod(0o644)
    tmp_path.chmod(0o777)
    assert "written by others" in (check_files(path, None) or "")
    tmp_path.chmod(0o755)
    assert "absent" in (check_files(path, tmp_path / "absent") or "")


def test_a_line_without_a_readable_key_is_told_by_its_number(tmp_path: Path, anna: Key, bert: Key) -> None:
    good = allowed(tmp_path, "# two\n", anna.line('valid-before="20300101"'), "\n", bert.line())
    assert count_keys(good) == 2
    for bad in ("carl@example ssh-ed25519\n", "carl@example ssh-ed25519 AAAAnokey\n", "AAAA\n"):
        with pytest.raises(SignersError, match="line 2"):
            count_keys(allowed(tmp_path, anna.line(), bad))


@given(st.binary(max_size=400))
def test_reading_a_signature_raises_nothing_but_its_own_error(rubbish: bytes) -> None:
    armoured = sshsig.BEGIN + b"\n" + rubbish + b"\n" + sshsig.END
    for data in (rubbish, armoured):
        with suppress(sshsig.NotASignatureError):
            sshsig.read(data)


def test_what_a_signature_states_is_told_as_ssh_names_it(anna: Key, signed: bytes) -> None:
    stated = sshsig.read(signed)
    assert (stated.namespace, stated.fingerprint) == ("calibration@motekeep", anna.fingerprint)
