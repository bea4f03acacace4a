"""The publisher against a simulated broker and a journal in memory: what arrives, in what order, what is believed."""

import json

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from uplink_fakes import TOPICS, Gateway, Verdict, seqs_of

READING, LATE = TOPICS.reading("north"), TOPICS.late("north")
FINDING, AMEND = TOPICS.finding, TOPICS.amend("north")
NOT_AUTHORIZED, PAYLOAD_INVALID, NO_SUBSCRIBERS = 0x87, 0x99, 0x10


def test_a_fresh_reading_goes_out_at_once_on_its_own_topic_and_counts_as_delivered() -> None:
    gateway = Gateway()
    gateway.minute_by_minute(3)
    gateway.run(150.0)
    sent = gateway.accepted_on(READING)
    assert [s.seqs for s in sent] == [[1], [2], [3]]
    assert [s.at_s - 100_001.0 for s in sent] == pytest.approx([0.025, 60.025, 120.025], abs=0.11)
    assert gateway.journal.in_state("delivered") == [1, 2, 3]
    assert gateway.accepted_on(LATE) == []


def test_the_backlog_goes_late_oldest_first_at_most_a_hundred_a_message_and_whole() -> None:
    gateway = Gateway(late_rate=0.0)
    gateway.backlog(1234)
    gateway.run(30.0)
    late = gateway.accepted_on(LATE)
    assert [seq for s in late for seq in s.seqs] == list(range(1, 1235))
    assert {len(s.seqs) for s in late[:-1]} == {100}
    assert gateway.journal.in_state("waiting") == []
    assert gateway.broker.most_in_flight <= 20


def test_sensors_take_turns_on_late() -> None:
    gateway = Gateway(("north", "south"))
    gateway.backlog(500, "north")
    gateway.backlog(500, "south")
    gateway.run(20.0)
    topics = [s.topic for s in gateway.broker.accepted]
    assert topics == [TOPICS.late("north"), TOPICS.late("south")] * 5


def test_live_readings_are_not_kept_back_by_the_backlog_at_the_default_rate() -> None:
    gateway = Gateway()
    gateway.backlog(20_000)
    gateway.minute_by_minute(5)
    gateway.run(280.0)
    live = gateway.accepted_on(READING)
    assert [s.seqs[0] for s in live] == [20_001 + i for i in range(5)]
    assert all(s.at_s - (100_001.0 + 60.0 * i) < 0.3 for i, s in enumerate(live))
    assert gateway.journal.in_state("waiting") == []


def test_late_messages_keep_to_their_rate() -> None:
    gateway = Gateway(late_rate=2.0)
    gateway.backlog(3000)
    gateway.run(10.0)
    times = [s.at_s for s in gateway.accepted_on(LATE)]
    assert 18 <= len(times) <= 22
    assert all(b - a >= 0.9 for a, b in zip(times, times[3:], strict=False))


def test_on_a_slow_link_the_backlog_shrinks_until_a_live_reading_waits_seconds_not_minutes() -> None:
    gateway = Gateway(late_rate=0.0)
    gateway.broker.bytes_s = 2_500.0  # 20 kbit/s
    gateway.backlog(2000, pad=600)
    gateway.minute_by_minute(10, pad=600)
    gateway.run(620.0)
    live = gateway.accepted_on(READING)
    waits = [s.at_s - (100_001.0 + 60.0 * i) for i, s in enumerate(live)]
    assert len(waits) == 10
    assert max(waits[2:]) < 5.0  # after it has learnt the link
    assert len(gateway.arrived_seqs(LATE)) > 1000  # and the backlog still uses most of it


def test_what_was_under_way_when_the_link_broke_is_sent_again() -> None:
    gateway = Gateway(late_rate=0.0)
    gateway.backlog(2000)
    for after_s in (0.3, 3.0, 6.0):
        gateway.clock.after(after_s, gateway.broker.cut)
    gateway.run(30.0)
    assert set(gateway.arrived_seqs(LATE)) == set(range(1, 2001))
    assert gateway.journal.in_state("delivered") == list(range(1, 2001))
    assert gateway.publisher.facts(gateway.clock.now()).reconnects == 3


def test_readings_of_an_outage_come_late_and_those_of_the_present_live() -> None:
    gateway = Gateway()
    gateway.minute_by_minute(60)
    gateway.clock.after(90.0, lambda: gateway.broker.cut(for_s=1800.0))
    gateway.run(3600.0)
    assert gateway.arrived_seqs(LATE) == list(range(3, 32))
    assert gateway.arrived_seqs(READING) == [1, 2, *range(32, 61)]


