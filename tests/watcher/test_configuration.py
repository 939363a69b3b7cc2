"""The configuration: every key is checked, every fault is one line, no secret is ever shown."""

from __future__ import annotations

from pathlib import Path

import pytest

from watcher.config import ConfigError, SecretMissingError, load_config
from watcher.config.values import Secret
from watcher.trial.plant import configuration

GOOD = configuration(smtp_port=2525, hook="http://127.0.0.1:9/room", ca_file="ca.pem")
FULL = """
[plant]
name = "Skerry Point Works"
timezone = "Europe/Oslo"
[store]
url = "sqlite:///gapbell.db"
[calendar]
workdays = ["mon", "tue", "wed", "thu", "fri"]
hours = "06:00-22:00"
holidays = "NO"
closed = ["2026-07-06..2026-07-24", "2026-12-24"]
opened = ["2026-10-03"]
[schedule]
collect = "*/15 * * * *"
digest  = "0 7 * * mon"
[alerting]
false_alerts_per_year = 1.0
remind_after = "3 workdays"
[channels.mail]
kind = "email"
host = "smtp.plant.example"
port = 587
security = "starttls"
username = "gapbell"
password = { env = "GAPBELL_SMTP_PASSWORD" }
sender = "gapbell@plant.example"
ca_file = "plant-ca.pem"
replies = { host = "imap.plant.example", port = 993, username = "gapbell", password = { env = "X" }, address = "gapbell@plant.example" }
[channels.qa-room]
kind = "matrix"
homeserver = "https://matrix.plant.example"
room = "!abc:plant.example"
token = { env = "GAPBELL_MATRIX_TOKEN" }
[channels.floor]
kind = "webhook"
url = { env = "GAPBELL_FLOOR_HOOK" }
secret = { env = "GAPBELL_FLOOR_SECRET" }
body = "template"
template = "floor.json.j2"
[recipients.quality]
send = [{ channel = "mail", to = ["qa@plant.example"] }, { channel = "qa-room" }]
digest = true
[recipients.maintainers]
send = [{ channel = "mail", to = ["it@plant.example"] }]
feed_notices = true
[sources.proof-test]
kind = "csv-drop"
folder = "drops/proof-test"
pattern = "*.csv"
columns = { time = "tested_at", unit = "serial", defects = "n_defects", attributes = ["fixture", "lot"], private = ["operator"] }
key = ["serial", "tested_at"]
void = { status = ["VOID"] }
timezone = "Europe/Oslo"
stale_after = "3 workdays"
[sources.mes]
kind = "mes-export"
folder = "mes"
format = "b2mml"
[streams.seal-leak]
title = "Seal leaks at proof test"
source = "proof-test"
event = { result = ["LEAK", "WEEP"] }
where = { line = ["2"] }
form = "gap"
exposure = "units"
exposure_name = "cartridges"
production = { source = "mes", where = { operation = ["FINAL"] } }
retests = "first-pass"
locate = "unit"
mature_after = "90 days"
baseline = { first_events = 12, grow_to = 60 }
watch = ["worse", "better"]
cluster = "24 hours"
share = 1.0
safety = false
reaction_plan = "Stop seal assembly, quarantine the lot, call the seal cell lead."
notify = ["quality"]
express_per = 1_000_000
"""


def problems(tmp_path: Path, text: str) -> list[str]:
    path = tmp_path / "plant.toml"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(ConfigError) as caught:
        load_config(path)
    return caught.value.problems


def test_every_key_of_the_contract_is_taken(tmp_path):
    (tmp_path / "plant.toml").write_text(FULL)
    config = load_config(tmp_path / "plant.toml")
    assert config.stream_share("seal-leak") == 1.0
    settings = config.source_settings("proof-test")
    assert set(settings.stored) == {
        "fixture",
        "lot",
        "operator",
        "serial",
        "tested_at",
        "status",
        "result",
        "line",
    }


def test_valid_keys_whose_feature_comes_later_are_named(tmp_path):
    (tmp_path / "plant.toml").write_text(FULL)
    said = "\n".join(load_config(tmp_path / "plant.toml").later)
    for part in (
        '"mes-export"',
        '"matrix"',
        '"template"',
        "answering by mail",
        "production: a source of this kind",
    ):
        assert part in said
    assert all(line.endswith("is not yet available in this version.") for line in said.splitlines())


