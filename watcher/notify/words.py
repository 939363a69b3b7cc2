"""Numbers, gaps and moments in plain English: sensible digits, units said, zones named."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import datetime
from typing import Any
from zoneinfo import ZoneInfo

__all__ = [
    "clean", "count", "day", "figure", "gap_unit", "how_often", "moment", "percent", "recurrence", "rough_day", "span_of_days", "times",
]  # fmt: skip

_UNIT_WORDS = {
    "units": "units",
    "opportunities": "places",
    "workdays": "working days",
    "workhours": "working hours",
    "days": "days",
}
_BIDI = set("\u061c\u200e\u200f\u202a\u202b\u202c\u202d\u202e\u2066\u2067\u2068\u2069")


def percent(share: float) -> str:
    """Return a share in per cent, small ones as a bound.

    Examples
    --------
    >>> percent(0.134), percent(0.002)
    ('13 %', 'less than 1 %')
    """
    return "less than 1 %" if 0 < share < 0.005 else f"{100 * share:.0f} %"


def clean(text: object) -> str:
    """Make data safe to show: control characters escaped, writing-direction marks taken out, one line."""
    out = []
    for c in str(text):
        if c in _BIDI:
            continue
        out.append(c if c.isprintable() else c.encode("unicode_escape").decode("ascii"))
    return "".join(out)


def figure(value: float, digits: int = 2) -> str:
    """Write a number with about so many significant digits, whole ones from 100 up, thousands apart.

    Examples
    --------
    >>> [figure(v) for v in (0.03456, 1.234, 38.4, 123.4, 45678.0)]
    ['0.035', '1.2', '38', '123', '45,678']
    """
    if value == 0:
        return "0"
    size = abs(value)
    if size >= 10 ** (digits - 1):
        return f"{value:,.0f}"
    text = f"{value:.{digits}g}"
    return f"{float(text):.10f}".rstrip("0").rstrip(".") if "e" in text else text


def times(value: float | None) -> str:
    """Write a ratio: "2.6 times"."""
    return "–" if value is None else f"{figure(value)} times"


def count(number: int, word: str, plural: str | None = None) -> str:
    """Write a number of things: "1 event", "3 events"."""
    return f"{number:,} {word if number == 1 else plural or word + 's'}"


def gap_unit(exposure_unit: str, exposure_name: str | None) -> str:
    """What one unit of exposure is called, in the plural."""
    return clean(exposure_name) if exposure_name else _UNIT_WORDS[exposure_unit]


def how_often(rate: float | None, unit: str, express_per: float = 1.0) -> str:
    """Write a rate as people say it: one in so many, or so many per million.

    Examples
    --------
    >>> how_often(1 / 118.7, "cartridges"), how_often(38e-6, "rings", 1e6)
    ('one in about 119 cartridges', 'about 38 per million rings')
    """
    if rate is None or rate <= 0:
        return f"none in the {unit} seen"
    if express_per == 1e6:
        return f"about {figure(rate * 1e6)} per million {unit}"
    if express_per != 1.0:
        return f"about {figure(rate * express_per)} per {express_per:,.0f} {unit}"
    if rate >= 0.8:
        return f"about {figure(rate)} per {_singular(unit)}"
    return f"one in about {figure(1.0 / rate)} {unit}"


def _singular(unit: str) -> str:
    if unit.endswith("ies"):
        return unit[:-3] + "y"
    return unit.removesuffix("s")


def recurrence(evidence: Mapping[str, Any]) -> str:
    """Write how often chance alone would do this."""
    years = evidence["recurrence_years"]
    if evidence.get("recurrence_capped"):
        return f"less than once in {years:,.0f} years of production"
    if years >= 1.5:
        return f"about once in {figure(years)} years of production"
    months = max(1, round(years * 12))
    return "about once a month" if months == 1 else f"about once in {months} months of production"


def moment(value: str | datetime | None, zone: ZoneInfo) -> str:
    """Write a moment with its zone: "4 March 2026, 10:15 (Europe/Oslo)"."""
    if value is None:
        return "–"
    t = (datetime.fromisoformat(value) if isinstance(value, str) else value).astimezone(zone)
    return f"{t.day} {t:%B %Y, %H:%M} ({zone.key})"


def day(value: str | datetime | None, zone: ZoneInfo) -> str:
    """Write a day: "4 March 2026"."""
    if value is None:
        return "–"
    t = (datetime.fromisoformat(value) if isinstance(value, str) else value).astimezone(zone)
    return f"{t.day} {t:%B %Y}"


def rough_day(value: str, zone: ZoneInfo) -> str:
    """Write a day as one recalls it: "mid-October 2025"."""
    t = datetime.fromisoformat(value).astimezone(zone)
    part = "early" if t.day <= 10 else "mid-" if t.day <= 20 else "late"
    return f"{part}{'' if part == 'mid-' else ' '}{t:%B %Y}"


def span_of_days(low: str, high: str, zone: ZoneInfo) -> str:
    """Write two days as a span."""
    a, b = day(low, zone), day(high, zone)
    return f"on {a}" if a == b else f"between {a} and {b}"
