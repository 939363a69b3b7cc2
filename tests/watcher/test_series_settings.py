"""What a stream's keys make of its records: small yards with gaps worked out by hand."""

from __future__ import annotations

from datetime import datetime, timedelta
from zoneinfo import ZoneInfo

import pytest

ZONE = ZoneInfo("Europe/Oslo")
DAY0 = datetime(2026, 1, 5, 8, tzinfo=ZONE)

TEST = """
[sources.test]
kind = "csv-drop"
folder = "drops"
columns = { time = "at", unit = "serial", quantity = "n", defects = "bad", attributes = ["model", "lot"] }
key = ["at", "serial"]
"""
FINAL = """
[sources.final]
kind = "csv-drop"
folder = "final"
columns = { time = "at", unit = "serial", quantity = "n", attributes = ["model", "line"] }
key = ["at", "serial"]
stale_after = "5 days"
"""
STREAM = """
[streams.leaks]
title = "Seal leaks"
source = "test"
baseline = {{ first_events = 12 }}
{lines}
"""
COLUMNS = "at,serial,n,bad,model,lot"


def at(day: float) -> str:
    return f"{DAY0 + timedelta(days=day):%Y-%m-%dT%H:%M:%S}"


def row(day: float, serial: str = "", n: float = 1, bad: int = 0, model: str = "A", lot: str = "") -> str:
    return f"{at(day)},{serial or f'u{day}'},{n:g},{bad},{model},{lot}"


def gaps_of(yard, now: float) -> tuple[list[float], list[int], float, tuple[str, ...]]:
    """Exposure and events of the steps, the open gap and the notes, as the pass would build them."""
    from watcher.building import build, produced_for
    from watcher.config import load_config
    from watcher.cycle import Frames
    from watcher.feeds import alive_us, is_stale
    from watcher.store import Store
    from watcher.store.records import source_state
    from watcher.workcalendar import WorkCalendar

    config = load_config(yard.path)
    moment = DAY0 + timedelta(days=now)
    now_us = round(moment.timestamp() * 1e6)
    calendar = WorkCalendar.of(config)
    with Store.open(config.store_url) as store:
        frames = Frames(config, store)
        with store.reading() as conn:
            states = source_state(conn, now_us)
        built = build(
            config, "leaks", frames.of("test"), calendar, alive_us=alive_us(config, "test", states.get("test"), now_us),
            now_us=now_us,
            produced=produced_for(config, "leaks", frames.of, lambda s: is_stale(config, s, states.get(s), calendar, moment)),
        )  # fmt: skip
    steps = built.steps
    return steps.exposure.tolist(), steps.events.tolist(), steps.open_exposure, built.notes


def deliver(yard, lines: list[str], now: float, *parts: str, made: list[str] | None = None, status: int = 0):
    yard.configure(TEST, *parts)
    yard.drop("a.csv", lines, DAY0 + timedelta(days=now), columns=COLUMNS)
    if made is not None:
        yard.drop("m.csv", made, DAY0 + timedelta(days=now), columns="at,serial,n,model,line", folder="final")
    return yard.cycle(DAY0 + timedelta(days=now, minutes=5), status=status)


def test_events_closer_than_the_span_are_one_and_the_chain_goes_on(yard) -> None:
    days = [1, 1.5, 2.2, 9, 20, 20.9]
    deliver(
        yard,
        [row(d, bad=1) for d in days],
        21,
        STREAM.format(lines='exposure = "days"\ncluster = "24 hours"'),
    )
    exposure, events, _, notes = gaps_of(yard, 21)
    assert exposure == pytest.approx([0, 8, 11])
    assert events == [1, 1, 1]
    assert "6 events were merged into 3: those of one cluster count once." in notes


def test_a_span_of_working_days_leaves_the_weekend_out(yard) -> None:
    # Friday 9th and Monday 12th are one working day apart, Wednesday 14th two further on
    deliver(
        yard,
        [row(d, bad=1) for d in (4, 7, 9)],
        10,
        STREAM.format(lines='exposure = "workdays"\ncluster = "2 workdays"'),
    )
    assert gaps_of(yard, 10)[1] == [1, 1]


def test_events_of_one_lot_are_one_event_at_its_first(yard) -> None:
    lines = [
        row(1),
        row(2, bad=1, lot="L1"),
        row(3),
        row(4, bad=1, lot="L2"),
        row(5, bad=1, lot="L1"),
        row(6, bad=1),
        row(7, bad=1),
    ]
    deliver(yard, lines, 8, STREAM.format(lines='cluster = { column = "lot" }'))
    exposure, events, open_gap, _ = gaps_of(yard, 8)
    # L1 once, L2 once; events without a lot stand for themselves
    assert (exposure, events, open_gap) == ([2, 2, 2, 1], [1, 1, 1, 1], 0)


