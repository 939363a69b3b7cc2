"""One pass from files to mails, run through the command line; the expected alerts follow from how the records were made."""

from __future__ import annotations

import random
import shutil
from collections.abc import Callable
from datetime import datetime, timedelta
from pathlib import Path
from typing import Any

import pytest

from connectors.csv_drop import CsvDrop

# units of the quiet stretch: one leak in 40, the last at unit 559; from then on one in 6
QUIET = set(range(39, 560, 40))
WORSE = QUIET | set(range(565, 700, 6))

TWO = "[alerting]\nfalse_alerts_per_year = 2.0\n"  # one for each of two streams


@pytest.fixture
def worse(yard, tested, moment):
    """Return a yard whose seals leak more often from unit 560 on; one pass after unit 600 was made."""
    yard.drop("a.csv", tested(range(560), WORSE), moment(560))
    yard.drop("b.csv", tested(range(560, 600), WORSE), moment(600))
    yard.last = moment(601).isoformat()
    yard.report = yard.cycle(moment(601))
    return yard


def test_a_gap_that_falls_to_a_seventh_is_alerted_with_the_true_start_inside_the_interval(
    worse, moment
) -> None:
    assert worse.report["raised"] == ["A-000001"]
    alert = worse.json("alerts")["alerts"][0]
    began = {k: datetime.fromisoformat(alert["shift_began"][k]) for k in ("estimate", "earliest", "latest")}
    assert began["earliest"] <= moment(562)
    assert began["latest"] >= moment(559) - timedelta(minutes=1)
    # from the records: the 14 leaks of the quiet stretch are the baseline or part of it
    assert alert["direction"] == "worse"
    assert alert["stream"] == "seal-leak"
    assert 12 <= alert["baseline"]["events"] <= 14
    assert alert["rate_ratio"]["low"] > 1
    assert datetime.fromisoformat(alert["raised_at"]) <= moment(595)  # at the sixth leak of the shift


def test_an_alert_reaches_those_it_concerns_and_nobody_else(worse) -> None:
    assert worse.sink.told() == [("alert", "qa@skerry.example")]
    mail = worse.sink.mails[0]
    assert mail["Gapbell-Alert"] == "A-000001"
    assert "A-000001" in mail.get_body(("plain",)).get_content()


def test_private_attributes_appear_in_no_message(worse) -> None:
    assert "op1" not in worse.sink.mails[0].as_string()
    assert "fixture F" in worse.sink.mails[0].get_body(("plain",)).get_content()


def test_a_second_pass_over_the_same_files_raises_and_sends_nothing(worse, moment) -> None:
    report = worse.cycle(moment(601))
    assert report["raised"] == report["updated"] == report["withdrawn"] == []
    assert report["sources"][0]["files"] == 0
    assert len(worse.sink.mails) == 1


def test_one_alert_stands_for_the_whole_shift_and_is_updated_when_the_evidence_grew(
    worse, tested, moment
) -> None:
    worse.drop("c.csv", tested(range(600, 700), WORSE), moment(700))
    report = worse.cycle(moment(701))
    assert report["raised"] == []
    assert report["updated"] == ["A-000001"]
    kinds = [k for k, _ in worse.sink.told()]
    assert kinds[0] == "alert"
    assert kinds.count("update") == 1
    first, second = worse.sink.mails[0], worse.sink.mails[kinds.index("update")]
    assert second["In-Reply-To"] == first["Message-ID"]


def test_an_improvement_is_alerted_during_the_open_gap(yard, tested, moment) -> None:
    yard.drop("a.csv", tested(range(900), QUIET), moment(900))
    report = yard.cycle(moment(901))
    assert report["raised"] == ["A-000001"]
    alert = yard.json("alerts")["alerts"][0]
    assert (alert["direction"], alert["since"]["events"]) == ("better", 0)
    # the open gap began with unit 560; no unit after it leaked
    assert moment(560) < datetime.fromisoformat(alert["raised_at"]) < moment(899)


def test_a_correction_that_removes_the_evidence_withdraws_the_alert_and_names_the_records(
    worse, tested, moment
) -> None:
    worse.drop("z.csv", tested(range(562, 600)), moment(605))
    report = worse.cycle(moment(606))
    assert report["withdrawn"] == ["A-000001"]
    assert worse.json("alerts")["alerts"] == []
    gone = worse.json("alerts", "--all")["alerts"][0]
    assert gone["state"] == "withdrawn"
    assert "S589" in gone["withdrawn_why"]
    assert [k for k, _ in worse.sink.told()] == ["alert", "withdrawal"]