def test_a_link_that_owes_answers_is_given_up_and_nothing_counts_as_delivered_before() -> None:
    gateway = Gateway()
    gateway.broker.rule = lambda _t, _b: "swallow" if gateway.broker.connections == 1 else 0
    gateway.reading()
    gateway.clock.after(60.0, lambda: seen.append(gateway.journal.in_state("delivered")))
    seen: list[list[int]] = []
    gateway.run(200.0)
    assert seen == [[]]
    assert gateway.broker.connections == 2
    assert gateway.journal.in_state("delivered") == [1]
    facts = gateway.publisher.facts(gateway.clock.now())
    assert facts.why is not None
    assert "no answer for 9" in facts.why
    assert not facts.stalled  # it has answered since


# -- refusals ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("hangs_up", [False, True])
def test_a_refusal_never_counts_as_delivery_and_the_broker_is_asked_ever_more_rarely(hangs_up: bool) -> None:
    gateway = Gateway(late_rate=0.0)
    gateway.broker.hangs_up_on_refusal = hangs_up
    gateway.backlog(500)
    gateway.broker.rule = lambda _t, _b: NOT_AUTHORIZED
    gateway.run(3600.0)
    assert gateway.journal.in_state("waiting") == list(range(1, 501))
    assert len(gateway.broker.arrived) < 30
    facts = gateway.publisher.facts(gateway.clock.now())
    assert 10 < facts.refused <= len(gateway.broker.arrived)
    assert facts.refusing == (f"{LATE}: code 135",)
    assert facts.set_aside == 0


def test_a_topic_whose_refusal_costs_the_connection_keeps_back_no_live_reading_and_costs_no_row() -> None:
    gateway = Gateway(late_rate=0.0)
    gateway.broker.hangs_up_on_refusal = True
    gateway.broker.rule = lambda t, _b: NOT_AUTHORIZED if t == LATE else 0
    gateway.publisher.post(TOPICS.health, "{}")
    gateway.backlog(300)
    gateway.minute_by_minute(60)
    gateway.run(3600.0)
    waits = {s.seqs[0]: s.at_s - (100_001.0 + 60.0 * (s.seqs[0] - 301)) for s in gateway.accepted_on(READING)}
    assert list(waits) == list(range(301, 361))
    assert max(waits.values()) < 6.0
    assert gateway.journal.in_state("waiting") == list(range(1, 301))
    assert gateway.broker.connections < 25


def test_once_the_broker_changes_its_mind_everything_arrives_in_order() -> None:
    gateway = Gateway(late_rate=0.0)
    gateway.backlog(500)
    gateway.broker.rule = lambda _t, _b: NOT_AUTHORIZED
    gateway.clock.after(1000.0, lambda: setattr(gateway.broker, "rule", lambda _t, _b: 0))
    gateway.run(1500.0)
    assert gateway.journal.in_state("delivered") == list(range(1, 501))
    assert gateway.publisher.facts(gateway.clock.now()).refusing == ()


@pytest.mark.parametrize("hangs_up", [False, True])
def test_a_row_that_alone_is_refused_is_found_in_its_batch_and_set_aside_and_the_others_go_on(hangs_up: bool) -> None:
    gateway = Gateway(late_rate=0.0)
    gateway.broker.hangs_up_on_refusal = hangs_up
    gateway.backlog(350)
    gateway.broker.rule = lambda t, b: PAYLOAD_INVALID if 137 in seqs_of(t, b) else 0
    gateway.run(120.0)
    assert gateway.journal.in_state("aside") == [137]
    assert gateway.journal.in_state("delivered") == [s for s in range(1, 351) if s != 137]
    assert gateway.publisher.facts(gateway.clock.now()).set_aside == 1


def test_a_live_reading_that_is_refused_does_not_keep_back_the_next_and_goes_late() -> None:
    gateway = Gateway()
    gateway.minute_by_minute(5)
    gateway.broker.rule = lambda t, b: PAYLOAD_INVALID if t == READING and seqs_of(t, b) == [2] else 0
    gateway.run(290.0)
    assert gateway.arrived_seqs(READING) == [1, 3, 4, 5]
    assert gateway.arrived_seqs(LATE) == [2]


def test_one_refused_topic_does_not_stop_another_sensor() -> None:
    gateway = Gateway(("north", "south"))
    gateway.broker.rule = lambda t, _b: NOT_AUTHORIZED if t.endswith("/north") else 0
    gateway.backlog(300, "north")
    gateway.backlog(300, "south")
    gateway.run(30.0)
    assert gateway.journal.in_state("delivered", "south") == list(range(1, 301))
    assert gateway.journal.in_state("delivered", "north") == []