def test_places_for_a_defect_weight_each_product(yard) -> None:
    lines = [row(1, n=2, model="A"), row(2, bad=1, model="B"), row(3, model="A"), row(4, bad=1, model="A")]
    stream = STREAM.format(
        lines='exposure = "opportunities"\nopportunities = { column = "model", places = { A = 12, B = 30 } }'
    )
    deliver(yard, lines, 5, stream)
    assert gaps_of(yard, 5)[0] == [2 * 12 + 30, 24]


def test_a_product_without_places_stops_its_stream_with_a_sentence(yard) -> None:
    stream = STREAM.format(
        lines='exposure = "opportunities"\nopportunities = { column = "model", places = { A = 12 } }'
    )
    report = deliver(yard, [row(1, model="A"), row(2, bad=1, model="C")], 3, stream, status=1)
    (broken,) = report["broken"]
    assert 'column model holds "C", which has no entry in places; known are A.' in broken["error"]
    found = yard.json("status", "--at", at(3) + "+01:00", status=0)["streams"][0]
    assert "no entry in places" in str(found["advice"])


def test_exposure_from_another_source_and_an_event_that_waits_for_it(yard) -> None:
    made = [f"{at(d)},m{d},10,A,2" for d in range(8)] + [f"{at(2)},x,99,A,3"]
    stream = STREAM.format(lines='production = { source = "final", where = { line = ["2"] } }')
    deliver(yard, [row(2.5, bad=1), row(5.5, bad=1), row(9.5, bad=1)], 10, FINAL, stream, made=made)
    exposure, events, open_gap, notes = gaps_of(yard, 10)
    # by day 2.5 three lots of 10 are made, by 5.5 six; the event of day 9.5 has no production yet
    assert (exposure, events, open_gap) == ([30, 30], [1, 1], 20)
    assert "1 event waits for production records of final." in notes


def test_when_production_falls_silent_the_waiting_event_goes_ahead_with_a_note(yard) -> None:
    made = [f"{at(d)},m{d},10,A,2" for d in range(8)]
    stream = STREAM.format(lines='production = { source = "final" }')
    deliver(yard, [row(2.5, bad=1), row(9.5, bad=1)], 30, FINAL, stream, made=made)
    exposure, _, open_gap, notes = gaps_of(yard, 30)
    assert (exposure, open_gap) == ([30, 50], 0)
    assert any("final is silent" in n for n in notes)


def test_production_reported_late_is_allowed_for(yard) -> None:
    made = [f"{at(d)},m{d},10,A,2" for d in range(8)]
    stream = STREAM.format(lines='production = { source = "final", lag = "1 day" }')
    deliver(yard, [row(2.5, bad=1), row(7.9, bad=1)], 10, FINAL, stream, made=made)
    # the event of day 2.5 belongs to what was made by day 1.5, that of 7.9 to what was made by 6.9
    assert gaps_of(yard, 10)[0] == [20, 50]


def test_production_nobody_looked_at_yet_is_no_quiet_stretch(yard) -> None:
    made = [f"{at(d)},m{d},10,A,2" for d in range(20)]
    stream = STREAM.format(lines='production = { source = "final" }')
    deliver(yard, [row(2.5, bad=1), row(5.2, bad=0)], 19, FINAL, stream, made=made)
    # the failures' source was last heard of on day 5.2: six lots are proven, three of them since the event
    assert gaps_of(yard, 19)[2] == 30


def test_a_late_failure_stands_where_its_unit_was_made_and_young_units_wait(yard) -> None:
    lines = [row(d, serial=f"S{d}") for d in range(10)]
    lines += [row(8.5, serial="S1", bad=1), row(30, serial="S4", bad=1), row(95, serial="S6", bad=1)]
    lines += [row(100, serial="Y1"), row(105, serial="Y2", bad=1)]
    stream = STREAM.format(lines='locate = "unit"\nmature_after = "60 days"')
    deliver(yard, lines, 110, stream)
    exposure, events, open_gap, notes = gaps_of(yard, 110)
    # ten old units; S1 and S4 failed in time, S6 too late to be compared, Y1 and Y2 are too young
    assert (exposure, events, open_gap) == ([2, 3], [1, 1], 5)
    assert any("1 failure came later than 60 days" in n for n in notes)
    assert any("younger than 60 days" in n for n in notes)