def test_a_voided_record_is_neither_event_nor_exposure(worse, tested, moment) -> None:
    voided = [line.rsplit(",", 1)[0] + ",VOID" for line in tested(range(562, 600))]
    worse.drop("z.csv", voided, moment(605))
    report = worse.cycle(moment(606))
    assert report["sources"][0]["voided"] == 38
    assert report["withdrawn"] == ["A-000001"]
    assert worse.stream()["exposure"] == 562


@pytest.mark.parametrize("finding", ["no-cause", "cause-found", "recording-error"])
def test_after_settling_the_rules_start_again_and_a_shift_that_goes_on_is_alerted_anew(
    worse, tested, moment, finding: str
) -> None:
    done = worse.run("settle", "A-1", "--by", "Ida", "--finding", finding, "--at", moment(602).isoformat())
    assert done.exit_code == 0, done.output
    assert worse.cycle(moment(603))["raised"] == []
    assert worse.stream()["standing"] == "steady"
    worse.drop("c.csv", tested(range(600, 700), WORSE), moment(700))
    assert worse.cycle(moment(701))["raised"] == ["A-000002"]
    assert [k for k, _ in worse.sink.told()] == ["alert", "settled", "alert"]


def test_an_intended_change_starts_a_new_baseline_at_the_shift(worse, tested, moment) -> None:
    worse.drop("c.csv", tested(range(600, 700), WORSE), moment(700))
    worse.cycle(moment(700))
    worse.run("settle", "A-1", "--by", "Ida", "--finding", "intended-change", "--at", moment(701).isoformat())
    assert worse.cycle(moment(702))["raised"] == []
    stream = worse.stream()
    assert (stream["standing"], stream["baseline"]["source"]) == ("steady", "after-change")
    # the new level is one in 6 units; 12 events of it make the new baseline
    assert stream["baseline"]["rate"] == pytest.approx(1 / 6, rel=0.15)
    told = worse.json("baseline", "seal-leak")["baselines"]
    assert "Ida" in told[-1]["why"] + told[-1]["by"]


def test_a_settled_alert_whose_evidence_was_corrected_away_does_not_swallow_the_next_shift(
    worse, tested, moment
) -> None:
    worse.run("settle", "A-1", "--by", "Ida", "--finding", "recording-error", "--at", moment(602).isoformat())
    worse.drop("b2.csv", tested(range(560, 600)), moment(603))
    assert worse.cycle(moment(604))["raised"] == []
    later = set(range(639, 760, 40)) | set(range(765, 830, 6))
    worse.drop("c.csv", tested(range(600, 830), later), moment(830))
    assert worse.cycle(moment(831))["raised"] == ["A-000002"]
    assert worse.json("alerts")["alerts"][0]["state"] == "raised"


def test_an_open_alert_whose_shift_was_corrected_away_is_not_handed_on_to_another_shift(
    worse, tested, moment
) -> None:
    later = set(range(639, 760, 40)) | set(range(765, 830, 6))
    worse.drop("b2.csv", tested(range(560, 600)), moment(603))
    worse.drop("c.csv", tested(range(600, 830), later), moment(830))
    report = worse.cycle(moment(831))
    assert (report["withdrawn"], report["raised"]) == (["A-000001"], ["A-000002"])


def test_records_dated_ahead_are_kept_but_not_judged(yard, tested, moment) -> None:
    yard.drop("a.csv", tested(range(600), WORSE), moment(559))
    yard.last = moment(560).isoformat()
    assert yard.cycle(moment(560))["raised"] == []
    assert yard.stream()["ahead"] == 39  # units 561 to 599 are later than the pass
    assert yard.stream()["events"] == 14
    assert yard.cycle(moment(600))["raised"] == ["A-000001"]


def test_an_alert_that_nobody_took_is_repeated_once(worse, moment) -> None:
    for days in (1, 6, 7):
        worse.cycle(moment(601) + timedelta(days=days))
    assert [k for k, _ in worse.sink.told() if k != "feed-notice"] == ["alert", "reminder"]


def test_an_alert_that_was_taken_is_not_repeated(worse, moment) -> None:
    assert worse.run("take", "A-1", "--by", "Ida", "--at", moment(602).isoformat()).exit_code == 0
    worse.cycle(moment(601) + timedelta(days=8))
    assert [k for k, _ in worse.sink.told() if k != "feed-notice"] == ["alert"]
    assert worse.json("alerts")["alerts"][0]["taken_by"] == "Ida"


