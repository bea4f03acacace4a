"""Rolls over a real mosquitto onto emulated gateways, through the command line."""

import json
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from emulated_fleet import EmulatedFleet, Gateway, document_text, make_key, write_signed
from mosquitto import Certificates, Mosquitto, running
from moteferry.cli import main
from moteferry.roll.offer import Target
from moteferry.roll.register import Register
from motekeep.edges import connection
from motekeep.measure.document import digest

pytestmark = pytest.mark.whole


def targets(count: int) -> list[Target]:
    return [Target("quarry", f"gate-{n}", "north") for n in range(count)]


@dataclass
class Site:
    """A broker, a fleet, a key, and the command."""

    folder: Path
    mosquitto: Mosquitto
    key: Path
    fleet: EmulatedFleet

    @property
    def register(self) -> Path:
        return self.folder / "register.db"

    def gateway(self, n: int) -> Gateway:
        return self.fleet.gateways[targets(n + 1)[n]]

    def documents(self, issue: int, slope: float = 0.92) -> list[str]:
        texts = {target: document_text(target, issue, slope) for target in self.fleet.gateways}
        return [str(path) for path in write_signed(self.folder / "documents", self.key, texts)]

    def arguments(self, *words: str) -> list[str]:
        broker = f"127.0.0.1:{self.mosquitto.port}"
        return ["roll", *words, "--broker", broker, "--register", str(self.register)]

    def roll(self, *words: str) -> Result:
        return CliRunner().invoke(main, self.arguments(*words))

    def rolled(self, *words: str) -> tuple[int, dict]:
        result = self.roll(*words, "--yes", "--json")
        assert result.exception is None or isinstance(result.exception, SystemExit), result.output
        return result.exit_code, json.loads(result.stdout)

    def events(self) -> list[tuple[str, str]]:
        with Register(self.register, write=False) as register:
            return [(event.target.gateway, event.event) for event in register.events()]


@contextmanager
def site(folder: Path, *gateways: Gateway) -> Iterator[Site]:
    mosquitto = Mosquitto(folder)
    with running(mosquitto), EmulatedFleet(mosquitto.port, gateways).running() as fleet:
        yield Site(folder, mosquitto, make_key(folder), fleet)


def well(count: int) -> list[Gateway]:
    return [Gateway(target) for target in targets(count)]


def test_a_plan_sends_nothing_and_says_who_would_get_what(tmp_path: Path) -> None:
    gateways = well(4)
    gateways[1].fail("fan-stopped", "failure")
    gateways[2].status = "offline"
    text = document_text(gateways[3].target, 3)
    gateways[3].in_force, gateways[3].highest = (3, digest(text.encode())), 3
    with site(tmp_path, *gateways) as here:
        result = here.roll(*here.documents(3))
        assert result.exit_code == 1, result.output
        assert "quarry/gate-0/north              issue 3 (none now)  to offer" in result.output
        assert "not well: fan-stopped" in result.output
        assert "not heard: offline, says the broker" in result.output
        assert "issue 3 (issue 3 now)  in force already" in result.output
        assert "nothing was sent" in result.output
        assert all(not gateway.offers for gateway in here.fleet.gateways.values())


def test_a_roll_brings_every_document_into_force_wave_after_wave(tmp_path: Path) -> None:
    with site(tmp_path, *well(6)) as here:
        code, told = here.rolled(*here.documents(3), "--waves", "1,50%,rest", "--hold", "0")
        assert (code, told["outcome"]) == (0, "done")
        assert told["plan"]["waves"] == [1, 3, 2]
        assert all(len(gateway.offers) == 1 for gateway in here.fleet.gateways.values())
        events = here.events()
        assert events.index(("gate-0", "passed")) < events.index(("gate-1", "offered"))
        assert sum(event == "accepted" for _, event in events) == 6


def test_rolling_it_again_sends_nothing_more(tmp_path: Path) -> None:
    with site(tmp_path, *well(2)) as here:
        documents = here.documents(3)
        here.rolled(*documents, "--hold", "0")
        code, told = here.rolled(*documents, "--hold", "0")
        assert (code, told["outcome"]) == (0, "done")
        assert [len(gateway.offers) for gateway in here.fleet.gateways.values()] == [1, 1]


def test_going_on_past_a_refusal_leaves_its_gateway_out_and_says_so(tmp_path: Path) -> None:
    gateways = well(3)
    gateways[0].behaviour = "refuses"
    with site(tmp_path, *gateways) as here:
        documents = here.documents(3)
        assert here.rolled(*documents, "--hold", "0")[0] == 1
        code, told = here.rolled(*documents, "--hold", "0", "--go-on")
        assert (code, told["outcome"], told["left_out"]) == (1, "done", ["quarry/gate-0/north"])
        assert [len(gateway.offers) for gateway in here.fleet.gateways.values()] == [1, 1, 1]


