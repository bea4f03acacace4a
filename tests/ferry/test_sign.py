"""`moteferry sign` and `signers`: what leaves the operator's hands is what a device accepts, or nothing does."""

import json
import os
import subprocess
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from keys import Key, make_key
from moteferry.cli import main
from moteferry.signing import SigningError, fingerprint_of, sign
from motekeep.edges.signers import Signers
from motekeep.errors import OfferRefusedError
from signed_gateway import document

NOW = 1_796_126_400.0


@pytest.fixture(scope="module")
def keys(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Key]:
    folder = tmp_path_factory.mktemp("keys")
    return {name: make_key(folder, name) for name in ("anna", "bert")}


def ferry(*words: object) -> Result:
    return CliRunner().invoke(main, [str(word) for word in words])


def written(tmp_path: Path, text: bytes | None = None) -> Path:
    path = tmp_path / "north.toml"
    path.write_bytes(document(3) if text is None else text)
    return path


def test_a_signed_document_is_one_that_a_device_accepts(tmp_path: Path, keys: dict[str, Key]) -> None:
    path, allowed = written(tmp_path), tmp_path / "signers"
    assert (
        ferry("signers", "add", allowed, "--key", f"{keys['anna'].path}.pub", "--principal", "anna@example").exit_code
        == 0
    )
    done = ferry("sign", path, "--key", keys["anna"].path, "--signers", allowed)
    assert done.exit_code == 0, done.output
    assert "issue 3 for quarry/gate/north" in done.output
    assert keys["anna"].fingerprint in done.output
    signature = path.with_name("north.toml.sig").read_bytes()
    assert Signers(allowed).verify(path.read_bytes(), signature, NOW).principal == "anna@example"
    assert not list(tmp_path.glob(".*"))


def test_an_older_signature_is_replaced(tmp_path: Path, keys: dict[str, Key]) -> None:
    path = written(tmp_path)
    sign(path, keys["anna"].path)
    path.write_bytes(document(4))
    signed = sign(path, keys["bert"].path)
    assert signed.key == keys["bert"].fingerprint
    assert fingerprint_of(document(4), signed.signature.read_bytes()) == signed.key


@pytest.mark.parametrize(
    ("text", "why"),
    [
        (document(1).replace(b"issue = 1", b"issue = 0"), "issue"),
        (document(1).replace(b"slope", b"slop"), "slop"),
        (b"# " + b"x\n" * 40_000, "65536 are possible"),
    ],
)
def test_what_no_device_would_read_is_not_signed(tmp_path: Path, keys: dict[str, Key], text: bytes, why: str) -> None:
    path = written(tmp_path, text)
    done = ferry("sign", path, "--key", keys["anna"].path)
    assert (done.exit_code, done.output.count("\n")) == (2, 1)
    assert why in done.output
    assert not path.with_name("north.toml.sig").exists()


def test_a_key_that_the_devices_do_not_know_leaves_the_old_signature(tmp_path: Path, keys: dict[str, Key]) -> None:
    path, allowed = written(tmp_path), tmp_path / "signers"
    allowed.write_text(keys["anna"].line())
    sign(path, keys["anna"].path)
    before = path.with_name("north.toml.sig").read_bytes()
    with pytest.raises(OfferRefusedError, match="unknown-signer"):
        sign(path, keys["bert"].path, Signers(allowed))
    assert path.with_name("north.toml.sig").read_bytes() == before


def test_a_file_that_is_no_key_is_said_in_a_line(tmp_path: Path) -> None:
    path, rubbish = written(tmp_path), tmp_path / "rubbish"
    rubbish.write_text("no key\n")
    done = ferry("sign", path, "--key", rubbish)
    assert done.exit_code == 2
    assert "made no signature" in done.output


def test_a_signature_of_other_bytes_is_found(tmp_path: Path, keys: dict[str, Key]) -> None:
    with pytest.raises(SigningError, match="checking the signature"):
        fingerprint_of(document(1), keys["anna"].sign(document(2)))
    with pytest.raises(SigningError, match="checking the signature"):
        fingerprint_of(document(1), keys["anna"].sign(document(1), "file"))


@pytest.mark.whole
def test_a_key_in_an_agent_signs_by_its_public_half(
    tmp_path: Path, keys: dict[str, Key], monkeypatch: pytest.MonkeyPatch
) -> None:
    socket = tmp_path / "agent"
    agent = subprocess.Popen(["ssh-agent", "-D", "-a", str(socket)], stdout=subprocess.DEVNULL)
    try:
        monkeypatch.setenv("SSH_AUTH_SOCK", str(socket))
        deadline = 200
        while not socket.exists() and deadline:
            deadline -= 1
            subprocess.run(["sleep", "0.05"], check=True)
        subprocess.run(["ssh-add", "-q", str(keys["anna"].path)], check=True, env=os.environ)
        public = tmp_path / "only.pub"
        public.write_text(keys["anna"].public + "\n")
        assert sign(written(tmp_path), public).key == keys["anna"].fingerprint
    finally:
        agent.terminate()
        agent.wait(10.0)


