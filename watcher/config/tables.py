"""The tables of ``plant.toml``, as the contract names them."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from datetime import date
from pathlib import Path
from typing import Annotated, Any, Literal
from urllib.parse import urlsplit
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

from pydantic import BeforeValidator, Field, field_validator, model_validator

from watcher.config.values import Cron, Day, Secret, Span, Strict, is_loopback

__all__ = [
    "Alerting", "BaselineSetting", "Calendar", "Channel", "EmailChannel", "MatrixChannel", "Plant", "Recipient", "Schedule", "Send",
    "Source", "SourceColumns", "Store", "Stream", "WebhookChannel",
]  # fmt: skip

_ADDRESS = re.compile(r"[A-Za-z0-9._%+=~!#$&'*/?^`{|}-]+@[A-Za-z0-9.-]+")
_HOURS = re.compile(r"([01]\d|2[0-4]):([0-5]\d)-([01]\d|2[0-4]):([0-5]\d)")
_DAYS = ("mon", "tue", "wed", "thu", "fri", "sat", "sun")


def _texts(value: Any) -> Any:
    """Accept one value for a list of one; numbers become text as written."""
    items = value if isinstance(value, list | tuple) else [value]
    if not items or not all(isinstance(i, str | int | float) and not isinstance(i, bool) for i in items):
        raise ValueError('a list of texts such as ["LEAK", "WEEP"]')
    return tuple(str(i).strip() for i in items)


Texts = Annotated[tuple[str, ...], BeforeValidator(_texts)]
Filter = dict[str, Texts]


def _zone(value: Any) -> Any:
    try:
        ZoneInfo(value)
    except (ZoneInfoNotFoundError, ValueError, TypeError, OSError):
        raise ValueError('an IANA time zone such as "Europe/Oslo"') from None
    return value


ZoneName = Annotated[str, BeforeValidator(_zone)]


class Plant(Strict):
    """Who we are."""

    name: str = Field(min_length=1)
    timezone: ZoneName


class Store(Strict):
    """Where things are remembered."""

    url: str = "sqlite:///gapbell.db"


class Calendar(Strict):
    """Working time."""

    workdays: tuple[Literal["mon", "tue", "wed", "thu", "fri", "sat", "sun"], ...] = (
        "mon",
        "tue",
        "wed",
        "thu",
        "fri",
    )
    hours: str | None = None
    holidays: str | None = None
    closed: tuple[str, ...] = ()
    opened: tuple[str, ...] = ()

    @field_validator("workdays")
    @classmethod
    def _some(cls, value: tuple[str, ...]) -> tuple[str, ...]:
        if not value:
            raise ValueError("at least one day of " + ", ".join(_DAYS))
        return value

    @field_validator("hours")
    @classmethod
    def _read_hours(cls, value: str | None) -> str | None:
        if value is not None:
            found = _HOURS.fullmatch(value)
            minutes = (
                [int(found[1]) * 60 + int(found[2]), int(found[3]) * 60 + int(found[4])] if found else [1, 0]
            )
            if minutes[0] >= minutes[1] or minutes[1] > 1440:
                raise ValueError('working hours such as "06:00-22:00"')
        return value

    @field_validator("holidays")
    @classmethod
    def _known_country(cls, value: str | None) -> str | None:
        if value is not None:
            try:
                import holidays
            except ImportError:
                raise ValueError(
                    'nothing here: the package for public holidays is missing; install "gapbell[holidays]"'
                ) from None
            if value not in holidays.list_supported_countries():
                raise ValueError('an ISO 3166 country code such as "NO"')
        return value

    @field_validator("closed", "opened")
    @classmethod
    def _read_ranges(cls, value: tuple[str, ...]) -> tuple[str, ...]:
        for item in value:
            read_range(item)
        return value


def read_range(text: str) -> tuple[date, date]:
    """Read ``2026-07-06..2026-07-24`` or one day; both ends belong to it."""
    first, _, last = text.partition("..")
    try:
        start = date.fromisoformat(first.strip())
        end = date.fromisoformat(last.strip()) if last else start
    except ValueError:
        raise ValueError('days such as "2026-12-24" or "2026-07-06..2026-07-24"') from None
    if end < start:
        raise ValueError("a range whose first day is not after its last")
    return start, end


class Schedule(Strict):
    """When passes and digests are due, plant time."""

    collect: Cron = "*/15 * * * *"
    digest: Cron = "0 7 * * mon"


class Alerting(Strict):
    """The plant's promise."""

    false_alerts_per_year: float = Field(default=1.0, gt=0, le=1e6, allow_inf_nan=False)
    remind_after: Span = Span(amount=3, unit="workdays")


