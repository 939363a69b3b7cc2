"""Alerts, baselines, standings, the outbox and the lease keep what they are told, in the order the contract allows."""

from __future__ import annotations

import os
import subprocess
import sys
from dataclasses import replace

import pytest

from watcher.store import AlertStateError, Store
from watcher.store.alerts import (
    FINDINGS,
    Alert,
    alert,
    alerts,
    history,
    note_reminder,
    raise_alert,
    refresh_alert,
    settle_alert,
    take_alert,
    withdraw_alert,
)
from watcher.store.lease import hold, holder, process_start, release, renew
from watcher.store.outbox import (
    OutMessage,
    channel_state,
    deliveries,
    digest_sent,
    due,
    enqueue,
    last_digest,
    note_digest,
    note_notice,
    note_try,
    notice_state,
    pause_channel,
    resume_channel,
)
from watcher.store.standings import all_standings, baselines, note_baseline, note_standing

LETTER = OutMessage(
    "<1@skerry>", "alert", None, "seal-leak", "quality", "mail", ("a@x", "b@x"), None, {"text": "å"}
)


def raised(conn) -> Alert:
    return raise_alert(conn, "seal-leak", "worse", {"summary": "Worse."}, raised_us=100, noticed_us=200)


def test_an_alert_is_raised_with_its_evidence_and_a_label(store) -> None:
    with store.writing() as conn:
        one = raised(conn)
    assert (one.state, one.raised_us, one.noticed_us, one.evidence) == (
        "raised",
        100,
        200,
        {"summary": "Worse."},
    )
    assert one.label == f"A-{one.id:06d}"
    with store.reading() as conn:
        assert alert(conn, one.label) == alert(conn, one.id) == one
        assert [(h.at_us, h.what) for h in history(conn, one.id)] == [(200, "raised")]


def test_an_unknown_alert_is_said_with_where_to_look(store) -> None:
    with (
        store.reading() as conn,
        pytest.raises(AlertStateError, match=r'There is no alert "A-000099"; .*--all'),
    ):
        alert(conn, "A-000099")


@pytest.mark.parametrize("finding", FINDINGS)
def test_an_alert_is_taken_and_settled_with_each_finding(store, finding: str) -> None:
    with store.writing() as conn:
        number = raised(conn).id
        take_alert(conn, number, by="Ada", note="looking", at_us=300)
        done = settle_alert(conn, number, by="Bo", finding=finding, note="worn jig", at_us=400)
        lines = [(h.what, h.by, h.note) for h in history(conn, number)]
    assert (done.state, done.finding, done.taken_by, done.settled_by) == ("settled", finding, "Ada", "Bo")
    assert lines == [("raised", None, None), ("taken", "Ada", "looking"), ("settled", "Bo", "worn jig")]


ENDS = {
    "settled": lambda conn, n: settle_alert(conn, n, by="Bo", finding="no-cause", note=None, at_us=400),
    "withdrawn": lambda conn, n: withdraw_alert(conn, n, at_us=400, why="A record was corrected."),
}
STEPS = {
    "taken": lambda conn, n: take_alert(conn, n, by="Ada", note=None, at_us=500),
    "settled": lambda conn, n: settle_alert(conn, n, by="Cy", finding="no-cause", note=None, at_us=500),
    "withdrawn": lambda conn, n: withdraw_alert(conn, n, at_us=500, why="Again."),
}


@pytest.mark.parametrize("end", ENDS)
@pytest.mark.parametrize("step", STEPS)
def test_an_alert_that_has_ended_takes_no_further_step(store, end: str, step: str) -> None:
    with store.writing() as conn:
        number = raised(conn).id
        before = ENDS[end](conn, number)
        with pytest.raises(AlertStateError, match=f"cannot be {step}: it was {end}"):
            STEPS[step](conn, number)
        assert alert(conn, number) == before
        assert [h.what for h in history(conn, number)] == ["raised", end]


