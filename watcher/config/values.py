"""Small values of the configuration: spans of time, secrets, local days, cron lines."""

from __future__ import annotations

import os
import re
from datetime import date, datetime, time, timedelta
from pathlib import Path
from typing import Annotated, Any, Literal
from zoneinfo import ZoneInfo

from pydantic import BaseModel, BeforeValidator, ConfigDict, model_validator

__all__ = [
    "Cron",
    "Day",
    "Secret",
    "SecretMissingError",
    "Span",
    "Strict",
    "day_end_us",
    "day_start_us",
    "is_loopback",
]

_SPAN = re.compile(r"(\d{1,6})\s+(minute|hour|day|workday)s?")
_WEEKDAYS = ("mon", "tue", "wed", "thu", "fri", "sat", "sun")
_CRON_RANGES = ((0, 59), (0, 23), (1, 31), (1, 12), (0, 7))


class Strict(BaseModel):
    """Base of every table: unknown keys are errors, nothing changes after reading."""

    model_config = ConfigDict(
        extra="forbid", frozen=True, arbitrary_types_allowed=True, populate_by_name=True
    )


class Span(Strict):
    """A length of time such as "3 workdays"."""

    amount: int
    unit: Literal["minutes", "hours", "days", "workdays"]

    @model_validator(mode="before")
    @classmethod
    def _read(cls, value: Any) -> Any:
        if isinstance(value, str):
            found = _SPAN.fullmatch(value.strip())
            if not found or int(found[1]) == 0:
                raise ValueError(
                    'a length of time such as "30 minutes", "24 hours", "90 days" or "3 workdays"'
                )
            return {"amount": int(found[1]), "unit": f"{found[2]}s"}
        return value

    def __str__(self) -> str:
        return f"{self.amount} {self.unit if self.amount != 1 else self.unit[:-1]}"

    def plain(self) -> timedelta:
        """Length in clock time; workdays count as days (for what has no calendar)."""
        return timedelta(**{"days" if self.unit == "workdays" else self.unit: self.amount})


class SecretMissingError(Exception):
    """A secret that is referred to is not there."""


class Secret(Strict):
    """A secret by reference; the value itself is never kept, shown or written."""

    env: str | None = None
    file: str | None = None

    @model_validator(mode="before")
    @classmethod
    def _read(cls, value: Any) -> Any:
        if not isinstance(value, dict) or len(value) != 1 or not set(value) <= {"env", "file"}:
            raise ValueError('a reference, { env = "NAME" } or { file = "PATH" }; never the secret itself')
        return value

    def reveal(self) -> str:
        """Return the secret; raises ``SecretMissingError``."""
        if self.env is not None:
            value = os.environ.get(self.env)
            if not value:
                raise SecretMissingError(f"The environment variable {self.env} is not set.")
            return value
        assert self.file is not None
        try:
            return Path(self.file).read_text(encoding="utf-8").strip()
        except OSError as error:
            raise SecretMissingError(
                f"The secret file {self.file} cannot be read: {error.strerror or error}."
            ) from error

    def __repr__(self) -> str:
        return f"Secret({'env' if self.env else 'file'}={self.env or self.file!r})"

    __str__ = __repr__


def _read_day(value: Any) -> date:
    if isinstance(value, datetime):
        return value.date()
    if isinstance(value, date):
        return value
    try:
        return date.fromisoformat(value)
    except (TypeError, ValueError):
        raise ValueError('a day such as "2026-03-04"') from None


Day = Annotated[date, BeforeValidator(_read_day)]


def day_start_us(day: date, zone: ZoneInfo) -> int:
    """First moment of a local day."""
    return round(datetime.combine(day, time(0), tzinfo=zone).timestamp() * 1e6)


def day_end_us(day: date, zone: ZoneInfo) -> int:
    """First moment of the day after."""
    return day_start_us(day + timedelta(days=1), zone)


def _read_cron(value: Any) -> str:
    """Check a five-field cron line and write its weekdays as names, since schedulers count them differently."""
    good = 'five cron fields such as "*/15 * * * *" or "0 7 * * mon"'
    if not isinstance(value, str) or len(value.split()) != 5:
        raise ValueError(good)
    fields = value.lower().split()
    for i, (low, high) in enumerate(_CRON_RANGES):
        parts = []
        for part in fields[i].split(","):
            body, _, step = part.partition("/")
            if step and not (step.isdecimal() and int(step) > 0):
                raise ValueError(good)
            ends = body.split("-")
            if body != "*":
                for j, end in enumerate(ends):
                    if i == 4 and end in _WEEKDAYS:
                        continue
                    if len(ends) > 2 or not end.isdecimal() or not low <= int(end) <= high:
                        raise ValueError(good)
                    if i == 4:
                        ends[j] = _WEEKDAYS[(int(end) - 1) % 7]
                body = "-".join(ends)
            parts.append(f"{body}/{step}" if step else body)
        fields[i] = ",".join(parts)
    return " ".join(fields)


Cron = Annotated[str, BeforeValidator(_read_cron)]


def is_loopback(host: str) -> bool:
    """Whether a host can only be this machine."""
    return host in {"localhost", "::1", "[::1]"} or host.startswith("127.")