# -- silence ------------------------------------------------------------------------------------------------


def test_a_feed_that_falls_silent_is_told_once_and_is_no_improvement(yard, tested, moment) -> None:
    yard.drop("a.csv", tested(range(560), QUIET), moment(560))
    yard.cycle(moment(561))
    for days in (4, 6, 6.1, 6.2):
        report = yard.cycle(moment(560) + timedelta(days=days))
        assert report["raised"] == []
    assert yard.sink.told() == [("feed-notice", "it@skerry.example")]
    yard.last = (moment(560) + timedelta(days=6.2)).isoformat()
    stream = yard.stream()
    assert (stream["standing"], stream["open_gap"]) == ("silent", 0)
    yard.drop("b.csv", tested(range(560, 650), QUIET), moment(560) + timedelta(days=7))
    yard.cycle(moment(650) + timedelta(minutes=5))
    yard.last = (moment(650) + timedelta(minutes=5)).isoformat()
    assert yard.stream()["standing"] == "steady"
    assert [m["Subject"] for m in yard.sink.mails] == [
        "Source proof-test is silent",
        "Source proof-test is back",
    ]


def test_a_record_dated_in_the_far_future_does_not_keep_a_dead_feed_alive(yard, tested, moment) -> None:
    odd = "S9999,2036-01-05T08:00:00,F1,op1,OK"
    yard.drop("a.csv", [*tested(range(560), QUIET), odd], moment(560))
    yard.cycle(moment(561))
    at = moment(560) + timedelta(days=6)
    yard.cycle(at)
    yard.last = at.isoformat()
    assert yard.stream()["standing"] == "silent"


def test_the_same_file_delivered_again_and_again_does_not_keep_a_dead_feed_alive(
    yard, tested, moment
) -> None:
    for days in (0, 2, 4, 6):
        at = moment(560) + timedelta(days=days)
        yard.drop("a.csv", tested(range(560), QUIET), at)
        yard.cycle(at + timedelta(minutes=1))
    yard.last = (at + timedelta(minutes=1)).isoformat()
    assert yard.stream()["standing"] == "silent"


def test_a_list_of_failures_alone_is_alive_as_long_as_its_files_come(yard) -> None:
    yard.configure(
        """
[sources.incidents]
kind = "csv-drop"
folder = "drops"
columns = { time = "happened" }
key = ["report"]
proof_of_life = "file"
stale_after = "9 days"
[streams.incidents]
title = "Reportable incidents"
source = "incidents"
exposure = "days"
safety = true
baseline = { first_events = 6 }
"""
    )
    start = datetime.fromisoformat("2026-01-05T12:00:00+01:00")
    happened = [f"R{i},{start + timedelta(days=10 * i):%Y-%m-%dT%H:%M:%S}" for i in range(8)]
    at = start + timedelta(days=71)
    yard.drop("a.csv", happened, at, columns="report,happened")
    yard.cycle(at + timedelta(hours=1))
    for week in range(1, 25):  # an empty list each week: the feed is alive, nothing happened
        at = start + timedelta(days=71 + 7 * week)
        yard.drop(f"{week}.csv", [], at, columns="report,happened")
        yard.cycle(at + timedelta(hours=1))
    yard.last = (at + timedelta(hours=1)).isoformat()
    stream = yard.stream("incidents")
    # 1 day since the eighth report, then 24 weeks; exposure is proven up to the newest file
    assert stream["open_gap"] == pytest.approx(1 + 7 * 24, abs=0.01)
    assert stream["standing"] == "better"
    mail = next(m for m in yard.sink.mails if m["Gapbell-Kind"] == "alert")
    assert "no proof of safety" in mail.get_body(("plain",)).get_content()


# -- what breaks ---------------------------------------------------------------------------------------------


def test_a_broken_source_is_named_and_told_and_never_stops_the_others(yard, tested, moment) -> None:
    from textwrap import dedent

    other = """
        [sources.gone]
        kind = "csv-drop"
        folder = "nowhere"
        columns = { time = "t" }
        """
    source, leak = _parts(yard)
    yard.configure(dedent(other), source, leak)
    yard.drop("a.csv", tested(range(600), WORSE), moment(600))
    report = yard.cycle(moment(601), status=1)
    assert report["raised"] == ["A-000001"]
    assert "nowhere" in next(s["error"] for s in report["sources"] if s["source"] == "gone")
    assert sorted(yard.sink.told()) == [("alert", "qa@skerry.example"), ("feed-notice", "it@skerry.example")]


