"""Open records of others through the real command line, as a plant would bring them; what is known must come out.

Sources of the data: ``data/README.md``. Facts marked "computed" were recomputed from the data; the budgets are what a
plant would grant, small where the records reach over decades.
"""

from __future__ import annotations

import csv
import random
from collections import Counter
from collections.abc import Sequence
from datetime import UTC, date, datetime, timedelta
from itertools import pairwise
from pathlib import Path
from typing import Any

import pytest

DAY_ONE = date(2000, 1, 1)
"""Where the source gives an order, or days in service, but no date."""


def table(name: str) -> list[dict[str, str]]:
    with (Path(__file__).parent / "data" / f"{name}.csv").open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


def day(number: int) -> str:
    return (DAY_ONE + timedelta(days=number)).isoformat()


def began(alert: dict[str, Any]) -> tuple[str, str, str]:
    """Days between which the shift began, the best one in the middle."""
    found = alert["shift_began"]
    return found["earliest"][:10], found["estimate"][:10], found["latest"][:10]


def codes(stream: dict[str, Any]) -> set[str]:
    return {a["code"] for a in stream["advice"]}


def index(counts: Sequence[float], sizes: Sequence[float]) -> float:
    """Pearson's index of dispersion of counts against one rate."""
    rate = sum(counts) / sum(sizes)
    return sum((n - rate * q) ** 2 / (rate * q) for n, q in zip(counts, sizes, strict=True)) / (
        len(counts) - 1
    )


# --- coal-mining disasters 1851 to 1962 -------------------------------------------------------------------------


def decimal_time(year: float) -> str:
    start, end = datetime(int(year), 1, 1, tzinfo=UTC), datetime(int(year) + 1, 1, 1, tzinfo=UTC)
    return (start + (end - start) * (year - int(year))).strftime("%Y-%m-%dT%H:%M:%SZ")


def coal_mines(plant, baseline: str) -> None:
    plant.head(budget=0.02)
    rows = [(i, decimal_time(float(r["date"]))) for i, r in enumerate(table("coal"))]
    plant.source("mines", ["n", "at"], rows, 'time = "at"', 'proof_of_life = "file"')
    plant.stream("disasters", "mines", f'exposure = "days"\nbaseline = {baseline}')


THIRTY_YEARS = '{ from = "1851-01-01", to = "1880-12-31" }'


def test_coal_disasters_became_fewer_from_1890(plant) -> None:
    coal_mines(plant, THIRTY_YEARS)
    stream = plant.rehearse("1962-12-31")["disasters"]
    first = stream["alerts"][0]
    assert first["direction"] == "better"
    # Raftery & Akman 1986 (from memory): change on 10 March 1890, 3.1 disasters a year before, 0.9 after
    earliest, estimate, latest = began(first)
    assert earliest < "1890-03-10" < latest
    assert "1888-01-01" < estimate < "1893-01-01"
    assert first["rate_ratio"]["low"] < 0.9 / 3.1 < first["rate_ratio"]["high"]
    assert first["raised_at"] < "1896"


def test_coal_disasters_in_processes_of_their_own(plant) -> None:
    coal_mines(plant, THIRTY_YEARS)
    done = plant.run_apart("cycle", "--at", "1900-01-01T06:00:00")
    (stream,) = plant.run("status", "--at", "1900-01-01T06:00:00")["streams"]
    assert done["sources"][0]["new"] == 191  # Jarrett 1979
    assert stream["standing"] == "better"
    # the event that opens the record is where counting starts; computed: 135 explosions before 1900
    assert stream["events"] == 135 - 1
    assert [a["direction"] for a in plant.run("alerts")["alerts"]] == ["better"]


def test_coal_disasters_against_the_first_twelve(plant) -> None:
    coal_mines(plant, "{ first_events = 12 }")
    stream = plant.rehearse("1962-12-31")["disasters"]
    assert stream["events"] == 191 - 1
    late = [a for a in stream["alerts"] if a["raised_at"] > "1885"]
    assert late[0]["direction"] == "better"
    earliest, estimate, latest = began(late[0])
    assert earliest < "1890-03-10" < latest
    assert "1887-01-01" < estimate < "1894-01-01"
    # two false alerts a century are promised at most
    assert len(stream["alerts"]) - len(late) <= 2


# --- airliner crashes 1993 to 2015 ------------------------------------------------------------------------------


