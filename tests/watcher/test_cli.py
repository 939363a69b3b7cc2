"""The command line keeps the contract: what is printed where, in which shape, with which exit status."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from datetime import datetime, timedelta
from pathlib import Path

import pytest

QUIET = set(range(39, 560, 40))
WORSE = QUIET | set(range(565, 700, 6))

ALERT = {
    "id", "stream", "direction", "state", "raised_at", "shift_began", "rules", "baseline", "since", "rate_ratio",
    "recurrence_years", "exposure_unit", "look_first", "records", "summary",
}  # fmt: skip
STREAM = {
    "stream", "title", "form", "exposure_unit", "standing", "events", "exposure", "open_gap", "mean_gap", "baseline", "last_event",
    "alert", "advice",
}  # fmt: skip
REPORT = {"at", "sources", "streams", "raised", "updated", "withdrawn", "delivered", "waiting"}
COUNTS = {"source", "files", "rows", "new", "changed", "voided", "repeated", "set_aside", "error"}
RECORD = {
    "source", "key", "time", "unit", "quantity", "defects", "opportunities", "attributes", "file", "line", "revision", "voided",
}  # fmt: skip
WATCHER = {"active", "host", "pid", "since", "last_pass", "standby"}


@pytest.fixture
def worse(yard, tested, moment):
    """Return a yard with an open alert."""
    yard.drop("a.csv", tested(range(600), WORSE), moment(600))
    yard.report = yard.cycle(moment(601))
    yard.last = moment(601).isoformat()
    return yard


# -- shapes: every key that the contract names is there ----------------------------------------------------


def test_cycle_prints_the_contracts_object(worse) -> None:
    assert worse.report.keys() >= REPORT
    assert worse.report["sources"][0].keys() >= COUNTS
    assert (
        worse.report["sources"][0] | {"files": 1, "rows": 600, "new": 600, "error": None}
        == worse.report["sources"][0]
    )
    assert worse.report["streams"] == [{"stream": "seal-leak", "standing": "worse"}]


def test_status_prints_the_contracts_object(worse) -> None:
    found = worse.json("status")
    assert found.keys() >= {"at", "plant", "streams", "sources", "channels", "watcher"}
    assert found["plant"] == "Skerry Point Works"
    assert found["streams"][0].keys() >= STREAM
    assert found["streams"][0]["alert"] == "A-000001"
    assert found["sources"][0].keys() >= {
        "source", "last_contact", "last_record", "records", "set_aside", "stale", "error",
    }  # fmt: skip
    assert found["channels"][0].keys() >= {"channel", "waiting", "failed", "last_delivery", "error"}
    assert found["watcher"].keys() >= WATCHER


def test_alerts_print_the_contracts_object_and_show_adds_to_it(worse) -> None:
    alert = worse.json("alerts")["alerts"][0]
    assert alert.keys() >= ALERT
    assert alert["rate_ratio"].keys() >= {"estimate", "low", "high", "confidence", "uncorrected"}
    assert alert["baseline"].keys() >= {
        "events", "exposure", "rate", "low", "high", "confidence", "from", "to", "source", "warnings",
    }  # fmt: skip
    shown = worse.json("alerts", "show", "A-000001")
    assert {k: shown[k] for k in ALERT} == {k: alert[k] for k in ALERT}
    assert "now" in shown
    assert shown["records"] == [
        {"serial": f"S{i}"} for i in range(559, 600, 6)
    ]  # the last of the quiet leaks belongs to it


def test_figures_of_an_alert_can_be_redone_from_what_is_shown(worse) -> None:
    """Independent: rates from counts, and Clopper & Pearson's conditional interval by scipy.stats."""
    from scipy.stats import beta

    shown = worse.json("alerts", "show", "1")
    m, t = shown["baseline"]["events"], shown["baseline"]["exposure"]
    n, e = shown["since"]["events"], shown["since"]["exposure"]
    assert shown["baseline"]["rate"] == pytest.approx(m / t, rel=1e-5)
    assert shown["since"]["rate"] == pytest.approx(n / e, rel=1e-5)
    plain = shown["rate_ratio"]["uncorrected"]
    assert plain["estimate"] == pytest.approx((n / e) / (m / t), rel=1e-3)
    low, high = beta.ppf(0.025, n, m + 1), beta.ppf(0.975, n + 1, m)
    assert plain["low"] == pytest.approx(low / (1 - low) * t / e, rel=1e-3)
    assert plain["high"] == pytest.approx(high / (1 - high) * t / e, rel=1e-3)
    assert f"n/E = {n}/{e:.6g}" in " ".join(worse.run("alerts", "show", "1").stdout.split())