def test_young_exposure_and_its_events_wait(yard) -> None:
    lines = [row(1), row(2, bad=1), row(50, bad=1), row(51)]
    deliver(yard, lines, 60, STREAM.format(lines='mature_after = "30 days"'))
    assert gaps_of(yard, 60)[:3] == ([2], [1], 0)
    assert gaps_of(yard, 90)[:3] == ([2, 1], [1, 1], 1)


def test_a_returned_unit_is_placed_on_the_production_of_another_source(yard) -> None:
    made = [f"{at(d)},S{d},1,A,2" for d in range(10)]
    stream = STREAM.format(
        lines='production = { source = "final" }\nlocate = "unit"\nmature_after = "60 days"'
    )
    deliver(yard, [row(40, serial="S3", bad=1), row(41, serial="S7", bad=1)], 110, FINAL, stream, made=made)
    exposure, events, _, _ = gaps_of(yard, 110)
    assert (exposure, events) == ([4, 4], [1, 1])


def test_two_events_at_one_moment_are_two_and_records_without_quantity_keep_their_events(yard) -> None:
    lines = [row(1, n=5, bad=0), row(2, n=1, bad=1), row(2, serial="twin", n=1, bad=1), row(3, n=4)]
    deliver(yard, lines, 4, STREAM.format(lines=""))
    exposure, events, open_gap, _ = gaps_of(yard, 4)
    assert (sum(exposure) + open_gap, sum(events)) == (11, 2)


@pytest.mark.parametrize(
    ("lines", "said"),
    [('form = "per-unit"\ncluster = "24 hours"', "[streams.leaks] cluster:"),
     ('exposure = "days"\nproduction = { source = "final" }', "[streams.leaks] production:"),
     ('production = { source = "test" }', 'the stream\'s own source "test"'),
     ('locate = "unit"', '"unit" needs mature_after'),
     ('opportunities = { column = "model", places = { A = 0 } }', "a number of places above 0"),
     ("opportunities = { A = 12 }", "opportunities"),
     ('opportunities = { column = "model", places = { A = 12 } }', 'opportunities: found with exposure = "units"'),
     ('exposure = "opportunities"\nproduction = { source = "final" }', "columns.opportunities in [sources.final]")],
)  # fmt: skip
def test_settings_that_cannot_be_meant_are_refused_with_a_sentence(yard, lines, said) -> None:
    yard.configure(TEST, FINAL, STREAM.format(lines=lines))
    done = yard.run("check")
    assert done.exit_code == 2
    assert said in done.stderr


def test_a_late_look_at_late_production_proves_only_what_lies_a_lag_back(yard) -> None:
    made = [f"{at(d)},m{d},10,A,2" for d in range(20)]
    stream = STREAM.format(lines='production = { source = "final", lag = "2 days" }')
    deliver(yard, [row(4.5, bad=1), row(9.5)], 19, FINAL, stream, made=made)
    # the event lies at day 2.5 (30 made); quiet until day 9.5 says that what was made until 7.5 (80) is quiet
    assert gaps_of(yard, 19)[:3] == ([30], [1], 50)


def test_a_lag_of_working_days_leaves_the_weekend_out(yard) -> None:
    made = [f"{at(d)},m{d},10,A,2" for d in (0, 1, 2, 3, 4, 7, 8)]
    stream = STREAM.format(lines='production = { source = "final", lag = "2 workdays" }')
    deliver(yard, [row(7.5, bad=1)], 9, FINAL, stream, made=made)
    # half of Monday 12th and half of Thursday 8th lie beside Friday 9th: four lots were made by then
    assert gaps_of(yard, 9)[0] == [40]


def test_every_record_of_a_source_of_complaints_is_an_event_on_anothers_production(yard) -> None:
    made = [f"{at(d)},m{d},10,A,2" for d in range(8)]
    plain = TEST.replace(', defects = "bad"', "")
    yard.configure(plain, FINAL, STREAM.format(lines='production = { source = "final" }'))
    yard.drop("a.csv", [row(2.5), row(5.5)], DAY0 + timedelta(days=7), columns=COLUMNS)
    yard.drop(
        "m.csv", made, DAY0 + timedelta(days=7), columns="at,serial,n,model,line", folder="final"
    )  # fmt: skip
    yard.cycle(DAY0 + timedelta(days=8))
    assert gaps_of(yard, 8)[:2] == ([30, 30], [1, 1])