def test_a_row_too_large_for_the_broker_is_set_aside_unsent_and_batches_fit_the_packet() -> None:
    gateway = Gateway(late_rate=0.0)
    gateway.broker.maximum_packet = 4000
    gateway.backlog(50, pad=200)
    gateway.reading(age_s=600.0, pad=5000)
    gateway.reading(age_s=500.0, pad=200)
    gateway.reading(pad=5000)  # a fresh one
    gateway.run(20.0)
    assert gateway.journal.in_state("aside") == [51, 53]
    assert gateway.journal.in_state("delivered") == [*range(1, 51), 52]
    assert max(len(s.body) for s in gateway.broker.arrived) < 4000
    assert max(len(s.seqs) for s in gateway.accepted_on(LATE)) > 10


@pytest.mark.parametrize("poison", [1, 120, 250])
def test_a_row_that_ends_connections_is_set_aside_at_the_third_and_the_others_arrive(poison: int) -> None:
    gateway = Gateway(late_rate=0.0)
    gateway.publisher.post(TOPICS.health, "{}")
    gateway.backlog(250)
    gateway.broker.rule = lambda t, b: "hang up" if t == LATE and poison in seqs_of(t, b) else 0
    gateway.run(120.0)
    assert gateway.journal.in_state("aside") == [poison]
    assert gateway.journal.in_state("delivered") == [s for s in range(1, 251) if s != poison]
    assert gateway.broker.connections <= 8


def test_a_line_that_breaks_again_and_again_by_itself_costs_no_row() -> None:
    gateway = Gateway(late_rate=0.0)
    gateway.backlog(250)
    gateway.broker.rule = lambda _t, _b: "swallow"
    for n in range(20):
        gateway.clock.after(10.0 * n + 5.0, gateway.broker.cut)
    gateway.clock.after(195.0, lambda: setattr(gateway.broker, "rule", lambda _t, _b: 0))
    gateway.run(240.0)
    assert gateway.journal.in_state("delivered") == list(range(1, 251))


def test_taken_though_nobody_subscribes_is_delivered_and_counted() -> None:
    gateway = Gateway()
    gateway.broker.rule = lambda _t, _b: NO_SUBSCRIBERS
    gateway.reading()
    gateway.run(10.0)
    assert gateway.journal.in_state("delivered") == [1]
    assert gateway.publisher.facts(gateway.clock.now()).unheard == 1


# -- documents beside readings ----------------------------------------------------------------------------------


def test_notices_go_in_order_and_a_refused_topic_keeps_back_only_itself() -> None:
    gateway = Gateway()
    for n in range(20):
        gateway.journal.notice(FINDING if n % 2 else AMEND, json.dumps(n))
    refusing = True
    gateway.broker.rule = lambda t, _b: NOT_AUTHORIZED if t == FINDING and refusing else 0
    gateway.clock.after(60.0, lambda: seen.append(len(gateway.journal.notice_rows)))
    seen: list[int] = []

    def allow() -> None:
        nonlocal refusing
        refusing = False

    gateway.clock.after(61.0, allow)
    gateway.run(200.0)
    assert seen == [10]
    assert [json.loads(s.body) for s in gateway.accepted_on(AMEND)] == list(range(0, 20, 2))
    assert [json.loads(s.body) for s in gateway.accepted_on(FINDING)] == list(range(1, 20, 2))
    assert gateway.journal.notice_rows == []


def test_of_retained_documents_the_latest_wins_and_each_connection_gets_it_first() -> None:
    gateway = Gateway()
    gateway.publisher.post(TOPICS.health, "old")
    gateway.publisher.post(TOPICS.health, "new")
    gateway.backlog(100)
    gateway.clock.after(10.0, gateway.broker.cut)
    gateway.run(20.0)
    health = gateway.accepted_on(TOPICS.health)
    assert [(s.body, s.retain) for s in health] == [("new", True), ("new", True)]
    assert gateway.broker.accepted[0] is health[0]


def test_a_document_posted_while_the_last_one_is_unanswered_follows_it() -> None:
    gateway = Gateway()
    gateway.broker.latency_s = 5.0
    gateway.publisher.post(TOPICS.health, "1")
    for n in range(2, 9):
        gateway.clock.after(0.4 * n, lambda n=n: gateway.publisher.post(TOPICS.health, str(n)))
    gateway.run(20.0)
    assert [s.body for s in gateway.accepted_on(TOPICS.health)] == ["1", "8"]


