"""A rehearsal shows what would have been alerted over past records, and leaves no trace."""

from __future__ import annotations

from datetime import datetime, timedelta

QUIET = set(range(39, 560, 40))
TWICE = QUIET | set(range(565, 600, 6)) | set(range(639, 1200, 40)) | set(range(1205, 1260, 6))


def test_a_rehearsal_shows_every_shift_and_sends_and_stores_nothing(yard, tested, moment) -> None:
    yard.drop("a.csv", tested(range(1300), TWICE), moment(1300))
    found = yard.json("rehearse", "--to", moment(1300).isoformat(), "--settle-after", "2 days")
    assert found.keys() >= {"from", "to", "streams"}
    (stream,) = found["streams"]
    assert stream.keys() >= {
        "stream",
        "form",
        "exposure_unit",
        "events",
        "exposure",
        "standing",
        "baseline",
        "alerts",
    }
    raised = [datetime.fromisoformat(a["raised_at"]) for a in stream["alerts"] if a["direction"] == "worse"]
    # from how the records are made: the two stretches with a leak in 6 begin at units 565 and 1205
    assert any(moment(565) < t < moment(605) for t in raised)
    assert any(moment(1205) < t < moment(1262) for t in raised)
    assert not (yard.folder / "gapbell.db").exists()
    assert yard.sink.mails == []


def test_one_alert_never_hides_the_next(yard, tested, moment) -> None:
    """Settled after two days the rules restart; settled after a year the first alert is still open at the end."""
    yard.drop("a.csv", tested(range(1300), TWICE), moment(1300))

    def worse(after: str) -> int:
        found = yard.json("rehearse", "--to", moment(1300).isoformat(), "--settle-after", after)
        return sum(a["direction"] == "worse" for a in found["streams"][0]["alerts"])

    assert worse("2 days") >= 2
    assert worse("365 days") == 1


def test_it_ends_well_without_any_alert(yard, tested, moment) -> None:
    yard.drop("a.csv", tested(range(560), QUIET), moment(560))
    found = yard.json("rehearse", "--to", moment(560).isoformat())
    assert found["streams"][0]["alerts"] == []
    assert found["streams"][0]["standing"] == "steady"
    assert datetime.fromisoformat(found["from"]) == moment(0) - timedelta(minutes=1)


def test_it_judges_like_a_pass(yard, tested, moment) -> None:
    leaks = QUIET | set(range(565, 600, 6))
    yard.drop("a.csv", tested(range(600), leaks), moment(600))
    (rehearsed,) = yard.json("rehearse", "--to", moment(601).isoformat())["streams"][0]["alerts"]
    yard.cycle(moment(601))
    (real,) = yard.json("alerts")["alerts"]
    same = (
        "direction",
        "raised_at",
        "shift_began",
        "rules",
        "baseline",
        "since",
        "rate_ratio",
        "records",
        "summary",
    )
    assert {k: rehearsed[k] for k in same} == {k: real[k] for k in same}
    assert yard.json("rehearse", "--to", moment(601).isoformat())["streams"][0]["alerts"][0] == rehearsed


def test_a_source_that_the_store_does_not_know_is_read_for_this_once(yard, tested, moment) -> None:
    yard.drop("a.csv", tested(range(560), QUIET), moment(560))
    yard.cycle(moment(561))
    yard.path.write_text(
        yard.path.read_text()
        + """
[sources.paint]
kind = "csv-drop"
folder = "paint"
columns = { time = "tested_at", unit = "serial" }
[streams.blister]
title = "Blisters"
source = "paint"
event = { result = ["LEAK"] }
"""
    )
    yard.drop("p.csv", tested(range(300), QUIET), moment(300), folder="paint")
    found = yard.json("rehearse", "--to", moment(561).isoformat())
    assert [(s["stream"], s["exposure"]) for s in found["streams"]] == [("seal-leak", 560), ("blister", 300)]
    assert {r["source"] for r in yard.json("records")["records"]} == {"proof-test"}


def test_alerts_before_its_first_day_are_left_out(yard, tested, moment) -> None:
    yard.drop("a.csv", tested(range(1300), TWICE), moment(1300))
    words = ["rehearse", "--to", moment(1300).isoformat(), "--settle-after", "2 days"]
    late = yard.json(*words, "--from", moment(1205).isoformat())["streams"][0]["alerts"]
    assert late == [
        a
        for a in yard.json(*words)["streams"][0]["alerts"]
        if datetime.fromisoformat(a["raised_at"]) >= moment(1205)
    ]
    assert late


def test_a_file_delivered_this_very_moment_is_read(yard, tested, moment) -> None:
    yard.drop("a.csv", tested(range(100), {39, 79}), datetime.now(moment(0).tzinfo))
    (stream,) = yard.json("rehearse", "--to", moment(100).isoformat())["streams"]
    assert stream["events"] == 2
