"""Text, numbers and times as plants write them, read strictly: what is not plain is refused with a reason."""

from __future__ import annotations

import re
from datetime import UTC, datetime, timedelta
from difflib import get_close_matches
from hashlib import blake2b
from zoneinfo import ZoneInfo

__all__ = [
    "NotUnderstoodError",
    "digest",
    "nearest",
    "normal_name",
    "number_reader",
    "parse_fields",
    "read_time",
    "shown",
]

_ISO = re.compile(
    r"(\d{4})-(\d\d)-(\d\d)(?:[Tt ](\d\d):(\d\d)(?::(\d\d)(?:[.,](\d+))?)?\s*(Z|z|[+-]\d\d(?::?\d\d)?)?)?",
    re.ASCII,
)
_ORDERED = re.compile(
    r"(\d{1,4})([./-])(\d{1,2})\2(\d{1,4})(?:[T ]+(\d{1,2}):(\d\d)(?::(\d\d)(?:[.,](\d+))?)?\s*([AaPp][Mm])?)?",
    re.ASCII,
)
_DAMAGED = re.compile(r"\d(?:[.,]\d+)?[Ee]\+\d{1,3}")
_SHOWN = 60


class NotUnderstoodError(ValueError):
    """A cell that cannot be understood; the text says what was expected."""


def shown(value: str) -> str:
    """Shorten a value for a message; control characters are shown escaped."""
    text = value if len(value) <= _SHOWN else value[: _SHOWN - 1] + "…"
    return "".join(c if c.isprintable() else c.encode("unicode_escape").decode("ascii") for c in text)


def digest(parts: list[str]) -> str:
    """Hash texts, each with its length, into 32 characters."""
    return blake2b("\x1f".join([f"{len(p)}:{p}" for p in parts]).encode(), digest_size=16).hexdigest()


def normal_name(name: str) -> str:
    """Column name without regard to case and spacing."""
    return " ".join(name.split()).casefold()


def nearest(name: str, known: list[str]) -> str:
    """Sentence part that names the nearest known column, or all of them."""
    close = get_close_matches(normal_name(name), [normal_name(k) for k in known], 1, 0.6)
    if close:
        match = next(k for k in known if normal_name(k) == close[0])
        return f'the nearest is "{shown(match)}"'
    return "the columns are " + ", ".join(f'"{shown(k)}"' for k in known[:12])


def is_damaged_identifier(text: str) -> bool:
    """Whether a spreadsheet has turned this identifier into a rounded number such as 4,71E+11."""
    return _DAMAGED.fullmatch(text) is not None


class number_reader:  # noqa: N801 - used like a function
    """Reads numbers with one decimal and one thousands sign, nothing else.

    Examples
    --------
    >>> number_reader(",", ".")("1.234,5")
    1234.5
    """

    def __init__(self, decimal: str = ".", thousands: str | None = None) -> None:
        self._thousands = thousands
        self._decimal = decimal
        d = re.escape(decimal)
        whole = r"\d+"
        if thousands:
            t = r"[ \u00a0\u202f]" if thousands == " " else re.escape(thousands)
            whole = rf"(?:\d{{1,3}}(?:{t}\d{{3}})+|\d+)"
        self._pattern = re.compile(rf"[+-]?{whole}(?:{d}\d+)?", re.ASCII)

    def __call__(self, text: str) -> float:
        """Read one number."""
        if not self._pattern.fullmatch(text):
            example = f"1234{self._decimal}5"
            raise NotUnderstoodError(f"expected a number such as {example}")
        if self._thousands:
            for sign in (" ", "\u00a0", "\u202f") if self._thousands == " " else (self._thousands,):
                text = text.replace(sign, "")
        return float(text.replace(self._decimal, "."))


def _local(moment: datetime, zone: ZoneInfo) -> datetime:
    """Give a naive local time its zone.

    A time that the clock shows twice in autumn is taken as the first; one that it skips in spring is read
    with the offset in force before the change, so that no record is lost.
    """
    return moment.replace(tzinfo=zone).astimezone(UTC)


def _micro(digits: str | None) -> int:
    return int(digits[:6].ljust(6, "0")) if digits else 0