def test_records_print_every_record_with_file_line_and_revision(worse, tested, moment) -> None:
    worse.drop("b.csv", [line.replace("LEAK", "OK") for line in tested(range(39, 40), WORSE)], moment(602))
    worse.cycle(moment(603))
    found = worse.json("records")["records"]
    assert len(found) == 600
    assert found[0].keys() >= RECORD
    changed = next(r for r in found if r["unit"] == "S39")
    assert (changed["file"], changed["line"], changed["revision"]) == ("drops/b.csv", 2, 2)
    earlier = [r for r in worse.json("records", "--history")["records"] if r["unit"] == "S39"]
    assert [(r["revision"], r["attributes"]["result"], r["file"]) for r in earlier] == [
        (1, "LEAK", "drops/a.csv"),
        (2, "OK", "drops/b.csv"),
    ]
    assert (changed["quantity"], changed["defects"], changed["voided"]) == (1, None, False)


def test_rejects_print_a_refused_file_as_one_entry_without_a_line(yard, moment) -> None:
    path = yard.folder / "drops" / "picture.csv"
    path.write_bytes(b"\x89PNG\r\n\x1a\n\x00\x00")
    os.utime(path, (moment(1).timestamp(),) * 2)
    report = yard.cycle(moment(2))
    assert report["sources"][0]["error"] is None
    (entry,) = yard.json("rejects")["rejects"]
    assert entry.keys() >= {"source", "file", "line", "column", "value", "reason", "at"}
    assert (entry["file"], entry["line"]) == ("drops/picture.csv", None)


# -- where and how -------------------------------------------------------------------------------------------


def test_the_configuration_is_named_before_or_after_the_command(worse) -> None:
    from click.testing import CliRunner

    from watcher.cli import main

    said = [
        CliRunner().invoke(main, words).stdout
        for words in (
            ["-c", str(worse.path), "alerts", "--json"],
            ["alerts", "-c", str(worse.path), "--json"],
            ["alerts", "--json", "--config", str(worse.path)],
        )
    ]
    assert said[0] == said[1] == said[2]
    assert json.loads(said[0])["alerts"]
    for words in (
        ["alerts", "show", "1", "-c", str(worse.path)],
        ["alerts", "-c", str(worse.path), "show", "1"],
    ):
        assert CliRunner().invoke(main, words).exit_code == 0


def test_the_configuration_is_plant_toml_in_the_present_folder_by_default(worse, monkeypatch) -> None:
    from click.testing import CliRunner

    from watcher.cli import main

    monkeypatch.chdir(worse.folder)
    assert CliRunner().invoke(main, ["alerts"]).exit_code == 0