# -- from above -------------------------------------------------------------------------------------------------


def test_a_resend_request_is_answered_on_late_with_the_whole_range_and_changes_no_state() -> None:
    gateway = Gateway()
    gateway.backlog(1000)
    gateway.journal.mark_delivered(list(gateway.journal.rows["north"].values()))
    request = json.dumps({"sensor": "north", "from_seq": 101, "to_seq": 450})
    gateway.clock.after(1.0, lambda: gateway.broker.say(TOPICS.resend, request))
    gateway.run(10.0)
    assert gateway.arrived_seqs(LATE) == list(range(101, 451))
    assert gateway.journal.in_state("delivered") == list(range(1, 1001))


def test_a_resend_request_does_not_wait_for_the_whole_backlog() -> None:
    gateway = Gateway()
    gateway.backlog(10_000)
    gateway.journal.mark_delivered(list(gateway.journal.rows["north"].values())[:100])
    request = json.dumps({"sensor": "north", "from_seq": 1, "to_seq": 100})
    gateway.clock.after(1.0, lambda: gateway.broker.say(TOPICS.resend, request))
    gateway.run(5.0)
    assert set(range(1, 101)) <= set(gateway.arrived_seqs(LATE))


@pytest.mark.parametrize(
    "payload",
    [
        "",
        "nonsense",
        "[]",
        '{"sensor":"north"}',
        '{"sensor":"nowhere","from_seq":1,"to_seq":2}',
        '{"sensor":"north","from_seq":9,"to_seq":2}',
        '{"sensor":"north","from_seq":-1,"to_seq":2}',
        '{"sensor":"north","from_seq":' + "9" * 400 + ',"to_seq":' + "9" * 401 + "}",
        "[" * 100_000,
    ],
)
def test_a_request_that_makes_no_sense_disturbs_nothing(payload: str) -> None:
    gateway = Gateway()
    gateway.clock.after(1.0, lambda: gateway.broker.say(TOPICS.resend, payload))
    gateway.clock.after(1.0, lambda: gateway.broker.say(TOPICS.taken("north"), payload))
    gateway.minute_by_minute(2)
    gateway.run(90.0)
    assert gateway.arrived_seqs(READING) == [1, 2]
    assert gateway.arrived_seqs(LATE) == []
    assert gateway.publisher.facts(gateway.clock.now()).bad_requests == (2 if payload else 0)


def test_a_flood_of_requests_is_bounded_and_a_retained_one_is_refused() -> None:
    gateway = Gateway()
    gateway.backlog(100)
    gateway.journal.mark_delivered(list(gateway.journal.rows["north"].values()))

    def flood() -> None:
        for n in range(1, 60):
            gateway.broker.say(TOPICS.resend, json.dumps({"sensor": "north", "from_seq": n, "to_seq": n}))
        gateway.broker.say(TOPICS.resend, '{"sensor":"north","from_seq":1,"to_seq":1}', retained=True)

    gateway.clock.after(1.0, flood)
    gateway.run(20.0)
    assert gateway.arrived_seqs(LATE) == list(range(1, 17))
    assert gateway.publisher.facts(gateway.clock.now()).bad_requests == 60 - 16


def test_with_receipt_taken_an_answer_makes_a_row_sent_and_only_the_archive_makes_it_delivered() -> None:
    gateway = Gateway(receipt="taken")
    gateway.backlog(10)
    gateway.clock.after(5.0, lambda: seen.append(gateway.journal.in_state("sent")))
    seen: list[list[int]] = []
    gateway.clock.after(6.0, lambda: gateway.broker.say(TOPICS.taken("north"), '{"through_seq":7}', retained=True))
    gateway.run(10.0)
    assert seen == [list(range(1, 11))]
    assert gateway.journal.in_state("taken") == list(range(1, 8))
    assert gateway.journal.in_state("sent") == [8, 9, 10]


def test_a_receipt_for_readings_that_never_were_is_refused() -> None:
    gateway = Gateway(receipt="taken")
    gateway.backlog(10)
    gateway.clock.after(5.0, lambda: gateway.broker.say(TOPICS.taken("north"), '{"through_seq":11}'))
    gateway.run(10.0)
    assert gateway.journal.in_state("sent") == list(range(1, 11))
    assert gateway.publisher.facts(gateway.clock.now()).bad_requests == 1


# -- journal and stop ---------------------------------------------------------------------------------------------