def _read_iso(text: str, zone: ZoneInfo) -> datetime:
    found = _ISO.fullmatch(text)
    if not found:
        raise NotUnderstoodError('expected a time such as 2026-03-04T10:15:00 (dates = "iso")')
    year, month, day, hour, minute, second, fraction, offset = found.groups()
    extra = timedelta()
    if hour == "24" and minute == "00" and second in {None, "00"}:
        hour, extra = "00", timedelta(days=1)
    if second == "60":
        second = "59"
    moment = datetime(  # noqa: DTZ001 - given its zone below
        int(year), int(month), int(day), int(hour or 0), int(minute or 0), int(second or 0), _micro(fraction)
    ) + extra  # fmt: skip
    if offset is None:
        return _local(moment, zone)
    if offset in {"Z", "z"}:
        return moment.replace(tzinfo=UTC)
    minutes = int(offset[1:3]) * 60 + int(offset[-2:] if len(offset) > 3 else 0)
    shift = timedelta(minutes=minutes if offset[0] == "+" else -minutes)
    if abs(shift) > timedelta(hours=18):
        raise NotUnderstoodError("expected an offset from UTC of at most 18 hours")
    return moment.replace(tzinfo=UTC) - shift


def read_time(text: str, dates: str, zone: ZoneInfo) -> datetime:
    """Read a time as UTC; ``dates`` is ``iso``, ``dmy``, ``mdy``, ``ymd`` or a strptime format.

    Examples
    --------
    >>> read_time("03.04.2025 14:05", "dmy", ZoneInfo("Europe/Oslo")).isoformat()
    '2025-04-03T12:05:00+00:00'
    """
    try:
        if dates == "iso":
            return _read_iso(text, zone)
        if dates in {"dmy", "mdy", "ymd"}:
            return _read_ordered(text, dates, zone)
        moment = datetime.strptime(text, dates)  # noqa: DTZ007 - given its zone here
        return moment.astimezone(UTC) if moment.tzinfo else _local(moment, zone)
    except NotUnderstoodError:
        raise
    except (ValueError, OverflowError) as error:
        raise NotUnderstoodError(f'expected a time that exists, written as dates = "{dates}" says') from error


def _read_ordered(text: str, dates: str, zone: ZoneInfo) -> datetime:
    examples = {"dmy": "04.03.2026 10:15", "mdy": "03/04/2026 10:15", "ymd": "2026/03/04 10:15"}
    found = _ORDERED.fullmatch(text)
    if not found:
        raise NotUnderstoodError(f'expected a time such as {examples[dates]} (dates = "{dates}")')
    first, _, second, third, hour, minute, secs, fraction, half = found.groups()
    parts = dict(zip(dates, (first, second, third), strict=True))
    if len(parts["y"]) not in {2, 4} or len(parts["m"]) > 2 or len(parts["d"]) > 2:
        raise NotUnderstoodError(f'expected a time such as {examples[dates]} (dates = "{dates}")')
    year = int(parts["y"]) + (2000 if len(parts["y"]) == 2 else 0)
    hours = int(hour or 0)
    if half:
        if not 1 <= hours <= 12:
            raise NotUnderstoodError("expected an hour from 1 to 12 before AM or PM")
        hours = hours % 12 + (12 if half.lower() == "pm" else 0)
    moment = datetime(  # noqa: DTZ001 - given its zone below
        year, int(parts["m"]), int(parts["d"]), hours, int(minute or 0), int(secs or 0), _micro(fraction)
    )
    return _local(moment, zone)


def parse_fields(text: str, delimiter: str) -> list[str] | None:
    """Split one logical line strictly; None while a quoted field is still open.

    Raises ``NotUnderstoodError`` where text follows a closing quotation mark.
    """
    if '"' not in text:
        return text.split(delimiter)
    fields: list[str] = []
    at, end = 0, len(text)
    while True:
        if at < end and text[at] == '"':
            piece: list[str] = []
            at += 1
            while True:
                close = text.find('"', at)
                if close < 0:
                    return None
                piece.append(text[at:close])
                if text[close + 1 : close + 2] == '"':
                    piece.append('"')
                    at = close + 2
                    continue
                at = close + 1
                break
            fields.append("".join(piece))
            if at < end and text[at] != delimiter:
                raise NotUnderstoodError(f"text follows a closing quotation mark in field {len(fields)}")
        else:
            stop = text.find(delimiter, at)
            stop = end if stop < 0 else stop
            fields.append(text[at:stop])
            at = stop
        if at >= end:
            return fields
        at += 1