def test_open_alerts_are_those_raised_or_taken(store) -> None:
    with store.writing() as conn:
        one, two, three, four = (raised(conn).id for _ in range(4))
        take_alert(conn, two, by="Ada", note=None, at_us=1)
        ENDS["settled"](conn, three)
        ENDS["withdrawn"](conn, four)
        assert [a.id for a in alerts(conn, open_only=True)] == [one, two]
        assert [a.id for a in alerts(conn, stream="seal-leak")] == [one, two, three, four]
        assert alerts(conn, stream="another") == []


def test_new_evidence_replaces_the_old_which_stays_in_the_history(store) -> None:
    with store.writing() as conn:
        number = raised(conn).id
        now = refresh_alert(
            conn, number, {"summary": "Much worse."}, raised_us=100, at_us=300, what="updated"
        )
        note_reminder(conn, number, 350)
        told = [(h.what, h.data) for h in history(conn, number)]
        assert alert(conn, number).reminded_us == 350
    assert (now.evidence, now.raised_us) == ({"summary": "Much worse."}, 100)
    assert told == [
        ("raised", {"summary": "Worse."}),
        ("updated", {"summary": "Much worse."}),
        ("reminded", None),
    ]


def test_an_alert_and_its_message_come_together_or_not_at_all(store) -> None:
    def fails() -> None:
        with store.writing() as conn:
            enqueue(conn, replace(LETTER, alert_id=raised(conn).id), at_us=5)
            raise RuntimeError("power")

    with pytest.raises(RuntimeError, match="power"):
        fails()
    with store.reading() as conn:
        assert (alerts(conn), due(conn, 10)) == ([], [])


def test_a_message_is_put_out_once_for_each_recipient_and_channel(store) -> None:
    with store.writing() as conn:
        assert enqueue(conn, LETTER, at_us=5)
        assert not enqueue(conn, replace(LETTER, payload={"text": "other"}), at_us=6)
        assert enqueue(conn, replace(LETTER, channel="floor"), at_us=7)
        assert due(conn, 4) == []
        assert [(w.message, w.tries, w.created_us) for w in due(conn, 7)] == [
            (LETTER, 0, 5),
            (replace(LETTER, channel="floor"), 0, 7),
        ]


def test_a_message_put_off_waits_and_remembers_who_has_it(store) -> None:
    with store.writing() as conn:
        enqueue(conn, LETTER, at_us=5)
        (first,) = due(conn, 5)
        note_try(conn, first.id, at_us=6, outcome="partly", detail="b@x: 451", accepted=("a@x",), next_us=60)
        assert due(conn, 59) == []
        (again,) = due(conn, 60)
        assert (again.tries, again.accepted) == (1, ("a@x",))
        note_try(conn, first.id, at_us=61, outcome="sent", detail="", accepted=("b@x",))
        assert due(conn, 10**9) == []
        state = channel_state(conn)["mail"]
    assert (state.waiting, state.failed, state.last_delivery_us, state.error) == (0, 0, 61, None)


@pytest.mark.parametrize("outcome", ["refused", "given-up"])
def test_a_message_that_cannot_arrive_is_not_tried_again_and_counts_as_failed(store, outcome: str) -> None:
    with store.writing() as conn:
        enqueue(conn, replace(LETTER, alert_id=raised(conn).id), at_us=5)
        (one,) = due(conn, 5)
        note_try(conn, one.id, at_us=6, outcome=outcome, detail="550 no such user")
        assert due(conn, 10**9) == []
        state = channel_state(conn)["mail"]
        tries = deliveries(conn, one.message.alert_id)
    assert (state.failed, state.error, state.last_delivery_us) == (1, "550 no such user", None)
    assert [(t.outcome, t.recipient, t.channel) for t in tries] == [(outcome, "quality", "mail")]


def test_a_paused_channel_says_until_when_and_why_until_it_resumes(store) -> None:
    with store.writing() as conn:
        pause_channel(conn, "mail", until_us=90, fingerprint="f1", error="Wrong password.")
        held = channel_state(conn)["mail"]
        resume_channel(conn, "mail")
        free = channel_state(conn)["mail"]
    assert (held.paused_until_us, held.fingerprint, held.error) == (90, "f1", "Wrong password.")
    assert free.paused_until_us is None