class Replies(Strict):
    """Answers by mail."""

    host: str
    port: int = Field(default=993, ge=1, le=65535)
    username: str
    password: Secret
    address: str


class EmailChannel(Strict):
    """Mail through one submission server."""

    kind: Literal["email"]
    host: str = Field(min_length=1)
    port: int = Field(default=587, ge=1, le=65535)
    security: Literal["starttls", "tls", "none"] = "starttls"
    insecure_ok: bool = False
    username: str | None = None
    password: Secret | None = None
    sender: str
    ca_file: Path | None = None
    replies: Replies | None = None

    @field_validator("sender")
    @classmethod
    def _address(cls, value: str) -> str:
        return mail_address(value)

    @model_validator(mode="after")
    def _safe(self) -> EmailChannel:
        if self.security == "none" and not self.insecure_ok and not is_loopback(self.host):
            raise ValueError(
                'security = "none" is accepted to this machine only; use "starttls" or "tls", or set insecure_ok = true'
            )
        if (self.username is None) != (self.password is None):
            raise ValueError("username and password belong together: give both or neither")
        return self


def mail_address(value: str) -> str:
    """Check an address; beyond ASCII few mail servers take it."""
    if not _ADDRESS.fullmatch(value):
        raise ValueError('a plain ASCII mail address such as "qa@plant.example"')
    return value


def _checked_url(value: str) -> str:
    parts = urlsplit(value)
    if parts.scheme not in {"http", "https"} or not parts.hostname:
        raise ValueError("an address starting with https://")
    if parts.scheme == "http" and not is_loopback(parts.hostname):
        raise ValueError("an address starting with https:// (plain http reaches this machine only)")
    return value


class MatrixChannel(Strict):
    """A room on a Matrix homeserver."""

    kind: Literal["matrix"]
    homeserver: str
    room: str = Field(pattern=r"^[!#].+:.+")
    token: Secret
    ca_file: Path | None = None

    @field_validator("homeserver")
    @classmethod
    def _url(cls, value: str) -> str:
        return _checked_url(value)


class WebhookChannel(Strict):
    """An address that takes a POST."""

    kind: Literal["webhook"]
    url: Secret | str
    secret: Secret | None = None
    body: Literal["text", "cloudevents", "template"] = "text"
    template: str | None = None
    ca_file: Path | None = None

    @field_validator("url")
    @classmethod
    def _url(cls, value: Secret | str) -> Secret | str:
        return _checked_url(value) if isinstance(value, str) else value

    @model_validator(mode="after")
    def _whole(self) -> WebhookChannel:
        if (self.body == "template") != (self.template is not None):
            raise ValueError('template = "FILE" belongs to body = "template": give both or neither')
        return self

    def address(self) -> str:
        """Return the address; raises ``SecretMissingError`` or ``ValueError``."""
        return _checked_url(self.url.reveal()) if isinstance(self.url, Secret) else self.url


Channel = Annotated[EmailChannel | MatrixChannel | WebhookChannel, Field(discriminator="kind")]


class Send(Strict):
    """One way in which a recipient is reached."""

    channel: str
    to: tuple[str, ...] = ()

    @field_validator("to")
    @classmethod
    def _addresses(cls, value: tuple[str, ...]) -> tuple[str, ...]:
        return tuple(mail_address(v) for v in value)


class Recipient(Strict):
    """A group that receives."""

    send: tuple[Send, ...] = Field(min_length=1)
    digest: bool = False
    feed_notices: bool = False


class SourceColumns(Strict):
    """Which column holds what."""

    time: str
    unit: str | None = None
    quantity: str | None = None
    defects: str | None = None
    opportunities: str | None = None
    attributes: tuple[str, ...] = ()
    private: tuple[str, ...] = ()