@pytest.mark.parametrize(
    ("behaviour", "hold", "step", "why"),
    [
        ("refuses", "0", "refused", "too-far: it moves readings by 90 %"),
        ("fails", "30s", "worse", "calibration-out-of-range"),
        ("withdraws", "30s", "withdrawn", "readings became invalid; no document is in force any more"),
        ("flags", "30s", "worse", "flag 4: limits-fail"),
        ("silent", "0", "silent", "no answer in 2 s"),
    ],
)
def test_a_wave_that_goes_wrong_stops_the_roll(tmp_path: Path, behaviour: str, hold: str, step: str, why: str) -> None:
    gateways = well(3)
    gateways[0].behaviour = behaviour
    with site(tmp_path, *gateways) as here:
        code, told = here.rolled(*here.documents(3), "--waves", "1,rest", "--hold", hold, "--patience", "2")
        assert (code, told["outcome"]) == (1, "stopped")
        [failure] = told["failures"]
        assert (failure["gateway"], failure["step"]) == ("gate-0", step)
        assert why in failure["why"]
        assert [len(gateway.offers) for gateway in here.fleet.gateways.values()] == [1, 0, 0]


def test_a_stopped_roll_stays_stopped_until_it_is_told_to_go_on(tmp_path: Path) -> None:
    gateways = well(3)
    gateways[0].behaviour = "withdraws"
    with site(tmp_path, *gateways) as here:
        documents = here.documents(3)
        wish = ("--waves", "1,rest", "--hold", "1s")
        assert here.rolled(*documents, *wish)[0] == 1
        assert here.rolled(*documents, *wish)[1]["failures"][0]["step"] == "withdrawn"
        assert [len(gateway.offers) for gateway in here.fleet.gateways.values()] == [1, 0, 0]
        code, told = here.rolled(*documents, *wish, "--hold", "0", "--go-on")
        assert told["outcome"] == "done"
        assert code == 1, "one of three does not have it"
        assert [len(gateway.offers) for gateway in here.fleet.gateways.values()] == [1, 1, 1]


def test_an_offer_nobody_answered_is_taken_off_the_broker_when_a_roll_stops(tmp_path: Path) -> None:
    gateways = well(2)
    gateways[0].behaviour = "silent"
    with site(tmp_path, *gateways) as here:
        assert here.rolled(*here.documents(3), "--hold", "0", "--patience", "1", "--waves", "rest")[0] == 1
        with here.mosquitto.subscriber("motekeep/+/gate-0/calibration/+/offer") as heard:
            assert [payload for topic, _, payload in heard.raw() if topic.endswith("offer")] == []


def test_who_was_not_heard_is_offered_it_by_the_same_command_later(tmp_path: Path) -> None:
    gateways = well(2)
    gateways[1].status = "offline"
    with site(tmp_path, *gateways) as here:
        documents = here.documents(3)
        code, told = here.rolled(*documents, "--hold", "0")
        assert (code, told["outcome"], told["left_out"]) == (1, "done", ["quarry/gate-1/north"])
        here.gateway(1).status = "normal"
        here.fleet.say_health(here.gateway(1)).wait_for_publish(5)
        assert here.rolled(*documents, "--hold", "0")[0] == 0
        assert [len(gateway.offers) for gateway in here.fleet.gateways.values()] == [1, 1]


def test_a_roll_that_was_killed_goes_on_where_it_was(tmp_path: Path) -> None:
    gateways = well(4)
    gateways[2].behaviour = "silent"
    with site(tmp_path, *gateways) as here:
        documents = here.documents(3)
        words = here.arguments(*documents, "--waves", "2,rest", "--hold", "0", "--yes", "--json")
        command = [sys.executable, "-c", "from moteferry.cli import main; main()", *words]
        with subprocess.Popen(command, stdout=subprocess.DEVNULL) as process:
            deadline = time.monotonic() + 20
            while not here.gateway(3).offers:
                assert time.monotonic() < deadline
                time.sleep(0.05)
            process.send_signal(signal.SIGKILL)
        with here.fleet.lock:  # it came to its senses while nobody was looking
            here.gateway(2).behaviour = "well"
            here.fleet.say_state(here.gateway(2))
        code, told = here.rolled(*documents, "--waves", "2,rest", "--hold", "0")
        assert (code, told["outcome"]) == (0, "done")
        for gateway in here.fleet.gateways.values():
            assert len(set(gateway.offers)) == 1
        assert sum(event == "accepted" for _, event in here.events()) == 4