WRONG = [
    ('timezone = "Europe/Oslo"', 'timezone = "Europe/Olso"', '[plant] timezone: found "Europe/Olso"; accepted is an IANA time zone such as "Europe/Oslo".'),
    ('[plant]\nname = "Skerry Point Works"', "[plant]", "[plant] name: this key is missing."),
    ("false_alerts_per_year = 1.0", "false_alerts_per_year = 0", "[alerting] false_alerts_per_year: found 0; accepted is greater than 0."),
    ("false_alerts_per_year", "false_alarms_per_year", '[alerting]: unknown key "false_alarms_per_year"; did you mean "false_alerts_per_year"?'),
    ("[alerting]", "[alertng]", 'the file: unknown key "alertng"; did you mean "alerting"?'),
    ('workdays = ["mon", "tue"', 'workdays = ["mond", "tue"', '[calendar] workdays.0: found "mond"; accepted is \'mon\', \'tue\', \'wed\', \'thu\', \'fri\', \'sat\' or \'sun\'.'),
    ('"2023-07-07..2023-07-27"', '"2023-07-27..2023-07-07"', "a range whose first day is not after its last."),
    ('"2023-07-07..2023-07-27"', '"7 July"', 'accepted is days such as "2026-12-24" or "2026-07-06..2026-07-24".'),
    ('kind = "email"', 'kind = "mail"', '[channels.mail] kind: found "mail"; accepted are "email", "matrix" and "webhook".'),
    ('password = { env = "GAPBELL_TRIAL_PASSWORD" }', 'password = "hunter2"', "[channels.mail] password: found a text; accepted is a reference"),
    ('password = { env = "GAPBELL_TRIAL_PASSWORD" }', "", "[channels.mail]: username and password belong together: give both or neither."),
    ('host = "localhost"', 'host = "smtp.plant.example"\nsecurity = "none"', 'security = "none" is accepted to this machine only'),
    ("port = 2525", "port = 70000", "[channels.mail] port: found 70000; accepted is less than or equal to 65535."),
    ('sender = "gapbell@skerry-point.example"', 'sender = "gapbell"', "accepted is a plain ASCII mail address"),
    ('to = ["safety@skerry-point.example"]', 'to = ["sikkerhet@skærgård.example"]', "accepted is a plain ASCII mail address"),
    ('url = "http://127.0.0.1:9/room"', 'url = "http://chat.plant.example/room"', "[channels.floor] url"),
    ('{ channel = "floor" }', '{ channel = "flor" }', '[recipients.quality] send: found channel "flor"; did you mean "floor"?'),
    ('send = [{ channel = "mail", to = ["it@skerry-point.example"] }]', 'send = [{ channel = "mail" }]', 'channel "mail" is email and needs to'),
    ("digest = true", "digets = true", '[recipients.quality]: unknown key "digets"; did you mean "digest"?'),
    ('kind = "csv-drop"\nfolder = "drops/proof-test"', 'kind = "csv-drop"', '[sources.proof-test]: kind "csv-drop" also needs folder.'),
    ('kind = "csv-drop"\nfolder = "drops/proof-test"', 'kind = "csv-dorp"\nfolder = "x"', '[sources.proof-test] kind: found "csv-dorp"'),
    ('columns = { time = "painted", unit', "columns = { unit", "[sources.paint-booth] columns.time: this key is missing."),
    ('columns = { time = "painted", unit', 'columns = { time = "painted", unt', '[sources.paint-booth]: unknown key "unt"; did you mean "unit"?'),
    ('stale_after = "6 workdays"', 'stale_after = "6 wrkdays"', "accepted is a length of time such as"),
    ('stale_after = "6 workdays"', 'stale_after = "0 days"', "accepted is a length of time such as"),
    ('proof_of_life = "file"', 'proof_of_life = "phone"', "[sources.incidents] proof_of_life: found \"phone\"; accepted is 'file' or 'reachable'."),
    ('delimiter = ";"', 'delimiter = ";;"', "[sources.winch-final] delimiter"),
    ('dates = "dmy"', 'dates = "dym"', '"iso", "dmy", "mdy", "ymd" or a strptime format'),
    ('dates = "dmy"', 'decimal = ","\nthousands = ","', "decimal and thousands must be different signs."),
    ('dates = "dmy"', 'encoding = "utf-9"', "accepted is a text encoding"),
    ('source = "cabinets"', 'source = "cabinet"', '[streams.wiring] source: found "cabinet"; did you mean "cabinets"?'),
    ('notify = ["safety"]', 'notify = ["safty"]', '[streams.incidents] notify: found "safty"; did you mean "safety"?'),
    ('form = "per-unit"', 'form = "per-units"', "[streams.wiring] form: found \"per-units\"; accepted is 'gap', 'per-unit' or 'auto'."),
    ('exposure = "opportunities"', 'exposure = "days"', '[streams.wiring] exposure: found "days"; per-unit accepts'),
    ('exposure = "workdays"', 'exposure = "units"', "[streams.incidents] event: this key is missing"),
    ("baseline = { rate = 0.0011 }", "baseline = { rate = 0.0011, first_events = 12 }", "accepted is one of { first_events = 12 }"),
    ("baseline = { rate = 0.0011 }", "baseline = { first_events = 3 }", "accepted is greater than or equal to 4."),
    ("baseline = { rate = 0.0011 }", "baseline = { events = 14 }", "accepted is both events and exposure."),
    ("baseline = { rate = 0.0011 }", "baseline = { rate = -1 }", "[streams.spring-break] baseline.rate: found -1; accepted is greater than 0."),
    ('baseline = { from = "2023-01-01", to = "2023-12-31" }', 'baseline = { from = "2023-12-31", to = "2023-01-01" }', "from not after to"),
    ('baseline = { from = "2023-01-01", to = "2023-12-31" }', 'baseline = { from = "January" , to = "2023-01-01" }', 'accepted is a day such as "2026-03-04".'),
    ("safety = true", "saftey = true", '[streams.incidents]: unknown key "saftey"; did you mean "safety"?'),
    ("safety = true", "share = 0", "[streams.incidents] share: found 0; accepted is greater than 0."),
    ("safety = true", "watch = []", 'accepted is at least one of "worse" and "better".'),
    ('title = "Reportable incidents"', 'title = "Reportable\\u0007incidents"', "[streams.incidents] title: the text holds a control character"),
    ("[calendar]", '[schedule]\ndigest = "0 7 * *"\n[calendar]', "five cron fields"),
    ("[calendar]", '[schedule]\ncollect = "61 * * * *"\n[calendar]', "five cron fields"),
]  # fmt: skip