def _parts(yard) -> tuple[str, str]:
    text = yard.path.read_text(encoding="utf-8")
    at, cut = text.index("[sources."), text.index("[streams.")
    return "\n" + text[at:cut], "\n" + text[cut:]


def test_a_stream_that_cannot_be_assessed_never_stops_the_others(yard, tested, moment, monkeypatch) -> None:
    from watcher import cycle

    source, leak = _parts(yard)
    yard.configure(TWO, source, leak, leak.replace("seal-leak", "twin"))
    real = cycle.build

    def build(config: Any, name: str, *args: Any, **kwargs: Any) -> Any:
        if name == "seal-leak":
            raise RuntimeError("caused by the test")
        return real(config, name, *args, **kwargs)

    monkeypatch.setattr(cycle, "build", build)
    yard.drop("a.csv", tested(range(600), WORSE), moment(600))
    report = yard.cycle(moment(601), status=1)
    assert report["raised"] == ["A-000001"]
    assert [a["stream"] for a in yard.json("alerts")["alerts"]] == ["twin"]
    assert ("feed-notice", "it@skerry.example") in yard.sink.told()
    monkeypatch.setattr(cycle, "build", real)
    assert yard.cycle(moment(602))["raised"] == ["A-000002"]


def test_a_mail_server_that_is_away_delays_and_doubles_nothing(worse, tested, moment) -> None:
    worse.sink.answer = "451 later"
    worse.drop("c.csv", tested(range(600, 624), WORSE), moment(624))
    at = moment(625)
    worse.run("settle", "A-1", "--by", "Ida", "--finding", "no-cause", "--at", at.isoformat())
    assert worse.cycle(at)["waiting"] == 1
    worse.sink.answer = "250 kept"
    # first wait: one minute, give or take a fifth
    assert worse.cycle(at + timedelta(seconds=40))["delivered"] == 0
    assert worse.cycle(at + timedelta(seconds=80))["delivered"] == 1
    assert [k for k, _ in worse.sink.told()] == ["alert", "settled"]


def test_a_message_refused_for_good_is_told_to_the_maintainers_once(yard, tested, moment) -> None:
    yard.sink.refused["qa@skerry.example"] = "550 no such box"
    yard.drop("a.csv", tested(range(600), WORSE), moment(600))
    yard.cycle(moment(601), status=1)
    yard.cycle(moment(602))
    assert yard.sink.told() == [("feed-notice", "it@skerry.example")]
    assert "qa@skerry.example" in yard.sink.mails[0].get_body(("plain",)).get_content()
    channel = yard.json("status", "--at", moment(602).isoformat(), status=1)["channels"][0]
    assert channel["failed"] == 1


def test_every_row_that_cannot_be_understood_is_listed_and_told_to_the_maintainers(
    yard, tested, moment
) -> None:
    lines = tested(range(560), QUIET)
    lines[10] = "S10,yesterday,F0,op1,OK"
    yard.drop("a.csv", lines, moment(560))
    report = yard.cycle(moment(561))
    assert report["sources"][0]["set_aside"] == 1
    found = yard.json("rejects")["rejects"]
    assert [(r["file"], r["line"], r["column"], r["value"]) for r in found] == [
        ("drops/a.csv", 12, "tested_at", "yesterday")
    ]
    assert yard.sink.told() == [("feed-notice", "it@skerry.example")]
    assert "drops/a.csv" in yard.sink.mails[0].get_body(("plain",)).get_content()


# -- the same records, the same answer ------------------------------------------------------------------------


def _facts(yard) -> Any:
    alerts = yard.json("alerts", "--all")["alerts"]
    keep = (
        "stream",
        "direction",
        "raised_at",
        "shift_began",
        "baseline",
        "since",
        "rate_ratio",
        "rules",
        "records",
    )
    stream = yard.stream()
    return [{k: a[k] for k in keep} for a in alerts], {
        k: stream[k] for k in ("standing", "events", "exposure", "open_gap", "baseline")
    }


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_the_same_records_shuffled_and_split_give_the_same_alerts(
    yard, tested, moment, tmp_path: Path, seed: int
) -> None:
    rng = random.Random(seed)
    lines = tested(range(650), WORSE)
    at = moment(650)
    yard.drop("a.csv", lines, at)
    yard.last = moment(651).isoformat()
    yard.cycle(moment(651))
    whole = _facts(yard)
    shutil.rmtree(yard.folder / "drops")
    for path in yard.folder.glob("gapbell.db*"):
        path.unlink()
    rng.shuffle(lines)
    while lines:
        cut = rng.randint(1, 200)
        yard.drop(f"{rng.random()}.csv", lines[:cut], at)
        del lines[:cut]
        if rng.random() < 0.5:
            yard.cycle(moment(651))
    yard.cycle(moment(651))
    standing = [a for a in yard.json("alerts", "--all")["alerts"] if a["state"] == "raised"]
    assert len(standing) == 1
    alerts, stream = _facts(yard)
    assert ([a for a in alerts if a["raised_at"] == standing[0]["raised_at"]], stream) == whole