def test_undo_brings_the_earlier_parameters_back_as_a_new_issue(tmp_path: Path) -> None:
    with site(tmp_path, *well(2)) as here:
        here.rolled(*here.documents(3, slope=0.9), "--hold", "0")
        here.rolled(*here.documents(4, slope=0.5), "--hold", "0")
        with here.fleet.lock:
            here.gateway(1).fail()
            here.fleet.say_health(here.gateway(1)).wait_for_publish(5)
        plan = here.roll("--undo")
        assert "from issue 4 to issue 3 again, as issue 5" in plan.output
        words = ("--undo", "--key", str(here.key), "--out", str(tmp_path / "undo"), "--hold", "0")
        code, told = here.rolled(*words)
        assert (code, told["outcome"]) == (0, "done"), told
        for gateway in here.fleet.gateways.values():
            assert gateway.in_force is not None
            assert gateway.in_force[0] == 5
            text = (tmp_path / "undo" / f"{'-'.join(gateway.target)}-5.toml").read_text()
            assert digest(text.encode()) == gateway.in_force[1]
            assert "slope = { value = 0.9, u = 0.03 }" in text
        assert here.rolled(*words)[0] == 0
        assert [len(gateway.offers) for gateway in here.fleet.gateways.values()] == [3, 3], "no further issue"
        assert here.events().count(("gate-0", "undone")) == 1


def test_the_history_says_who_had_which_calibration_when(tmp_path: Path) -> None:
    with site(tmp_path, *well(1)) as here:
        here.rolled(*here.documents(3), "--hold", "0")
        here.rolled(*here.documents(4, slope=0.5), "--hold", "0")
        result = CliRunner().invoke(main, ["history", "--register", str(here.register), "--json"])
        first, second = json.loads(result.stdout)
        assert (first["issue"], first["until"]) == (3, second["since"])
        assert (second["issue"], second["until"], second["signer"]) == (4, None, "operator")
        then = CliRunner().invoke(main, ["history", "--register", str(here.register), "--at", first["since"], "--json"])
        assert [tenure["issue"] for tenure in json.loads(then.stdout)] == [3]


def test_a_broker_that_forbids_offers_ends_the_roll_in_one_line(tmp_path: Path) -> None:
    mosquitto = Mosquitto(tmp_path, acl="topic read #\ntopic write motekeep/+/+/health\n")
    with running(mosquitto), EmulatedFleet(mosquitto.port, well(1)).running() as fleet:
        here = Site(tmp_path, mosquitto, make_key(tmp_path), fleet)
        result = here.roll(*here.documents(3), "--yes", "--hold", "0")
        assert result.exit_code == 2
        assert result.stderr.count("\n") <= 2
        assert "the broker refuses: not authorized (135); let this login write it" in result.stderr


def test_no_broker_is_one_line_that_names_the_option(tmp_path: Path) -> None:
    mosquitto = Mosquitto(tmp_path)
    key = make_key(tmp_path)
    [document] = write_signed(tmp_path, key, {targets(1)[0]: document_text(targets(1)[0], 3)})
    words = ["roll", str(document), "--broker", f"127.0.0.1:{mosquitto.port}", "--register", str(tmp_path / "r.db")]
    result = CliRunner().invoke(main, words)
    assert result.exit_code == 2
    assert "not reachable: Connection refused; look at --broker" in result.stderr


def test_a_wrong_password_is_one_line_that_names_the_options(tmp_path: Path) -> None:
    password = tmp_path / "password"
    password.write_text("wrong\n")
    mosquitto = Mosquitto(tmp_path, users={"operator": "right"})
    [document] = write_signed(tmp_path, make_key(tmp_path), {targets(1)[0]: document_text(targets(1)[0], 3)})
    words = ["roll", str(document), "--broker", f"127.0.0.1:{mosquitto.port}", "--register", str(tmp_path / "r.db")]
    login = ["--username", "operator", "--password-file", str(password)]
    with running(mosquitto):
        result = CliRunner().invoke(main, [*words, *login])
        assert result.exit_code == 2
        assert "the broker refuses our login" in result.stderr
        assert "look at --username, --password-file and --tls-cert" in result.stderr
        password.write_text("right\n")
        assert "not heard: no health document at this broker" in CliRunner().invoke(main, [*words, *login]).output


def test_tls_with_certificates_of_ones_own(tmp_path: Path) -> None:
    made = Certificates(tmp_path)
    mosquitto = Mosquitto(tmp_path, tls=made)
    [document] = write_signed(tmp_path, make_key(tmp_path), {targets(1)[0]: document_text(targets(1)[0], 3)})
    words = ["roll", str(document), "--broker", f"127.0.0.1:{mosquitto.port}", "--register", str(tmp_path / "r.db")]
    ours = ["--tls-cert", f"{made.client}.crt", "--tls-key", f"{made.client}.key"]
    with running(mosquitto):
        result = CliRunner().invoke(main, [*words, *ours, "--tls-ca", str(made.ca)])
        assert (result.exit_code, "not heard" in result.output) == (1, True)
        result = CliRunner().invoke(main, [*words, *ours])
        assert result.exit_code == 2
        assert "look at --tls-ca and at this computer's clock" in result.stderr


def test_what_the_edge_logs_stays_out_of_the_json(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def received(*_: object) -> None:
        connection.log.warning("link.noisy")

    monkeypatch.setattr(connection.Connection, "_received", received)
    with site(tmp_path, *well(1)) as here:
        result = here.roll(*here.documents(3), "--json")
        assert json.loads(result.stdout)["plan"]["counts"]["not heard"] == 1
        assert "link.noisy" in result.stderr
