"""The invented yard Skerry Point Works: three years of drops as its stations would write them."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from datetime import date, datetime, time, timedelta
from zoneinfo import ZoneInfo

import numpy as np

__all__ = ["FIRST_DAY", "LAST_DAY", "ZONE", "Drop", "configuration", "drops"]

ZONE = ZoneInfo("Europe/Oslo")
FIRST_DAY = date(2023, 1, 2)
LAST_DAY = date(2025, 12, 22)
SEED = 1874

SEALS_WORSE_FROM = date(2025, 5, 12)
BRAKES_BETTER_FROM = date(2025, 1, 20)
WIRING_WORSE_FROM = date(2025, 8, 18)
BOOTH_SILENT_FROM = date(2025, 10, 20)
SUMMER = {(7, d) for d in range(7, 28)}


@dataclass(frozen=True, slots=True)
class Drop:
    """One file as a station leaves it: when, where and what."""

    delivered: datetime
    path: str
    text: str


def _days() -> Iterator[date]:
    day = FIRST_DAY
    while day < LAST_DAY:
        yield day
        day += timedelta(days=1)


def _works(day: date) -> bool:
    return (
        day.weekday() < 5 and (day.month, day.day) not in SUMMER and not (day.month == 12 and day.day >= 24)
    )


def _weeks() -> Iterator[list[date]]:
    week: list[date] = []
    for day in _days():
        week.append(day)
        if day.weekday() == 6:
            yield week
            week = []


def _at(day: date, hour: float) -> datetime:
    return datetime.combine(day, time(0), tzinfo=ZONE) + timedelta(hours=hour)


def _delivered(week: list[date]) -> datetime:
    """Stations hand in their week on Monday at five."""
    return _at(week[-1] + timedelta(days=1), 5.0)


def _name(week: list[date]) -> str:
    year, number, _ = week[0].isocalendar()
    return f"{year}-W{number:02d}"


def _proof_test(rng: np.random.Generator) -> Iterator[Drop]:
    """Hydraulic cartridges, one row a unit, comma separated, ISO times."""
    serial = 40_000
    for week in _weeks():
        lines = ["serial,tested_at,line,fixture,lot,result"]
        for day in filter(_works, week):
            count = int(rng.integers(28, 44))
            leak = 1 / 130 if day >= SEALS_WORSE_FROM else 1 / 420
            for i in range(count):
                serial += 1
                when = _at(day, 6.2 + 15.0 * (i + rng.uniform(0, 0.9)) / count)
                fixture = f"F{int(rng.integers(1, 9))}"
                result, draw = "OK", rng.uniform()
                if draw < leak:
                    result = "LEAK" if rng.uniform() < 0.7 else "WEEP"
                    if day >= SEALS_WORSE_FROM and rng.uniform() < 0.7:
                        fixture = "F7"
                elif draw > 1 - 1 / 1500:
                    result = "SCORED"
                lot = f"L{week[0].isocalendar().week:02d}{'ABC'[i % 3]}"
                lines.append(f"HC{serial},{when:%Y-%m-%dT%H:%M:%S},{1 + i % 2},{fixture},{lot},{result}")
        yield Drop(_delivered(week), f"drops/proof-test/{_name(week)}.csv", "\n".join(lines) + "\n")


def _winch_final(rng: np.random.Generator) -> Iterator[Drop]:
    """Winch drives: few units, semicolons, day-first dates."""
    serial = 2_100
    springs = {date(2023, 8, 23), date(2025, 2, 6), date(2025, 6, 19), date(2025, 11, 11)}
    for week in _weeks():
        lines = ["Drive;Finished;Bench;Finding"]
        for day in filter(_works, week):
            slip = 1 / 330 if day >= BRAKES_BETTER_FROM else 1 / 55
            for i in range(int(rng.integers(3, 7))):
                serial += 1
                finding = "none"
                if day in springs and i == 0:
                    finding = "spring broken"
                elif rng.uniform() < slip:
                    finding = "brake slips"
                when = _at(day, 8.0 + 2.0 * i + rng.uniform(0, 1))
                lines.append(f"WD-{serial};{when:%d.%m.%Y %H:%M};{'AB'[i % 2]};{finding}")
        yield Drop(
            _delivered(week), f"drops/winch-final/winch {_name(week)}.csv", "\r\n".join(lines) + "\r\n"
        )


def _cabinets(rng: np.random.Generator) -> Iterator[Drop]:
    """Control cabinets: small and large, wiring defects counted on each."""
    number = 600
    for week in _weeks():
        lines = ["cabinet,inspected,kind,terminals,wiring_defects"]
        for day in filter(_works, week):
            for kind, terminals, share in (
                ("lift", 120, 0.5),
                ("winch", 340, 0.5),
                ("switchboard", 900, 0.2),
            ):
                if rng.uniform() > share:
                    continue
                number += 1
                rate = 0.0052 if day >= WIRING_WORSE_FROM else 0.0026
                size = terminals + 10 * int(rng.integers(-3, 4))
                when = _at(day, 9.0 + rng.uniform(0, 6))
                lines.append(
                    f"CC{number},{when:%Y-%m-%d %H:%M},{kind},{size},{int(rng.poisson(rate * size))}"
                )
        yield Drop(_delivered(week), f"drops/cabinets/{_name(week)}.csv", "\n".join(lines) + "\n")


def _seal_press(rng: np.random.Generator) -> Iterator[Drop]:
    """Seal rings: thousands a shift, a handful of flash defects a month."""
    for week in _weeks():
        lines = ["shift_end,press,pressed,flash"]
        for day in filter(_works, week):
            for shift in (14.0, 22.0):
                pressed = 100 * int(rng.integers(55, 75))
                when = _at(day, shift)
                lines.append(
                    f"{when:%Y-%m-%dT%H:%M:%S%z},P{1 + int(shift > 15)},{pressed},{int(rng.poisson(22e-6 * pressed))}"
                )
        yield Drop(_delivered(week), f"drops/seal-press/{_name(week)}.csv", "\n".join(lines) + "\n")


def _incidents(rng: np.random.Generator) -> Iterator[Drop]:
    """Reportable incidents: one row each, an empty list in most weeks."""
    number = 0
    for week in _weeks():
        lines = ["report,happened,area"]
        for day in filter(_works, week):
            if rng.uniform() < 1 / 46:
                number += 1
                area = ("slipway", "machine hall", "paint booth", "quay")[int(rng.integers(0, 4))]
                lines.append(f"R{number:03d},{_at(day, 7.0 + rng.uniform(0, 9)):%Y-%m-%d %H:%M},{area}")
        yield Drop(_delivered(week), f"drops/incidents/{_name(week)}.csv", "\n".join(lines) + "\n")


def _paint_booth(rng: np.random.Generator) -> Iterator[Drop]:
    """Painted housings; the booth's export stops one autumn and nobody notices at first."""
    serial = 9_000
    for week in _weeks():
        if week[0] >= BOOTH_SILENT_FROM:
            return
        lines = ["housing,painted,blister"]
        for day in filter(_works, week):
            for i in range(int(rng.integers(8, 14))):
                serial += 1
                when = _at(day, 7.0 + 0.9 * i)
                lines.append(f"PH{serial},{when:%Y-%m-%dT%H:%M},{'yes' if rng.uniform() < 1 / 110 else 'no'}")
        yield Drop(_delivered(week), f"drops/paint-booth/{_name(week)}.csv", "\n".join(lines) + "\n")