def test_logs_go_to_standard_error_and_json_stands_alone_on_standard_output(yard, tested, moment) -> None:
    source = yard.path.read_text().replace('folder = "drops"', 'folder = "nowhere"')
    yard.path.write_text(source)
    done = subprocess.run(
        [sys.executable, "-m", "watcher", "-v", "cycle", "--json", "-c", str(yard.path), "--at", moment(1).isoformat()],
        capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert done.returncode == 1
    assert "nowhere" in json.loads(done.stdout)["sources"][0]["error"]
    assert "nowhere" in done.stderr


def test_every_fault_of_the_configuration_is_listed_at_once_with_status_2(yard) -> None:
    yard.path.write_text(
        yard.path.read_text()
        .replace('folder = "drops"', 'foldre = "drops"')
        .replace("first_events = 12", "first_events = 2")
    )
    done = yard.run("status", "--json")
    assert done.exit_code == 2
    assert done.stdout == ""
    lines = done.stderr.strip().splitlines()
    assert all(line.startswith("plant.toml: ") for line in lines)
    assert any('did you mean "folder"?' in line for line in lines)
    assert any("first_events" in line and "found 2" in line for line in lines)


@pytest.mark.parametrize(
    ("words", "status"),
    [
        (["settle", "A-1", "--by", "Ida", "--finding", "bad-luck"], 2),
        (["settle", "A-1", "--by", "Ida"], 2),
        (["take", "A-7", "--by", "Ida"], 2),
        (["records", "--stream", "nothing"], 2),
        (["cycle", "--at", "yesterday"], 2),
        (["nonsense"], 2),
        (["pause", "seal-leak", "--until", "2027-01-01", "--by", "Ida", "--reason", "rebuild"], 1),
        (["advise"], 1),
        (["rejects", "--retry"], 1),
    ],
    ids=lambda v: v[0] if isinstance(v, list) else str(v),
)
def test_what_cannot_be_done_is_said_with_its_exit_status(worse, words: list[str], status: int) -> None:
    done = worse.run(*words)
    assert done.exit_code == status
    assert done.stderr.strip()
    assert "Traceback" not in done.output
    if status == 1:
        assert "not yet available" in done.stderr


@pytest.mark.parametrize("word", ["new", "pause", "resume", "time-to-signal", "advise"])
def test_commands_that_come_later_are_there_and_say_so(yard, word: str) -> None:
    done = yard.run(word)
    assert done.exit_code == 1
    assert "not yet available" in done.stderr


def test_a_moment_without_a_zone_is_plant_time(worse) -> None:
    assert worse.json("status", "--at", "2026-02-24T10:15")["at"] == "2026-02-24T10:15:00+01:00"


def test_a_yard_run_at_stated_times_lives_in_them(worse, moment) -> None:
    """Settled without --at, the rules start again at the last pass, not years later by the clock."""
    assert worse.run("settle", "A-1", "--by", "Ida", "--finding", "no-cause").exit_code == 0
    worse.cycle(moment(602))
    found = worse.json("status")
    assert found["at"] == moment(602).isoformat(timespec="seconds")
    assert found["streams"][0]["standing"] == "steady"


def test_an_alert_cannot_be_settled_twice(worse) -> None:
    words = ["settle", "A-1", "--by", "Ida", "--finding", "no-cause", "--note", "looked at all seals"]
    assert worse.run(*words).exit_code == 0
    again = worse.run(*words)
    assert again.exit_code == 2
    assert "was settled as no-cause by Ida" in again.stderr
    found = worse.json("alerts", "--all")["alerts"][0]
    assert (found["state"], found["finding"], found["settled_by"], found["note"]) == (
        "settled", "no-cause", "Ida", "looked at all seals",
    )  # fmt: skip


# -- what people read ----------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("words", "told"),
    [
        (["cycle", "--at", "2026-02-25T12:00"], ["seal-leak", "No alert was raised"]),
        (["status"], ["seal-leak", "worse", "A-000001", "Europe/Oslo"]),
        (["alerts"], ["A-000001", "coming closer together", "Europe/Oslo"]),
        (["alerts", "show", "a-000001"], ["shift began", "uncorrected", "S589", "drops/a.csv", "cusum", "raised", "sent to quality"]),
        (["records"], ["S599", "drops/a.csv"]),
        (["rejects"], ["No row is set aside."]),
        (["baseline", "seal-leak"], ["first-events"]),
        (["rehearse", "--to", "2026-02-24"], ["1 alert would have been raised"]),
        (["check"], ["fixture F", "mail", "reached"]),
        (["digest"], ["Needs attention", "A-000001"]),
    ],
    ids=lambda v: " ".join(v) if v and v[0].islower() else "",
)  # fmt: skip
def test_every_reading_command_says_it_in_words(worse, words: list[str], told: list[str]) -> None:
    done = worse.run(*words)
    assert done.exit_code == 0, done.output
    assert all(t in done.stdout for t in told), done.stdout
    assert "\x1b[" not in done.stdout  # plain text in a pipe


def test_control_characters_of_a_source_are_shown_escaped(yard, tested, moment) -> None:
    lines = tested(range(3), {1})
    lines[1] = lines[1].replace("F1", "F\x1b[31m1\u202e")
    yard.drop("a.csv", lines, moment(3))
    yard.cycle(moment(4))
    for words in (["records"], ["check"]):
        said = yard.run(*words).stdout
        assert "\x1b" not in said
        assert "\u202e" not in said


# -- check, digest ---------------------------------------------------------------------------------------------


def test_check_sends_nothing_unless_asked(worse) -> None:
    before = len(worse.sink.mails)
    found = worse.json("check")
    assert found["channels"][0]["outcome"] == "sent"
    assert len(worse.sink.mails) == before
    assert worse.run("check", "--send-test").exit_code == 0
    mail = worse.sink.mails[before]
    assert "test" in mail["Subject"].lower()


def test_check_finds_what_cannot_be_reached_and_goes_on(yard, tested, moment) -> None:
    yard.path.write_text(
        yard.path.read_text()
        + '[sources.gone]\nkind = "csv-drop"\nfolder = "nowhere"\ncolumns = { time = "t" }\n'
        + '[channels.away]\nkind = "email"\nhost = "127.0.0.1"\nport = 9\nsecurity = "none"\nsender = "a@b.example"\n'
    )
    yard.drop("a.csv", tested(range(3)), moment(3))
    found = yard.json("check", status=1)
    assert [bool(s["error"]) for s in found["sources"]] == [False, True]
    assert found["sources"][0]["rows"][0]["key"] == {"serial": "S0"}
    assert {c["channel"]: c["outcome"] for c in found["channels"]} == {"mail": "sent", "away": "later"}
    assert len(found["problems"]) == 2


def test_check_shows_rows_that_would_be_set_aside_with_their_reason(yard, tested, moment) -> None:
    yard.drop("a.csv", [*tested(range(2)), "S2,soon,F0,op0,OK"], moment(3))
    (aside,) = yard.json("check")["sources"][0]["set_aside"]
    assert (aside["line"], aside["column"], aside["value"]) == (4, "tested_at", "soon")