def test_records_delivered_day_by_day_end_with_the_same_evidence_as_all_at_once(yard, tested, moment) -> None:
    for i in range(0, 660, 12):
        yard.drop(f"{i:04d}.csv", tested(range(i, i + 12), WORSE), moment(i + 12))
        yard.cycle(moment(i + 12) + timedelta(minutes=5))
    yard.last = (moment(660) + timedelta(minutes=5)).isoformat()
    daily = _facts(yard)
    for path in yard.folder.glob("gapbell.db*"):
        path.unlink()
    yard.cycle(moment(660) + timedelta(minutes=5))
    assert _facts(yard) == daily


def test_a_changed_configuration_lets_the_files_be_read_again_with_a_line_in_the_log(
    yard, tested, moment, caplog
) -> None:
    yard.drop("a.csv", tested(range(560), QUIET), moment(560))
    yard.cycle(moment(561))
    source, leak = _parts(yard)
    yard.configure(source.replace('key = ["serial"]', 'key = ["serial", "tested_at"]'), leak)
    report = yard.cycle(moment(562))
    assert report["sources"][0]["rows"] == 560
    assert yard.json("records")["records"][0]["key"].keys() == {"serial", "tested_at"}
    assert yard.stream()["events"] == 14
    assert "read again" in caplog.text


def test_a_column_that_a_new_stream_needs_is_read_from_files_that_were_read_before(
    yard, tested, moment
) -> None:
    yard.drop("a.csv", tested(range(560), QUIET), moment(560))
    yard.cycle(moment(561))
    source, leak = _parts(yard)
    yard.configure(
        source.replace('attributes = ["fixture"], ', ""),
        leak,
        leak.replace("seal-leak", "f4").replace("notify", 'where = { fixture = ["F4"] }\nnotify'),
    )
    yard.cycle(moment(562))
    # every leak is at a unit 40 k - 1, whose fixture is F4; one unit in five is on it
    assert (yard.stream("f4")["events"], yard.stream("f4")["exposure"]) == (14, 112)


def test_nothing_is_read_or_assessed_again_when_nothing_is_new(yard, tested, moment, monkeypatch) -> None:
    from watcher import cycle

    yard.drop("a.csv", tested(range(560), QUIET), moment(560))
    yard.cycle(moment(561))

    def never(*_: Any, **__: Any) -> Any:
        raise AssertionError("asked again")

    monkeypatch.setattr(cycle, "record_frame", never)
    monkeypatch.setattr(cycle, "assess", never)
    monkeypatch.setattr(CsvDrop, "_fingerprint", never, raising=False)
    assert yard.cycle(moment(562))["streams"] == [{"stream": "seal-leak", "standing": "steady"}]


def test_a_key_whose_feature_is_not_there_yet_leaves_its_stream_unjudged_and_says_so(
    yard, tested, moment
) -> None:
    source, leak = _parts(yard)
    mes = '[sources.mes]\nkind = "mes-export"\nfolder = "mes"\nformat = "b2mml"\n'
    yard.configure(
        TWO, source, mes, leak + 'production = { source = "mes" }\n', leak.replace("seal-leak", "twin")
    )
    yard.drop("a.csv", tested(range(600), WORSE), moment(600))
    report = yard.cycle(moment(601), status=1)
    assert [a["stream"] for a in yard.json("alerts")["alerts"]] == ["twin"]
    assert [s["stream"] for s in report["streams"]] == ["twin"]
    found = yard.json("status", "--at", moment(601).isoformat(), status=1)
    unjudged = next(s for s in found["streams"] if s["stream"] == "seal-leak")
    assert "not yet available" in str(unjudged["advice"])


Moment = Callable[[int], datetime]