class Source(Strict):
    """Where records come from."""

    kind: Literal["csv-drop", "database", "mes-export"]
    folder: str | None = None
    pattern: str = "*.csv"
    columns: SourceColumns | None = None
    key: tuple[str, ...] = ()
    void: Filter = {}
    timezone: ZoneName | None = None
    stale_after: Span | None = None
    proof_of_life: Literal["file", "reachable"] | None = None
    failing_unit: Literal["last"] | None = None
    encoding: str | None = None
    delimiter: str | None = Field(default=None, min_length=1, max_length=1)
    decimal: Literal[".", ","] = "."
    thousands: Literal[".", ",", " ", "'"] | None = None
    dates: str = "iso"
    settle_seconds: float = Field(default=10.0, ge=0, le=86400)
    archive: str | None = None
    url: str | Secret | None = None
    query: str | None = None
    watermark: str | None = None
    look_back: Span | None = None
    format: Literal["b2mml", "cfx", "xml", "json"] | None = None
    records: str | None = None
    fields: dict[str, str] = {}

    @field_validator("encoding")
    @classmethod
    def _known_encoding(cls, value: str | None) -> str | None:
        if value is not None:
            try:
                "".encode(value)
            except LookupError:
                raise ValueError('a text encoding such as "utf-8" or "cp1252"') from None
        return value

    @field_validator("dates")
    @classmethod
    def _known_dates(cls, value: str) -> str:
        if value not in {"iso", "dmy", "mdy", "ymd"} and "%" not in value:
            raise ValueError('"iso", "dmy", "mdy", "ymd" or a strptime format such as "%d.%m.%Y %H:%M"')
        return value

    @model_validator(mode="after")
    def _whole(self) -> Source:
        needed: Mapping[str, tuple[str, ...]] = {
            "csv-drop": ("folder", "columns"), "database": ("url", "query", "columns"), "mes-export": ("folder", "format"),
        }  # fmt: skip
        missing = [n for n in needed[self.kind] if getattr(self, n) is None]
        if missing:
            raise ValueError(f'kind "{self.kind}" also needs {" and ".join(missing)}')
        if self.thousands is not None and self.thousands == self.decimal:
            raise ValueError("decimal and thousands must be different signs")
        return self


class Production(Strict):
    """Exposure from another source."""

    source: str
    where: Filter = {}
    lag: Span | None = None
    """Production is reported so much later than it happens: an event belongs to exposure so much earlier."""


class OpportunityMap(Strict):
    """Places for a defect on a unit, by the product in a column."""

    column: str
    places: dict[str, float] = Field(min_length=1)

    @field_validator("places")
    @classmethod
    def _positive(cls, value: dict[str, float]) -> dict[str, float]:
        for product, number in value.items():
            if not (number > 0 and math.isfinite(number)):
                raise ValueError(f'a number of places above 0 for each product (here "{product}")')
        return value


class BaselineSetting(Strict):
    """How the baseline is to be had."""

    first_events: int | None = Field(default=None, ge=4, le=10_000)
    grow_to: int = Field(default=60, ge=0, le=10_000)
    from_: Day | None = Field(default=None, alias="from")
    to: Day | None = None
    rate: float | None = Field(default=None, gt=0, allow_inf_nan=False)
    events: int | None = Field(default=None, ge=1)
    exposure: float | None = Field(default=None, gt=0, allow_inf_nan=False)

    @model_validator(mode="after")
    def _one_way(self) -> BaselineSetting:
        ways = [
            self.first_events is not None,
            self.from_ is not None or self.to is not None,
            self.rate is not None,
            self.events is not None or self.exposure is not None,
        ]
        if sum(ways) != 1:
            raise ValueError(
                "one of { first_events = 12 }, { from = …, to = … }, { rate = … } or { events = …, exposure = … }"
            )
        if ways[1] and (self.from_ is None or self.to is None or self.to < self.from_):
            raise ValueError("both from and to, from not after to")
        if ways[3] and (self.events is None or self.exposure is None):
            raise ValueError("both events and exposure")
        if ways[3] and self.events is not None and self.events < 4:
            raise ValueError("at least 4 events; fewer say almost nothing")
        return self


class ClusterColumn(Strict):
    """Events of one value are one event."""

    column: str


class Stream(Strict):
    """One kind of failure watched at one place."""

    title: str = Field(min_length=1)
    source: str
    event: Filter = {}
    where: Filter = {}
    form: Literal["gap", "per-unit", "auto"] = "gap"
    exposure: Literal["units", "opportunities", "workdays", "workhours", "days"] = "units"
    exposure_name: str | None = None
    opportunities: OpportunityMap | None = None
    production: Production | None = None
    retests: Literal["first-pass", "any", "every"] | None = None
    locate: Literal["time", "unit"] = "time"
    mature_after: Span | None = None
    baseline: BaselineSetting = BaselineSetting(first_events=12)
    watch: tuple[Literal["worse", "better"], ...] = ("worse", "better")
    cluster: Span | ClusterColumn | None = None
    share: float = Field(default=1.0, gt=0, allow_inf_nan=False)
    safety: bool = False
    reaction_plan: str | None = None
    notify: tuple[str, ...] | None = None
    express_per: float = Field(default=1.0, gt=0, allow_inf_nan=False)

    @field_validator("watch")
    @classmethod
    def _some(cls, value: tuple[str, ...]) -> tuple[str, ...]:
        if not value:
            raise ValueError('at least one of "worse" and "better"')
        return value

    @field_validator("cluster", mode="before")
    @classmethod
    def _cluster(cls, value: Any) -> Any:
        return Span.model_validate(value) if isinstance(value, str) else value