def test_a_digest_and_a_notice_are_remembered(store) -> None:
    with store.writing() as conn:
        assert (digest_sent(conn, "2026-W10"), last_digest(conn), notice_state(conn, "s")) == (
            False,
            None,
            None,
        )
        note_digest(conn, "2026-W10", 7)
        note_notice(conn, "s", "silent", 8)
        note_notice(conn, "s", "alive", 9)
        assert (digest_sent(conn, "2026-W10"), last_digest(conn), notice_state(conn, "s")) == (
            True,
            7,
            ("alive", 9),
        )


def test_every_baseline_is_kept_and_the_same_one_is_noted_once(store) -> None:
    with store.writing() as conn:
        for at_us, events in enumerate((12, 12, 13, 12)):
            note_baseline(conn, "seal-leak", {"events": events}, at_us=at_us, by="gapbell", why="grown")
        kept = [(b.data["events"], b.at_us) for b in baselines(conn, "seal-leak")]
    assert kept == [(12, 0), (13, 2), (12, 3)]


def test_a_standing_is_replaced_by_the_next(store) -> None:
    with store.writing() as conn:
        for at_us, standing in enumerate(("learning", "steady")):
            note_standing(conn, "seal-leak", standing, {"events": at_us}, inputs="i", at_us=at_us)
        (one,) = all_standings(conn).values()
    assert (one.standing, one.data, one.inputs, one.assessed_us) == ("steady", {"events": 1}, "i", 1)


OWNER = {"host": "desk", "pid": os.getpid(), "started": process_start(os.getpid()), "since": "2026-03-02"}
AWAY = {"host": "elsewhere", "pid": 1, "started": "1", "since": "2026-03-02"}
SECOND = 1_000_000


def test_a_lease_has_one_holder_until_it_ends(store) -> None:
    lease = hold(store, owner=OWNER, now_us=0, ttl_s=60)
    assert lease is not None
    assert hold(store, owner=AWAY, now_us=59 * SECOND) is None
    with store.reading() as conn:
        assert holder(conn, 59 * SECOND) == OWNER
        assert holder(conn, 60 * SECOND) is None
    later = hold(store, owner=AWAY, now_us=60 * SECOND)
    assert later is not None
    assert later.token > lease.token
    assert not renew(store, lease, now_us=61 * SECOND)
    assert renew(store, later, now_us=61 * SECOND)


def test_a_lease_renewed_lasts_longer_and_one_released_is_free_at_once(store) -> None:
    lease = hold(store, owner=OWNER, now_us=0)
    assert renew(store, lease, now_us=50 * SECOND)
    assert hold(store, owner=AWAY, now_us=100 * SECOND) is None
    release(store, lease)
    later = hold(store, owner=AWAY, now_us=100 * SECOND)
    assert later.token > lease.token
    release(store, lease)  # too late: it is not his any more
    with store.reading() as conn:
        assert holder(conn, 101 * SECOND) == AWAY


@pytest.mark.parametrize("how", ["ended", "number used again"])
def test_a_lease_of_a_dead_process_of_this_host_is_free_at_once(store, how: str) -> None:
    with subprocess.Popen([sys.executable, "-c", "input()"], stdin=subprocess.PIPE) as child:
        owner = {"host": "desk", "pid": child.pid, "started": process_start(child.pid), "since": ""}
        if how == "number used again":
            owner = {**OWNER, "started": "an earlier start"}
        assert hold(store, owner=owner, now_us=0) is not None
        if how == "ended":
            assert hold(store, owner=OWNER, now_us=1) is None
        child.communicate(b"\n", timeout=30)
    assert hold(store, owner=OWNER, now_us=1) is not None


def test_of_two_stores_on_one_database_one_gets_the_lease(url: str) -> None:
    with Store.open(url) as one, Store.open(url) as two:
        got = [hold(one, owner=OWNER, now_us=0), hold(two, owner=AWAY, now_us=1)]
    assert [lease is not None for lease in got] == [True, False]