def test_a_silent_source_of_returns_ages_no_unit(yard) -> None:
    lines = [row(d, serial=f"S{d}") for d in range(0, 100, 5)] + [row(12, serial="S5", bad=1)]
    stream = STREAM.format(lines='locate = "unit"\nmature_after = "59 days"')
    deliver(yard, lines, 96, stream)
    # last heard of on day 95: what was made by day 35 had its 59 days, eight units, and no more are added by silence
    assert gaps_of(yard, 96)[:3] == ([2], [1], 6)
    assert gaps_of(yard, 400)[:3] == ([2], [1], 6)


def test_returns_that_fell_silent_make_no_quiet_production(yard) -> None:
    made = [f"{at(d)},S{d},1,A,2" for d in range(100)]
    stream = STREAM.format(
        lines='production = { source = "final" }\nlocate = "unit"\nmature_after = "60 days"'
    )
    deliver(yard, [row(20, serial="S9", bad=1), row(80, serial="S11", bad=0)], 400, FINAL, stream, made=made)
    # returns were last heard of on day 80: units made by day 20 are known to be quiet, 11 of them since S9
    assert gaps_of(yard, 400)[:3] == ([10], [1], 11)


def test_a_unit_returned_twice_failed_once(yard) -> None:
    made = [f"{at(d)},S{d},1,A,2" for d in range(10)]
    stream = STREAM.format(
        lines='production = { source = "final" }\nlocate = "unit"\nmature_after = "60 days"'
    )
    returns = [row(40, serial="S3", bad=1), row(45, serial="S3", bad=1)]
    deliver(yard, returns, 110, FINAL, stream, made=made)
    assert gaps_of(yard, 110)[:2] == ([4], [1])


def test_defects_found_later_are_counted_at_their_unit(yard) -> None:
    lines = [row(0, serial="S0", bad=1), row(1, serial="S1"), row(2, serial="S2")]
    lines += [row(10, serial="S1", bad=2), row(12, serial="S1", bad=1), row(100, serial="S9")]
    stream = STREAM.format(lines='form = "per-unit"\nlocate = "unit"\nmature_after = "60 days"')
    deliver(yard, lines, 101, stream)
    assert gaps_of(yard, 101)[:2] == ([1, 1, 1], [1, 3, 0])


def test_a_failure_of_an_unknown_unit_stands_at_its_own_time_and_is_told_of(yard) -> None:
    made = [f"{at(d)},S{d},1,A,2" for d in range(10)]
    stream = STREAM.format(
        lines='production = { source = "final" }\nlocate = "unit"\nmature_after = "60 days"'
    )
    deliver(yard, [row(6.5, serial="X9", bad=1)], 110, FINAL, stream, made=made)
    exposure, events, _, notes = gaps_of(yard, 110)
    assert (exposure, events) == ([7], [1])
    assert "1 failure of a unit without a known completion stands at its own time." in notes


def test_products_match_as_numbers_and_production_carries_the_products(yard) -> None:
    made = [f"{at(1)},m1,2,7,2", f"{at(2)},m2,1,8.0,2"]
    stream = STREAM.format(
        lines='exposure = "opportunities"\nproduction = { source = "final" }\n'
        'opportunities = { column = "model", places = { "7.0" = 12, "8" = 30 } }'
    )
    deliver(yard, [row(2, bad=1)], 5, FINAL, stream, made=made)
    assert gaps_of(yard, 5)[:2] == ([2 * 12 + 30], [1])


def test_failing_units_of_a_lot_are_one_event_of_a_cluster(yard) -> None:
    lines = [row(1, n=50, bad=3), row(1.5, n=50, bad=2), row(9, n=50, bad=0)]
    deliver(yard, lines, 10, STREAM.format(lines='cluster = "24 hours"'))
    _, events, _, notes = gaps_of(yard, 10)
    assert sum(events) == 1
    assert "5 events were merged into 1: those of one cluster count once." in notes


def test_a_row_without_any_quantity_is_set_aside_and_said_to_be(yard) -> None:
    report = deliver(yard, [row(1, n=5), row(2, n=0, bad=1), row(3, n=4)], 4, STREAM.format(lines=""))
    assert report["sources"][0]["set_aside"] == 1
    assert "a quantity above 0" in str(yard.json("rejects")["rejects"])