def crashes(plant, rows: Sequence[Sequence[object]]) -> None:
    plant.head(budget=0.1)
    plant.source("register", ["n", "at", "cause"], rows, 'time = "at", attributes = ["cause"]')
    plant.stream(
        "crashes", "register", 'exposure = "days"\nbaseline = { from = "1993-01-01", to = "1998-12-31" }'
    )


def test_crashes_became_fewer_from_2003(plant) -> None:
    rows = [(i, r["date"], r["cause"]) for i, r in enumerate(table("aircrash"))]
    dates = [r[1] for r in rows]
    assert dates != sorted(dates)  # by cause, as published: the drop is out of order
    crashes(plant, rows)
    stream = plant.rehearse("2015-12-31")["crashes"]
    first = stream["alerts"][0]
    assert first["direction"] == "better"
    # computed: likelihood ratio largest for a step on 9 January 2003, from 28.1 to 12.8 crashes a year
    earliest, estimate, latest = began(first)
    assert earliest < "2003-01-09" < latest
    assert "2002-01-01" < estimate < "2003-08-01"
    assert first["rate_ratio"]["low"] < 12.8 / 28.1 < first["rate_ratio"]["high"]
    assert "worse" not in {a["direction"] for a in stream["alerts"]}


def test_crashes_are_counted_as_printed(plant) -> None:
    crashes(plant, [(i, r["date"], r["cause"]) for i, r in enumerate(table("aircrash"))])
    stream = plant.status("2015-12-31T12:00:00")["crashes"]
    assert stream["events"] == 439 - 1
    days = [r["time"][:10] for r in plant.records()]
    assert len(days) == 439
    assert sum(a == b for a, b in pairwise(days)) == 17  # computed: zero gaps


def test_crashes_read_the_same_in_any_order(plant, tmp_path) -> None:
    rows = [(i, r["date"], r["cause"]) for i, r in enumerate(table("aircrash"))]
    crashes(plant, rows)
    other = type(plant)(tmp_path / "other")
    crashes(other, random.Random(1).sample(rows, len(rows)))
    figures = [p.status("2004-12-31T12:00:00")["crashes"] for p in (plant, other)]
    assert figures[0] == figures[1]


# --- discoveries 1860 to 1959 -----------------------------------------------------------------------------------


def discoveries(plant, baseline: str) -> None:
    plant.head(budget=0.02)
    rows = [(f"{r['year']}-12-31", 1, r["discoveries"]) for r in table("discoveries")]
    plant.source(
        "annals", ["at", "years", "found"], rows, 'time = "at", quantity = "years", defects = "found"'
    )
    plant.stream(
        "discoveries", "annals", f'form = "per-unit"\nexposure_name = "years"\nbaseline = {baseline}'
    )


FORTY_YEARS = '{ from = "1860-01-01", to = "1899-12-31" }'


def test_discoveries_became_fewer_from_1933(plant) -> None:
    discoveries(plant, FORTY_YEARS)
    stream = plant.rehearse("1959-12-31")["discoveries"]
    better = [a for a in stream["alerts"] if a["direction"] == "better"]
    # computed: one step at 1933, from 3.60 to 1.74 a year; the year 1933 begins where 1932 is booked
    earliest, estimate, latest = began(better[0])
    assert earliest <= "1932-12-31" <= latest
    assert "1930-12-31" <= estimate <= "1934-12-31"
    assert better[0]["rate_ratio"]["low"] < 1.74 / 3.60 < better[0]["rate_ratio"]["high"]


def test_discoveries_are_said_to_vary_more_than_chance(plant) -> None:
    discoveries(plant, FORTY_YEARS)
    stream = plant.status("1901-01-01T12:00:00")["discoveries"]
    counts = [r["defects"] for r in plant.records()]
    # computed: 310 in 100 years, index of dispersion 1.64
    assert (len(counts), sum(counts)) == (100, 310)
    assert round(index(counts, [1] * 100), 2) == 1.64
    assert (stream["baseline"]["events"], stream["baseline"]["exposure"]) == (143, 40)
    assert "over-dispersed" in codes(stream)


# --- van drivers killed in Great Britain, 1969 to 1984 ----------------------------------------------------------


