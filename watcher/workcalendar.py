"""Working time: how much of it lies between two moments, in days or hours, as the plant counts it."""

from __future__ import annotations

from collections.abc import Iterable
from datetime import UTC, date, datetime, time, timedelta
from functools import lru_cache
from zoneinfo import ZoneInfo

import numpy as np

from rules.model import FloatArray, IntArray
from watcher.config.load import Config
from watcher.config.tables import read_range
from watcher.config.values import Span

__all__ = ["WorkCalendar"]

_NAMES = ("mon", "tue", "wed", "thu", "fri", "sat", "sun")
_DAY_US = 86_400_000_000


class WorkCalendar:
    """Working days and hours in a named zone.

    A working day without hours is one whole local day, also when the clock makes it 23 or 25 hours long; with
    hours its working time runs evenly within them. ``days`` are elapsed days of 24 hours.
    """

    def __init__(
        self,
        zone: ZoneInfo,
        *,
        workdays: Iterable[str] = _NAMES[:5],
        hours: str | None = None,
        country: str | None = None,
        closed: Iterable[str] = (),
        opened: Iterable[str] = (),
    ) -> None:
        self.zone = zone
        self._weekdays = {_NAMES.index(d) for d in workdays}
        self._closed = set(_every_day(closed))
        self._opened = set(_every_day(opened))
        self._country = country
        self._from, self._to = 0, 1440
        if hours is not None:
            first, last = hours.split("-")
            self._from, self._to = _minutes(first), _minutes(last)

    @classmethod
    def of(cls, config: Config) -> WorkCalendar:
        """Return the calendar of a configuration."""
        c = config.calendar
        return cls(
            config.zone,
            workdays=c.workdays,
            hours=c.hours,
            country=c.holidays,
            closed=c.closed,
            opened=c.opened,
        )

    def is_working(self, day: date) -> bool:
        """Whether a local day is worked."""
        if day in self._opened:
            return True
        if day in self._closed or day.weekday() not in self._weekdays:
            return False
        return self._country is None or day not in _public(self._country, day.year)

    def _bounds(self, day: date) -> tuple[int, int]:
        """First and last moment of a day's working time."""
        out = []
        for minutes in (self._from, self._to):
            on = day + timedelta(days=minutes // 1440)
            local = datetime.combine(on, time(minutes % 1440 // 60, minutes % 60), tzinfo=self.zone)
            out.append(round(local.timestamp() * 1e6))
        return out[0], out[1]

    def knots(self, unit: str, start_us: int, end_us: int) -> tuple[FloatArray, IntArray]:
        """Cumulative exposure from ``start_us`` (0) to ``end_us`` as straight pieces: exposures and moments."""
        end_us = max(end_us, start_us)
        if unit == "days":
            moments = np.array([start_us, end_us], dtype=np.int64)
            return (moments - start_us) / _DAY_US, moments
        per_day = 1.0 if unit == "workdays" else (self._to - self._from) / 60.0
        exposures, moments_list = [0.0], [start_us]
        day = self._local_day(start_us) - timedelta(days=1)
        last = self._local_day(end_us)
        total = 0.0
        while day <= last:
            if self.is_working(day):
                low, high = self._bounds(day)
                a, b = max(low, start_us), min(high, end_us)
                if b > a:
                    if a > moments_list[-1]:
                        exposures.append(total)
                        moments_list.append(a)
                    total += per_day * (b - a) / (high - low)
                    exposures.append(total)
                    moments_list.append(b)
            day += timedelta(days=1)
        if moments_list[-1] < end_us:
            exposures.append(total)
            moments_list.append(end_us)
        return np.array(exposures), np.array(moments_list, dtype=np.int64)

    def cumulative(self, unit: str, origin_us: int, times_us: IntArray) -> FloatArray:
        """Exposure from ``origin_us`` to each moment; moments before it give 0."""
        if times_us.size == 0:
            return np.zeros(0)
        exposures, moments = self.knots(unit, origin_us, int(times_us.max()))
        return np.asarray(np.interp(times_us, moments, exposures))

    def exposure(self, unit: str, start: datetime, end: datetime) -> float:
        """Exposure between two aware moments; 0 if ``end`` is not after ``start``."""
        exposures, _ = self.knots(unit, _us(start), _us(end))
        return float(exposures[-1])

    def next_working_us(self, moment_us: int) -> int:
        """Return the moment itself if it lies in working time, else when working time next begins."""
        day = self._local_day(moment_us) - timedelta(days=1)
        for _ in range(800):
            if self.is_working(day):
                low, high = self._bounds(day)
                if moment_us < high:
                    return max(low, moment_us)
            day += timedelta(days=1)
        return moment_us

    def passed(self, since: datetime, now: datetime, span: Span) -> bool:
        """Whether a span has passed, workdays counted as such."""
        if span.unit == "workdays":
            return self.exposure("workdays", since, now) >= span.amount
        return now - since >= span.plain()

    def _local_day(self, moment_us: int) -> date:
        return datetime.fromtimestamp(moment_us / 1e6, UTC).astimezone(self.zone).date()


def _us(moment: datetime) -> int:
    return round(moment.timestamp() * 1e6)


def _minutes(text: str) -> int:
    hour, minute = text.split(":")
    return int(hour) * 60 + int(minute)


def _every_day(ranges: Iterable[str]) -> Iterable[date]:
    for text in ranges:
        day, last = read_range(text)
        while day <= last:
            yield day
            day += timedelta(days=1)


@lru_cache(maxsize=256)
def _public(country: str, year: int) -> frozenset[date]:
    import holidays

    return frozenset(holidays.country_holidays(country, years=year))