FEATURES = {
    "cluster": 'cluster = "24 hours"',
    "lots": 'cluster = { column = "lot" }',
    "places": 'exposure = "opportunities"\nopportunities = { column = "model", places = { A = 12, B = 30 } }',
    "production": 'production = { source = "final", lag = "1 day" }',
    "units": 'production = { source = "final" }\nlocate = "unit"\nmature_after = "10 days"',
    "same source": 'locate = "unit"\nmature_after = "10 days"',
    "mature": 'mature_after = "10 days"',
    "outside working time": 'exposure = "workdays"',
}


@pytest.mark.parametrize("lines", FEATURES.values(), ids=FEATURES.keys())
def test_neither_order_of_arrival_nor_batches_matter(yard, lines) -> None:
    tested = [
        row(d / 2, serial=f"S{d % 30}", bad=int(d % 7 == 3), model="AB"[d % 2], lot=f"L{d % 4}") for d in range(60)
    ]  # fmt: skip
    made = [f"{at(d / 3)},S{d},10,A,2" for d in range(90)]
    deliver(yard, tested, 31, FINAL, STREAM.format(lines=lines), made=made)
    one = gaps_of(yard, 31)
    assert sum(one[1]) > 0
    for store in yard.folder.glob("gapbell.db*"):
        store.unlink()
    for folder in ("drops", "final"):
        for drop in (yard.folder / folder).iterdir():
            drop.unlink()
    names = "at,serial,n,model,line"
    for i, part in enumerate((2, 0, 1)):
        moment = DAY0 + timedelta(days=31, minutes=i)
        yard.drop(f"t{i}.csv", tested[part::3][::-1], moment, columns=COLUMNS)
        yard.drop(f"m{i}.csv", made[part::3][::-1], moment, columns=names, folder="final")
        yard.cycle(moment + timedelta(seconds=30))
    assert gaps_of(yard, 31) == one


def test_changed_production_is_judged_anew(yard) -> None:
    made = [f"{at(d)},m{d},10,A,2" for d in range(8)]
    deliver(
        yard, [row(2.5, bad=1), row(5.5, bad=1)], 8, FINAL, STREAM.format(lines='production = { source = "final" }'), made=made
    )  # fmt: skip
    yard.last = at(8) + "+01:00"
    assert yard.stream("leaks")["exposure"] == 60
    later = DAY0 + timedelta(days=8, hours=1)
    yard.drop("n.csv", [f"{at(2.2)},extra,500,A,2"], later, columns="at,serial,n,model,line", folder="final")
    yard.cycle(later + timedelta(minutes=5))
    assert yard.stream("leaks")["exposure"] == 560


def test_events_that_were_merged_are_listed_with_the_alert(yard) -> None:
    quiet = [row(d, bad=int(d % 30 == 29)) for d in range(400)]
    worse = [row(400 + d, bad=1) for d in range(0, 36, 3)] + [row(400.5 + d, bad=1) for d in range(0, 36, 3)]
    deliver(yard, quiet + worse, 440, STREAM.format(lines='cluster = "24 hours"'))
    alert = yard.json("alerts")["alerts"][0]
    twins = {k["at"] for k in alert["records"]} & {at(400.5 + d) for d in range(0, 36, 3)}
    assert twins
    assert len(alert["records"]) > alert["since"]["events"]


def test_a_silent_source_of_production_is_told_with_the_streams_it_feeds(yard) -> None:
    made = [f"{at(d)},m{d},10,A,2" for d in range(8)]
    deliver(
        yard, [row(2.5, bad=1), row(29, bad=1)], 30, FINAL, STREAM.format(lines='production = { source = "final" }'), made=made
    )  # fmt: skip
    (mail,) = (m for m in yard.sink.mails if m["Gapbell-Kind"] == "feed-notice")
    text = " ".join(mail.get_body(("plain",)).get_content().split())
    assert "placed at the last known production: Seal leaks." in text
    assert "stand as silent" not in text


def test_another_calendar_makes_another_series_of_working_day_clusters(yard) -> None:
    lines = [row(1, bad=0), row(4, bad=1), row(7, bad=1), row(8)]
    stream = STREAM.format(lines='cluster = "2 workdays"')
    deliver(yard, lines, 9, stream)
    yard.last = at(9) + "+01:00"
    assert yard.stream("leaks")["events"] == 1
    yard.configure(TEST, stream, '[calendar]\nworkdays = ["mon", "tue", "wed", "thu", "fri", "sat", "sun"]\n')
    yard.cycle(DAY0 + timedelta(days=9, minutes=10))
    assert yard.stream("leaks")["events"] == 2