def test_a_journal_that_fails_is_tried_again_and_the_health_document_goes_out_meanwhile() -> None:
    gateway = Gateway()
    gateway.backlog(50)
    gateway.journal.broken = True
    gateway.clock.after(30.0, lambda: gateway.publisher.post(TOPICS.health, "still here"))
    gateway.clock.after(60.0, lambda: setattr(gateway.journal, "broken", False))
    gateway.run(120.0)
    assert [s.body for s in gateway.accepted_on(TOPICS.health)] == ["still here"]
    assert gateway.journal.in_state("delivered") == list(range(1, 51))
    assert gateway.journal.calls < 60


def test_a_stop_takes_in_the_last_answers_says_offline_and_is_quick() -> None:
    gateway = Gateway()
    gateway.reading()
    gateway.run(0.12)  # just sent, not answered yet
    assert gateway.journal.in_state("delivered") == [1]
    assert gateway.broker.farewell is not None
    topic, body = gateway.broker.farewell
    assert topic == TOPICS.health
    assert json.loads(body)["status"] == "offline"
    assert gateway.clock.now().boot_s - 100_000.12 < 2.0


def test_a_stop_without_a_connection_is_quick_as_well() -> None:
    gateway = Gateway()
    gateway.clock.after(1.0, lambda: gateway.broker.cut(for_s=1e6))
    gateway.reading()
    gateway.run(30.0)
    assert gateway.clock.now().boot_s - 100_030.0 < 2.0


def test_an_idle_publisher_hardly_looks_at_the_journal() -> None:
    gateway = Gateway(("north", "south", "east", "west"))
    gateway.run(600.0)
    assert gateway.journal.calls < 600 / 5 * 9 + 20


def test_the_facts_say_since_when_and_why_there_is_no_link() -> None:
    gateway = Gateway()
    gateway.clock.after(10.0, lambda: gateway.broker.cut("a digger", for_s=1e6))
    gateway.clock.after(5.0, lambda: up.append(gateway.publisher.facts(gateway.clock.now())))
    up: list[object] = []
    gateway.run(70.0)
    facts = gateway.publisher.facts(gateway.clock.now())
    assert up[0].since is not None  # type: ignore[attr-defined]
    assert (facts.since, facts.why) == (None, "a digger")
    assert facts.down_s == pytest.approx(60.0, abs=1.0)


# -- anything at all --------------------------------------------------------------------------------------------

VERDICTS: st.SearchStrategy[Verdict] = st.sampled_from([0, 0, 0, 0x10, 0x80, 0x87, 0x97, 0x99, "swallow", "hang up"])


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(
    verdicts=st.lists(VERDICTS, max_size=60),
    cuts=st.lists(st.floats(0.2, 200.0), max_size=5),
    count=st.integers(1, 400),
    window=st.integers(1, 30),
    receive_maximum=st.integers(1, 30),
    hangs_up=st.booleans(),
)
def test_whatever_the_broker_does_for_a_while_every_row_ends_delivered_or_set_aside_with_reason(
    verdicts: list[Verdict], cuts: list[float], count: int, window: int, receive_maximum: int, hangs_up: bool
) -> None:
    gateway = Gateway(("north", "south"), window=window, late_rate=0.0)
    gateway.broker.receive_maximum = receive_maximum
    gateway.broker.hangs_up_on_refusal = hangs_up
    gateway.publisher.post(TOPICS.health, "{}")
    gateway.backlog(count, "north")
    gateway.backlog(count // 2, "south")
    gateway.minute_by_minute(3)
    gateway.journal.notice(FINDING, "1")
    gateway.journal.notice(AMEND, "2")
    moods = iter(verdicts)
    gateway.broker.rule = lambda _t, _b: next(moods, 0)
    for at_s in cuts:
        gateway.clock.after(at_s, gateway.broker.cut)
    gateway.run(30_000.0, until_settled=True)  # sixty bad moods at worst, holds of up to 300 s between them
    for sensor, total in (("north", count + 3), ("south", count // 2)):
        arrived = {
            seq
            for s in gateway.broker.accepted
            if s.topic in (TOPICS.late(sensor), TOPICS.reading(sensor))
            for seq in s.seqs
        }
        delivered, aside = gateway.journal.in_state("delivered", sensor), gateway.journal.in_state("aside", sensor)
        assert set(delivered) <= arrived  # nothing is believed that the broker did not take
        assert sorted(delivered + aside) == list(range(1, total + 1))
    assert gateway.publisher.facts(gateway.clock.now()).set_aside >= len(gateway.journal.in_state("aside"))
    assert gateway.broker.most_in_flight <= min(window, receive_maximum)
    assert gateway.journal.notice_rows == []