@pytest.mark.parametrize(("old", "new", "said"), WRONG, ids=[f"{n:02d}" for n in range(len(WRONG))])
def test_a_wrong_key_is_said_on_one_line(tmp_path, old, new, said):
    assert old in GOOD
    found = problems(tmp_path, GOOD.replace(old, new, 1))
    assert any(said in line for line in found), found
    assert all(line.startswith("plant.toml: ") and "\n" not in line for line in found)
    assert "hunter2" not in "".join(found)


def test_all_problems_come_at_once(tmp_path):
    text = (
        GOOD.replace('form = "per-unit"', 'form = "x"')
        .replace("safety = true", "saftey = true")
        .replace('notify = ["safety"]', 'notify = ["y"]')
    )
    assert len(problems(tmp_path, text)) >= 3


def test_what_is_no_toml_or_no_text_or_not_there_is_said(tmp_path):
    assert "line 1" in problems(tmp_path, "plant = = 1")[0]
    (tmp_path / "plant.toml").write_bytes(b"\xff\xfe")
    with pytest.raises(ConfigError, match="not UTF-8"):
        load_config(tmp_path / "plant.toml")
    with pytest.raises(ConfigError, match="cannot be read"):
        load_config(tmp_path / "none.toml")


def test_weekday_numbers_of_cron_become_names(tmp_path):
    """Cron counts Sunday as 0 and 7; APScheduler counts Monday as 0 (its documentation)."""
    (tmp_path / "plant.toml").write_text(
        GOOD.replace("[calendar]", '[schedule]\ndigest = "0 7 * * 0,1-5,7"\n[calendar]')
    )
    assert load_config(tmp_path / "plant.toml").schedule.digest == "0 7 * * sun,mon-fri,sun"


def test_a_secret_never_shows(tmp_path, monkeypatch):
    monkeypatch.setenv("GAPBELL_TRIAL_PASSWORD", "hunter2")
    (tmp_path / "plant.toml").write_text(GOOD)
    config = load_config(tmp_path / "plant.toml")
    assert config.channels["mail"].password.reveal() == "hunter2"
    assert "hunter2" not in repr(config) + str(config) + config.model_dump_json(exclude={"path"})
    with pytest.raises(SecretMissingError, match="NOT_SET_ANYWHERE is not set"):
        Secret(env="NOT_SET_ANYWHERE").reveal()