def drops(seed: int = SEED) -> list[Drop]:
    """Every file of the three years, in the order of delivery."""
    makers = (_proof_test, _winch_final, _cabinets, _seal_press, _incidents, _paint_booth)
    found = [d for i, make in enumerate(makers) for d in make(np.random.default_rng([seed, i]))]
    return sorted(found, key=lambda d: (d.delivered, d.path))


def configuration(*, smtp_port: int, hook: str, ca_file: str) -> str:
    """The yard's plant.toml; secrets come from the environment."""
    return f"""\
# Skerry Point Works: an invented yard. All records are invented too.
[plant]
name = "Skerry Point Works"
timezone = "Europe/Oslo"

[store]
url = "sqlite:///gapbell.db"

[calendar]
workdays = ["mon", "tue", "wed", "thu", "fri"]
closed = ["2023-07-07..2023-07-27", "2024-07-07..2024-07-27", "2025-07-07..2025-07-27",
          "2023-12-24..2024-01-01", "2024-12-24..2025-01-01"]

[alerting]
false_alerts_per_year = 1.0

[channels.mail]
kind = "email"
host = "localhost"
port = {smtp_port}
username = "gapbell"
password = {{ env = "GAPBELL_TRIAL_PASSWORD" }}
sender = "gapbell@skerry-point.example"
ca_file = "{ca_file}"

[channels.floor]
kind = "webhook"
url = "{hook}"
secret = {{ env = "GAPBELL_TRIAL_SECRET" }}
body = "text"

[recipients.quality]
send = [{{ channel = "mail", to = ["quality@skerry-point.example"] }}, {{ channel = "floor" }}]
digest = true
[recipients.safety]
send = [{{ channel = "mail", to = ["safety@skerry-point.example"] }}]
[recipients.maintainers]
send = [{{ channel = "mail", to = ["it@skerry-point.example"] }}]
feed_notices = true

[sources.proof-test]
kind = "csv-drop"
folder = "drops/proof-test"
columns = {{ time = "tested_at", unit = "serial", attributes = ["fixture", "lot", "line"] }}
key = ["serial", "tested_at"]
stale_after = "6 workdays"

[sources.winch-final]
kind = "csv-drop"
folder = "drops/winch-final"
delimiter = ";"
dates = "dmy"
columns = {{ time = "Finished", unit = "Drive", attributes = ["Bench"] }}
key = ["Drive"]
stale_after = "6 workdays"

[sources.cabinets]
kind = "csv-drop"
folder = "drops/cabinets"
columns = {{ time = "inspected", unit = "cabinet", defects = "wiring_defects", opportunities = "terminals", attributes = ["kind"] }}
key = ["cabinet"]
stale_after = "6 workdays"

[sources.seal-press]
kind = "csv-drop"
folder = "drops/seal-press"
columns = {{ time = "shift_end", quantity = "pressed", defects = "flash", attributes = ["press"] }}
key = ["shift_end", "press"]
stale_after = "6 workdays"

[sources.incidents]
kind = "csv-drop"
folder = "drops/incidents"
columns = {{ time = "happened", attributes = ["area"] }}
key = ["report"]
proof_of_life = "file"
stale_after = "6 workdays"

[sources.paint-booth]
kind = "csv-drop"
folder = "drops/paint-booth"
columns = {{ time = "painted", unit = "housing" }}
key = ["housing"]
stale_after = "6 workdays"

[streams.seal-leak]
title = "Seal leaks at proof test"
source = "proof-test"
event = {{ result = ["LEAK", "WEEP"] }}
exposure_name = "cartridges"
baseline = {{ first_events = 12 }}
reaction_plan = "Stop seal assembly, quarantine the lot, call the seal cell lead."
notify = ["quality"]

[streams.bore-score]
title = "Scored bores at proof test"
source = "proof-test"
event = {{ result = ["SCORED"] }}
exposure_name = "cartridges"
baseline = {{ first_events = 8 }}
notify = ["quality"]

[streams.brake-slip]
title = "Slipping brakes at winch final test"
source = "winch-final"
event = {{ Finding = ["brake slips"] }}
exposure_name = "winch drives"
baseline = {{ first_events = 12 }}
reaction_plan = "Hold the drive, check the lining batch, call the winch cell lead."
notify = ["quality"]

[streams.spring-break]
title = "Broken brake springs at winch final test"
source = "winch-final"
event = {{ Finding = ["spring broken"] }}
exposure_name = "winch drives"
baseline = {{ rate = 0.0011 }}
notify = ["quality"]

[streams.wiring]
title = "Wiring defects in control cabinets"
source = "cabinets"
form = "per-unit"
exposure = "opportunities"
exposure_name = "terminals"
express_per = 1000
baseline = {{ from = "2023-01-01", to = "2023-12-31" }}
reaction_plan = "Check the crimping tools of the week, re-inspect cabinets not yet shipped."
notify = ["quality"]

[streams.seal-flash]
title = "Flash on seal rings"
source = "seal-press"
exposure_name = "seal rings"
express_per = 1_000_000
baseline = {{ first_events = 20 }}
notify = ["quality"]

[streams.incidents]
title = "Reportable incidents"
source = "incidents"
exposure = "workdays"
safety = true
baseline = {{ first_events = 8 }}
notify = ["safety"]

[streams.paint-blister]
title = "Blisters on painted housings"
source = "paint-booth"
event = {{ blister = ["yes"] }}
exposure_name = "housings"
baseline = {{ first_events = 12 }}
notify = ["quality"]
"""