def vans(plant, baseline: str) -> None:
    plant.head(budget=0.1)
    rows = [
        (
            (date(int(r["year"]) + int(r["month"]) // 12, int(r["month"]) % 12 + 1, 1) - timedelta(1)),
            r["kms"],
            r["van_killed"],
        )
        for r in table("seatbelts")
    ]
    plant.source(
        "roads", ["month", "kms", "killed"], rows, 'time = "month", quantity = "kms", defects = "killed"'
    )
    plant.stream("vans", "roads", f'form = "per-unit"\nexposure_name = "km"\nbaseline = {baseline}')


def test_fewer_van_drivers_died_once_belts_were_law(plant) -> None:
    vans(plant, '{ from = "1979-01-01", to = "1982-12-31" }')
    stream = plant.rehearse("1984-12-31")["vans"]
    # computed: 1,739 killed in 192 months
    assert stream["events"] == 1739
    first = stream["alerts"][0]
    assert first["direction"] == "better"
    # Harvey & Durbin 1986: the law came into force on 31 January 1983
    earliest, estimate, latest = began(first)
    assert earliest <= "1983-01-31" <= latest
    assert "1982-12-31" <= estimate <= "1983-03-31"
    assert first["raised_at"] < "1983-09"


def test_fewer_van_drivers_died_year_after_year(plant) -> None:
    vans(plant, '{ from = "1969-01-01", to = "1971-12-31" }')
    stream = plant.rehearse("1984-12-31")["vans"]
    # computed: 1.00 killed per thousand units of distance from 1969 to 1971, 0.76 in 1973, 0.28 in 1984
    assert {a["direction"] for a in stream["alerts"]} == {"better"}
    assert "1971" < stream["alerts"][0]["raised_at"] < "1975"


# --- horse kicks and flying bombs: nothing changes --------------------------------------------------------------


def horse_kicks(plant, lines: str, budget: float = 0.02) -> None:
    plant.head(budget)
    rows = [(f"{r['year']}-12-31", r["corps"], 1, r["deaths"], r["fisher"]) for r in table("horsekicks")]
    plant.source(
        "army",
        ["year", "corps", "q", "deaths", "fisher"],
        rows,
        'time = "year", quantity = "q", defects = "deaths"',
    )
    plant.stream("kicks", "army", f'form = "per-unit"\nexposure_name = "corps-years"\n{lines}')


def test_horse_kicks_of_all_corps_raise_nothing(plant) -> None:
    horse_kicks(plant, "")
    stream = plant.rehearse("1894-12-31")["kicks"]
    assert (stream["events"], stream["exposure"]) == (196, 280)  # von Bortkiewicz 1898
    assert (stream["alerts"], stream["standing"]) == ([], "steady")


def test_horse_kicks_are_read_as_printed(plant) -> None:
    horse_kicks(plant, 'where = { fisher = ["yes"] }')
    stream = plant.status("1894-12-31T12:00:00")["kicks"]
    assert (stream["events"], stream["exposure"]) == (122, 200)
    deaths = [r["defects"] for r in plant.records() if r["attributes"]["fisher"] == "yes"]
    # von Bortkiewicz 1898, Fisher 1925
    assert [Counter(deaths)[k] for k in range(5)] == [109, 65, 22, 3, 1]
    # computed: index of dispersion 1.0016
    assert round(index(deaths, [1] * 200), 4) == 1.0016


def test_horse_kicks_are_not_said_to_vary_more_than_chance(plant) -> None:
    horse_kicks(plant, 'where = { fisher = ["yes"] }')
    stream = plant.status("1894-12-31T12:00:00")["kicks"]
    assert stream["events"] == 122
    assert "over-dispersed" not in codes(stream)


def test_horse_kicks_of_ten_corps_raise_little(plant) -> None:
    """Fisher's ten corps follow the Poisson law; 11 deaths in 1880 after 22 in five years is their one surprise."""
    horse_kicks(plant, 'where = { fisher = ["yes"] }')
    stream = plant.rehearse("1894-12-31")["kicks"]
    assert stream["events"] == 122
    assert [(a["direction"], a["raised_at"][:4]) for a in stream["alerts"]] in ([], [("worse", "1880")])
    assert all(a["recurrence_years"] < 200 for a in stream["alerts"])


def test_flying_bombs_fall_evenly_in_whatever_order(plant) -> None:
    plant.head(budget=0.1)
    rows: list[tuple[object, ...]] = []
    for order in range(4):
        # Clarke 1946: squares of London by number of hits; the one with five or more had seven
        squares = [k for k, n in enumerate([229, 211, 93, 35, 7]) for _ in range(n)] + [7]
        random.Random(order).shuffle(squares)
        rows += [(day(i), order, i, 1, k) for i, k in enumerate(squares)]
    plant.source(
        "map",
        ["day", "walk", "square", "q", "hits"],
        rows,
        'time = "day", quantity = "q", defects = "hits", attributes = ["walk"]',
    )
    for order in range(4):
        for form in ("per-unit", "gap"):
            plant.stream(f"{form}-{order}", "map", f'form = "{form}"\nwhere = {{ walk = ["{order}"] }}')
    streams = plant.rehearse("2001-08-01")
    for name, stream in streams.items():
        # 537 hits; hit squares count as one event each in the gap form
        assert (stream["events"], stream["exposure"]) == (537 if "unit" in name else 576 - 229, 576)
        assert (stream["alerts"], stream["standing"]) == ([], "steady"), name


# --- units that do not share one rate ---------------------------------------------------------------------------


def looms(plant, rows: Sequence[dict[str, str]]) -> None:
    plant.head(budget=1)
    plant.source(
        "looms", ["day", "loom", "q", "breaks"], [(day(i), i, 1, r["breaks"]) for i, r in enumerate(rows)],
        'time = "day", quantity = "q", defects = "breaks"',
    )  # fmt: skip
    plant.stream("breaks", "looms", 'form = "per-unit"\nexposure_name = "looms"')


def test_warp_breaks_are_read_as_printed(plant) -> None:
    looms(plant, table("warpbreaks"))
    stream = plant.status("2000-03-01T12:00:00")["breaks"]
    counts = [r["defects"] for r in plant.records()]
    # computed: 1,520 breaks on 54 looms, index of dispersion 6.19
    assert (stream["events"], stream["exposure"]) == (1520, 54)
    assert round(index(counts, [1] * 54), 2) == 6.19


def test_warp_breaks_are_said_to_vary_more_than_chance(plant) -> None:
    looms(plant, table("warpbreaks"))
    assert "over-dispersed" in codes(plant.status("2000-03-01T12:00:00")["breaks"])


@pytest.mark.parametrize("order", range(4))
def test_warp_breaks_in_a_random_order_raise_nothing(plant, order: int) -> None:
    looms(plant, random.Random(order).sample(table("warpbreaks"), 54))
    stream = plant.rehearse("2000-03-01")["breaks"]
    assert (stream["events"], stream["alerts"]) == (1520, [])


def test_ships_without_service_are_set_aside(plant) -> None:
    plant.head(budget=1)
    rows = [(f"19{r['period']}-01-01", i, r["service"], r["incidents"]) for i, r in enumerate(table("ships"))]
    plant.source(
        "ships", ["at", "row", "months", "n"], rows, 'time = "at", quantity = "months", defects = "n"'
    )
    plant.stream("damage", "ships", 'form = "per-unit"\nexposure_name = "months of service"')
    stream = plant.status("1980-01-01T12:00:00")["damage"]
    # McCullagh & Nelder 1989; computed: totals, and index of dispersion 5.76 on 33 degrees of freedom
    assert (stream["events"], stream["exposure"]) == (356, 163_574)
    refused = plant.run("rejects")["rejects"]
    assert [(r["column"], float(r["value"])) for r in refused] == [("months", 0)] * 6
    kept = plant.records()
    assert round(index([r["defects"] for r in kept], [r["quantity"] for r in kept]), 2) == 5.76


def pumps(plant) -> None:
    # Gaver & O'Muircheartaigh 1987: failures of ten pumps, thousand hours
    failures = [5, 1, 5, 14, 3, 19, 1, 1, 4, 22]
    hours = [94.3, 15.7, 62.9, 126, 5.24, 31.4, 1.05, 1.05, 2.1, 10.5]
    plant.head(budget=1)
    rows = [(day(i), i, *pair) for i, pair in enumerate(zip(hours, failures, strict=True))]
    plant.source("pumps", ["at", "pump", "kh", "n"], rows, 'time = "at", quantity = "kh", defects = "n"')
    plant.stream("failures", "pumps", 'form = "per-unit"\nexposure_name = "thousand hours"')


def test_pumps_are_read_as_printed(plant) -> None:
    pumps(plant)
    stream = plant.status("2000-02-01T12:00:00")["failures"]
    assert stream["events"] == 75
    assert stream["exposure"] == pytest.approx(350.24)
    kept = plant.records()
    # computed: X² 257.1 on 9 degrees of freedom
    found = index([r["defects"] for r in kept], [r["quantity"] for r in kept])
    assert round(9 * found, 1) == 257.1


def test_ten_pumps_are_too_few_records_to_learn_from(plant) -> None:
    pumps(plant)
    stream = plant.status("2000-02-01T12:00:00")["failures"]
    assert (stream["standing"], stream["alert"]) == ("learning", None)


# --- fleets and patients: exposure adds up over all that are in service ------------------------------------------


def in_service(
    spans: Sequence[tuple[int, int]], events: Sequence[int], origin: date
) -> list[tuple[str, int, int]]:
    """Rows of a fleet: a day with events (or the last one), exposure since the row before, events."""

    def total(at: int) -> int:
        return sum(max(0, min(end, at) - start) for start, end in spans)

    rows, before = [], 0
    for at in sorted({*events, max(end for _, end in spans)}):
        rows.append(((origin + timedelta(days=at)).isoformat(), total(at) - before, events.count(at)))
        before = total(at)
    return rows


def test_valve_seats_are_steady_up_to_the_end(plant) -> None:
    plant.head(budget=0.1)
    engines = table("valveseat")
    ends = [(0, int(r["days"])) for r in engines if r["replaced"] == "0"]
    replaced = [int(r["days"]) for r in engines if r["replaced"] == "1"]
    plant.source(
        "fleet", ["day", "engine_days", "n"], in_service(ends, replaced, DAY_ONE),
        'time = "day", quantity = "engine_days", defects = "n"', 'failing_unit = "last"',
    )  # fmt: skip
    plant.stream("seats", "fleet", 'exposure_name = "engine-days"')
    stream = plant.status("2002-06-01T12:00:00")["seats"]
    # Meeker & Escobar 1998; computed: 48 replacements on 41 engines, 1.893 per thousand engine-days
    assert (len(ends), stream["events"]) == (41, 48)
    assert round(1000 * stream["events"] / stream["exposure"], 3) == 1.893
    # the same book: a steady rate at first, perhaps a higher one near the end of the record
    for alert in plant.rehearse("2002-06-01")["seats"]["alerts"]:
        assert (alert["direction"], alert["raised_at"] > day(550)) == ("worse", True)


def infections(plant) -> None:
    plant.head(budget=1)
    origin = date(1988, 1, 1)
    rows = []
    for arm in ("placebo", "rIFN-g"):
        own = [r for r in table("infections") if r["treatment"] == arm]
        starts = [(date.fromisoformat(r["randomised"]) - origin).days for r in own]
        spans = [(s + int(r["from_day"]), s + int(r["to_day"])) for s, r in zip(starts, own, strict=True)]
        events = [end for (_, end), r in zip(spans, own, strict=True) if r["infected"] == "1"]
        rows += [(at, arm, days, n) for at, days, n in in_service(spans, events, origin)]
    plant.source(
        "wards", ["day", "arm", "patient_days", "n"], rows,
        'time = "day", quantity = "patient_days", defects = "n"', 'failing_unit = "last"',
    )  # fmt: skip
    plant.stream("placebo", "wards", 'where = { arm = ["placebo"] }\nexposure_name = "patient-days"')
    plant.stream(
        "gamma", "wards",
        'where = { arm = ["rIFN-g"] }\nexposure_name = "patient-days"\nbaseline = { events = 56, exposure = 18524 }',
    )  # fmt: skip


def test_interferon_is_better_than_placebo_and_placebo_steady(plant) -> None:
    infections(plant)
    streams = plant.rehearse("1990-12-31")
    # Fleming & Harrington 1991; computed: 1.104 and 0.385 infections a patient-year
    for name, events, rate in (("placebo", 56, 1.104), ("gamma", 20, 0.385)):
        assert streams[name]["events"] == events
        assert round(365.25 * events / streams[name]["exposure"], 3) == rate
    assert (streams["placebo"]["alerts"], streams["placebo"]["standing"]) == ([], "steady")
    first = streams["gamma"]["alerts"][0]
    assert {a["direction"] for a in streams["gamma"]["alerts"]} == {"better"}
    # computed: ratio 0.349; the arm was under treatment from its first day
    assert first["rate_ratio"]["low"] < 0.349 < first["rate_ratio"]["high"]
    assert began(first)[0] == first["baseline"]["to"][:10]