def test_json_tells_scripts_what_was_signed(tmp_path: Path, keys: dict[str, Key]) -> None:
    [entry] = json.loads(ferry("sign", written(tmp_path), "--key", keys["anna"].path, "--json").output)
    assert (entry["issue"], entry["sensor"], entry["key"]) == (3, "north", keys["anna"].fingerprint)


# -- who is trusted -------------------------------------------------------------------------------------------------


def test_an_added_key_holds_for_calibration_only_and_until_its_day(tmp_path: Path, keys: dict[str, Key]) -> None:
    allowed, anna = tmp_path / "signers", keys["anna"]
    allowed.write_text("# the office")
    words = ("--key", f"{anna.path}.pub", "--principal", "anna@example", "--until", "2026-12-02")
    assert ferry("signers", "add", allowed, *words).exit_code == 0
    assert allowed.read_text().startswith("# the office\nanna@example namespaces=")
    signers, text = Signers(allowed), document(1)
    assert signers.verify(text, anna.sign(text), NOW).key == anna.fingerprint
    with pytest.raises(OfferRefusedError, match="expired-signer"):
        signers.verify(text, anna.sign(text), NOW + 86400.0)
    file = tmp_path / "file"
    file.write_bytes(text)
    (tmp_path / "file.sig").write_bytes(anna.sign(text, "file"))
    elsewhere = ["ssh-keygen", "-Y", "verify", "-f", allowed, "-I", "anna@example", "-n", "file", "-s", f"{file}.sig"]
    assert subprocess.run(elsewhere, input=text, capture_output=True, check=False).returncode != 0


def test_a_key_is_added_once(tmp_path: Path, keys: dict[str, Key]) -> None:
    allowed = tmp_path / "signers"
    words = ("signers", "add", allowed, "--key", f"{keys['anna'].path}.pub", "--principal")
    assert ferry(*words, "anna@example").exit_code == 0
    again = ferry(*words, "other@example")
    assert again.exit_code == 2
    assert "already" in again.output


@pytest.mark.parametrize("name", ["*", "a,b", "!anna", "anna b", "", "anna\nmallory"])
def test_a_name_that_would_mean_something_else_to_ssh_is_refused(
    tmp_path: Path, keys: dict[str, Key], name: str
) -> None:
    allowed = tmp_path / "signers"
    assert ferry("signers", "add", allowed, "--key", f"{keys['anna'].path}.pub", "--principal", name).exit_code == 2
    assert not allowed.exists()


def test_a_revoked_key_is_refused_by_devices_and_told_in_the_list(tmp_path: Path, keys: dict[str, Key]) -> None:
    allowed, revoked, text = tmp_path / "signers", tmp_path / "revoked", document(1)
    for key in keys.values():
        ferry("signers", "add", allowed, "--key", f"{key.path}.pub", "--principal", key.principal)
    for name in ("bert", "anna"):  # the second goes onto the list of the first
        assert ferry("signers", "revoke", revoked, "--key", f"{keys[name].path}.pub").exit_code == 0
        with pytest.raises(OfferRefusedError, match="revoked-signer"):
            Signers(allowed, revoked).verify(text, keys[name].sign(text), NOW)
        told = json.loads(ferry("signers", "list", allowed, "--revoked", revoked, "--json").output)
        assert {e["principal"]: e["revoked"] for e in told}[f"{name}@example"]
        if name == "bert":
            assert Signers(allowed, revoked).verify(text, keys["anna"].sign(text), NOW).principal == "anna@example"
    assert "REVOKED" in ferry("signers", "list", allowed, "--revoked", revoked).output


def test_a_private_key_is_not_put_into_the_file(tmp_path: Path, keys: dict[str, Key]) -> None:
    allowed = tmp_path / "signers"
    done = ferry("signers", "add", allowed, "--key", keys["anna"].path, "--principal", "anna@example")
    assert done.exit_code == 2
    assert "public key" in done.output
    assert not allowed.exists()


def test_a_line_without_a_key_is_told_by_its_number(tmp_path: Path, keys: dict[str, Key]) -> None:
    allowed = tmp_path / "signers"
    allowed.write_text(keys["anna"].line() + "bert@example ssh-ed25519\n")
    done = ferry("signers", "list", allowed)
    assert done.exit_code == 2
    assert "line 2" in done.output


def test_files_of_trust_are_found_from_where_the_operator_stands(
    tmp_path: Path, keys: dict[str, Key], monkeypatch: pytest.MonkeyPatch
) -> None:
    written(tmp_path)
    monkeypatch.chdir(tmp_path)
    for name in ("anna", "bert"):
        words = ("--key", f"{keys[name].path}.pub", "--principal", f"{name}@example")
        assert ferry("signers", "add", "allowed_signers", *words).exit_code == 0
    assert ferry("signers", "revoke", "revoked", "--key", f"{keys['bert'].path}.pub").exit_code == 0

    told = [
        ferry("sign", "north.toml", "--key", keys[name].path, "--signers", "allowed_signers", "--revoked", "revoked")
        for name in ("anna", "bert")
    ]

    assert [done.exit_code for done in told] == [0, 2]
    assert "which its devices know as anna@example" in told[0].output
    assert "revoked-signer" in told[1].output