def test_keys_whose_feature_comes_later_are_named_by_check(yard) -> None:
    yard.path.write_text(yard.path.read_text() + 'form = "auto"\n')
    said = yard.run("check").stdout
    assert "[streams.seal-leak] form" in said
    assert "not yet available" in said


def test_the_digest_is_written_as_mail_text_and_page(worse, tmp_path: Path) -> None:
    from email import message_from_bytes, policy

    done = worse.run("digest", "--out", str(tmp_path / "out"))
    assert done.exit_code == 0, done.output
    mail = message_from_bytes((tmp_path / "out" / "digest.eml").read_bytes(), policy=policy.default)
    text = (tmp_path / "out" / "digest.txt").read_text()
    assert mail.get_body(("plain",)).get_content().split() == text.split()
    assert "A-000001" in text
    page = (tmp_path / "out" / "digest.html").read_text()
    assert "data:image/png;base64," in page
    assert 'src="http' not in page
    assert len(worse.sink.mails) == 1  # the alert: nothing else was sent


def test_the_digest_of_a_period_is_sent_once_to_those_who_want_it(worse, moment) -> None:
    first, second = (worse.json("digest", "--send", "--at", moment(601 + i).isoformat()) for i in (0, 1))
    assert (first["sent"], second["sent"]) == (True, False)
    assert [t for t in worse.sink.told() if t[0] == "digest"] == [("digest", "qa@skerry.example")]
    next_week = moment(601) + timedelta(days=7)
    assert worse.json("digest", "--send", "--at", next_week.isoformat())["sent"] is True


# -- one watcher -----------------------------------------------------------------------------------------------


def test_a_cycle_gives_way_to_an_active_watcher_and_names_it(worse, moment) -> None:
    from watcher.commands import real_clock
    from watcher.config import load_config
    from watcher.leasing import DAEMON
    from watcher.store import Store
    from watcher.store.lease import hold

    me = {"host": "yard-two", "pid": 4711, "since": "2026-03-04T10:15:00+01:00"}
    with Store.open(load_config(worse.path).store_url) as store:
        assert hold(store, owner=me, now_us=round(real_clock().timestamp() * 1e6), name=DAEMON) is not None
    done = worse.run("cycle", "--at", moment(602).isoformat())
    assert done.exit_code == 1
    assert "yard-two" in done.stderr
    assert "4711" in done.stderr
    told = worse.json("status")["watcher"]
    assert (told["active"], told["host"], told["pid"]) == (True, "yard-two", 4711)
    # people's answers are still taken down
    assert worse.run("take", "A-1", "--by", "Ida").exit_code == 0


def test_the_lease_of_a_process_that_died_here_is_free_at_once(worse, moment) -> None:
    import socket

    from watcher.commands import real_clock
    from watcher.config import load_config
    from watcher.store import Store
    from watcher.store.lease import hold

    with subprocess.Popen([sys.executable, "-c", "pass"]) as gone:
        gone.wait()
    me = {"host": socket.gethostname(), "pid": gone.pid, "since": "2026-03-04T10:15:00+01:00"}
    with Store.open(load_config(worse.path).store_url) as store:
        assert hold(store, owner=me, now_us=round(real_clock().timestamp() * 1e6)) is not None
    worse.cycle(moment(602))


def test_whoever_lost_the_lease_writes_nothing_any_more(worse) -> None:
    import sqlalchemy as sa

    from watcher.commands import real_clock
    from watcher.config import load_config
    from watcher.leasing import holding
    from watcher.store import LeaseLostError, Store
    from watcher.store import schema as s

    url = load_config(worse.path).store_url
    with Store.open(url) as store, Store.open(url) as other, holding(store, real_clock):
        with other.writing() as conn:  # as if it had slept past its end and another host had taken over
            conn.execute(sa.update(s.lease).values(token=s.lease.c.token + 1))
        with pytest.raises(LeaseLostError), store.writing() as conn:
            conn.execute(sa.delete(s.alerts))
    assert datetime.fromisoformat(worse.json("alerts")["alerts"][0]["raised_at"])


def test_the_daemons_start_and_the_help_need_no_heavy_package(yard) -> None:
    code = (
        "import sys\n"
        f"sys.argv = ['gapbell', 'alerts', '-c', {str(yard.path)!r}]\n"
        "from watcher.cli import main\n"
        "try:\n    main()\nexcept SystemExit as end:\n    assert not end.code, end.code\n"
        "print(sorted({'scipy', 'matplotlib', 'pandas', 'apscheduler', 'requests', 'rich'} & set(sys.modules)))\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert done.stdout.splitlines()[-1] == "[]", done.stderr
