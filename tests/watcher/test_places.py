"""Where to look first, from records to the alert, the mail and `alerts show`."""

from __future__ import annotations

from datetime import timedelta

from tests.watcher.conftest import FIRST


def rows(units: range, leaks: dict[int, str]) -> list[str]:
    """Units tested every two hours on five fixtures in turn, or on the one given for a leak."""
    return [
        f"S{i},{FIRST + timedelta(hours=2 * i):%Y-%m-%dT%H:%M:%S},{leaks.get(i, f'F{i % 5}')},op{i % 3},{'LEAK' if i in leaks else 'OK'}"
        for i in units
    ]


def quiet_then(fixtures: str | None) -> dict[int, str]:
    leaks = {i: f"F{i % 5}" for i in (31, 55, 120, 139, 208, 241, 262, 330, 341, 398, 467, 520, 548)}
    return leaks | {i: fixtures or f"F{k % 5}" for k, i in enumerate(range(563, 600, 6))}


def test_a_fixture_that_stands_out_is_named_with_its_share(yard, moment) -> None:
    yard.drop("a.csv", rows(range(600), quiet_then("F3")), moment(600))
    assert yard.cycle(moment(601))["raised"] == ["A-000001"]
    alert = yard.json("alerts", "show", "A-1")
    (first, *_) = alert["look_first"]
    assert (first["attribute"], first["value"]) == ("fixture", "F3")
    assert first["events"] >= 6
    assert 0.15 < first["usual_share"] < 0.35
    assert first["p_adjusted"] < 0.01
    assert alert["looked_at"] == {"attributes": ["fixture"], "against": "production"}
    text = yard.sink.mails[0].get_body(("plain",)).get_content()
    assert "Where to look first" in text
    assert "fixture F3" in " ".join(text.split())
    assert "Where to look first: fixture F3" in " ".join(yard.run("alerts", "show", "A-1").stdout.split())


def test_where_nothing_stands_out_that_is_said(yard, moment) -> None:
    yard.drop("a.csv", rows(range(600), quiet_then(None)), moment(600))
    yard.cycle(moment(601))
    assert yard.json("alerts", "show", "A-1")["look_first"] == []
    text = " ".join(yard.sink.mails[0].get_body(("plain",)).get_content().split())
    assert "Nothing stands out among: fixture (compared with production)." in text


def test_private_columns_are_never_compared(yard, moment) -> None:
    leaks = quiet_then(None)
    lines = [
        line.replace("op0", "opX").replace("op1", "opX") if "LEAK" in line else line
        for line in rows(range(600), leaks)
    ]
    yard.drop("a.csv", lines, moment(600))
    yard.cycle(moment(601))
    alert = yard.json("alerts", "show", "A-1")
    assert alert["looked_at"]["attributes"] == ["fixture"]
    assert "opX" not in str(alert)


def test_the_same_records_give_the_same_places(yard, moment) -> None:
    yard.drop("a.csv", rows(range(600), quiet_then("F3")), moment(600))
    yard.cycle(moment(601))
    rehearsed = yard.json("rehearse", "--to", moment(601).date().isoformat())["streams"][0]["alerts"][-1]
    assert rehearsed["look_first"] == yard.json("alerts", "show", "A-1")["look_first"]
