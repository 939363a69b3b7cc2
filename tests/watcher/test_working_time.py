"""Working time through weekends, closed days, daylight saving and hours."""

from __future__ import annotations

import time
from datetime import datetime, timedelta
from zoneinfo import ZoneInfo

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from watcher.config.values import Span
from watcher.workcalendar import WorkCalendar

OSLO = ZoneInfo("Europe/Oslo")
PLAIN = WorkCalendar(OSLO)
SHIFTS = WorkCalendar(OSLO, hours="06:00-22:00", closed=["2026-07-06..2026-07-24"], opened=["2026-10-03"])


def at(text):
    return datetime.fromisoformat(text).replace(tzinfo=OSLO)


@pytest.mark.parametrize(
    ("unit", "start", "end", "expected"),
    [
        ("workdays", "2026-03-02", "2026-03-09", 5.0),
        ("workdays", "2026-03-02T12:00", "2026-03-03T12:00", 1.0),
        ("workdays", "2026-03-07", "2026-03-09", 0.0),
        # the clock skips an hour on Sunday 29 March and repeats one on Sunday 25 October 2026 (tz database)
        ("workdays", "2026-03-27", "2026-03-31", 2.0),
        ("days", "2026-03-28T12:00", "2026-03-29T12:00", 23 / 24),
        ("days", "2026-10-24T12:00", "2026-10-25T12:00", 25 / 24),
    ],
)
def test_exposure_of_a_plain_week(unit, start, end, expected):
    assert PLAIN.exposure(unit, at(start), at(end)) == pytest.approx(expected)


def test_hours_closed_and_opened_days_count():
    assert SHIFTS.exposure("workhours", at("2026-03-02"), at("2026-03-04")) == pytest.approx(32.0)
    assert SHIFTS.exposure("workdays", at("2026-03-02T14:00"), at("2026-03-03")) == pytest.approx(0.5)
    assert SHIFTS.exposure("workdays", at("2026-07-06"), at("2026-07-25")) == 0.0
    assert SHIFTS.exposure("workdays", at("2026-10-03"), at("2026-10-05")) == 1.0


def test_public_holidays_of_a_country_are_closed():
    """Norway's Constitution Day, 17 May (common practice); a Monday in 2027."""
    assert not WorkCalendar(OSLO, country="NO").is_working(at("2027-05-17").date())


def test_the_next_working_moment_is_found():
    saturday, monday = at("2026-03-07T10:00"), at("2026-03-09T06:00")
    found = SHIFTS.next_working_us(round(saturday.timestamp() * 1e6))
    assert found == round(monday.timestamp() * 1e6)
    inside = round(at("2026-03-09T07:00").timestamp() * 1e6)
    assert SHIFTS.next_working_us(inside) == inside


def test_a_span_of_workdays_passes_over_the_weekend():
    span = Span(amount=3, unit="workdays")
    assert not PLAIN.passed(at("2026-03-06T08:00"), at("2026-03-10T08:00"), span)
    assert PLAIN.passed(at("2026-03-06T08:00"), at("2026-03-11T08:00"), span)
    assert PLAIN.passed(at("2026-03-06T08:00"), at("2026-03-06T09:00"), Span(amount=60, unit="minutes"))


moments = st.datetimes(datetime(2025, 1, 1), datetime(2027, 12, 31))  # noqa: DTZ001 - zone given below


@given(st.lists(moments, min_size=3, max_size=3), st.sampled_from(["workdays", "workhours", "days"]))
def test_exposure_adds_up_and_agrees_with_its_knots(three, unit):
    """Law: additivity, and the same figure by three ways."""
    a, b, c = sorted(t.replace(tzinfo=OSLO) for t in three)
    whole = SHIFTS.exposure(unit, a, c)
    assert whole == pytest.approx(SHIFTS.exposure(unit, a, b) + SHIFTS.exposure(unit, b, c), abs=1e-6)
    us = [round(t.timestamp() * 1e6) for t in (a, b, c)]
    assert SHIFTS.cumulative(unit, us[0], np.array(us))[2] == pytest.approx(whole, abs=1e-6)


def test_thirty_years_are_quick():
    start = at("2000-01-03")
    began = time.process_time()
    times = np.array([round((start + timedelta(hours=3 * k)).timestamp() * 1e6) for k in range(80_000)])
    SHIFTS.cumulative("workhours", int(times[0]), times)
    assert time.process_time() - began < 5.0
