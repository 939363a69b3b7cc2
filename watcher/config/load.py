"""Reading ``plant.toml``: every problem in one listing, each on one line."""

from __future__ import annotations

import hashlib
import json
import tomllib
from collections.abc import Iterator, Mapping
from difflib import get_close_matches
from functools import cached_property
from pathlib import Path
from typing import Any
from zoneinfo import ZoneInfo

from pydantic import BaseModel, Field, ValidationError

from connectors.base import ColumnMap, SourceSettings
from watcher.config import tables as t
from watcher.config.values import Strict

__all__ = ["Config", "ConfigError", "load_config"]

_SECRET_KEYS = {"password", "token", "secret", "url"}


class ConfigError(Exception):
    """The configuration cannot be used; ``problems`` has one line for each fault."""

    def __init__(self, problems: list[str]) -> None:
        super().__init__("\n".join(problems))
        self.problems = problems


class Config(Strict):
    """A checked configuration."""

    plant: t.Plant
    store: t.Store = t.Store()
    calendar: t.Calendar = t.Calendar()
    schedule: t.Schedule = t.Schedule()
    alerting: t.Alerting = t.Alerting()
    channels: dict[str, t.Channel] = {}
    recipients: dict[str, t.Recipient] = {}
    sources: dict[str, t.Source] = {}
    streams: dict[str, t.Stream] = {}
    path: Path = Field(default=Path("plant.toml"), exclude=True)

    @property
    def folder(self) -> Path:
        """Folder of the file; relative paths start here."""
        return self.path.parent

    @cached_property
    def zone(self) -> ZoneInfo:
        """Plant time."""
        return ZoneInfo(self.plant.timezone)

    @property
    def store_url(self) -> str:
        """Store address with a relative SQLite path resolved."""
        prefix = "sqlite:///"
        if self.store.url.startswith(prefix):
            return prefix + str(self.folder / self.store.url.removeprefix(prefix))
        return self.store.url

    def stream_share(self, name: str) -> float:
        """Promised false alerts a year of one stream."""
        return self.alerting.false_alerts_per_year * self.streams[name].share / self._shares

    def recipients_of(self, stream: str) -> list[str]:
        """Groups that hear of a stream's alerts."""
        notify = self.streams[stream].notify
        return list(self.recipients) if notify is None else list(notify)

    def source_settings(self, name: str) -> SourceSettings:
        """What the connector needs to know of a source."""
        s = self.sources[name]
        assert s.columns is not None
        columns = s.columns
        stored: dict[str, None] = dict.fromkeys([*columns.attributes, *columns.private, *s.key, *s.void])
        for stream in self.streams.values():
            if stream.source == name:
                stored |= dict.fromkeys([*stream.event, *stream.where])
                if isinstance(stream.cluster, t.ClusterColumn):
                    stored[stream.cluster.column] = None
            made_by = stream.source if stream.production is None else stream.production.source
            if stream.production is not None and made_by == name:
                stored |= dict.fromkeys(stream.production.where)
            if stream.opportunities is not None and made_by == name:
                stored[stream.opportunities.column] = None
        return SourceSettings(
            name=name, kind=s.kind, base=self.folder, zone=ZoneInfo(s.timezone) if s.timezone else self.zone,
            columns=ColumnMap(
                columns.time, columns.unit, columns.quantity, columns.defects, columns.opportunities, columns.attributes,
                columns.private,
            ),
            folder=self.folder / s.folder if s.folder else None, pattern=s.pattern, key=s.key, void=dict(s.void),
            stored=tuple(stored), encoding=s.encoding, delimiter=s.delimiter, decimal=s.decimal, thousands=s.thousands,
            dates=s.dates, settle_seconds=s.settle_seconds, failing_unit=s.failing_unit,
        )  # fmt: skip

    def reading_fingerprint(self, name: str) -> str:
        """Changes exactly when a source's rows would be understood differently."""
        s = self.source_settings(name)
        parts = [
            s.columns, str(s.zone), s.key, sorted(s.void.items()), sorted(s.stored), s.encoding, s.delimiter, s.decimal,
            s.thousands, s.dates,
        ]  # fmt: skip
        return hashlib.sha256(repr(parts).encode()).hexdigest()[:32]

    @property
    def later(self) -> list[str]:
        """Lines about keys that are valid but whose feature this version does not have yet."""
        return list(_later(self))

    def later_of(self, name: str) -> list[str]:
        """Such lines of one stream."""
        return list(_later_of_stream(self, name))

    @cached_property
    def _shares(self) -> float:
        return sum(s.share for s in self.streams.values())


def _line(where: str, what: str) -> str:
    return f"{where}: {what} is not yet available in this version."


def _later(config: Config) -> Iterator[str]:
    for name, source in config.sources.items():
        if source.kind != "csv-drop":
            yield _line(f"[sources.{name}] kind", f'"{source.kind}"')
        if source.archive is not None:
            yield _line(f"[sources.{name}] archive", "moving files after reading")
    for name, channel in config.channels.items():
        if channel.kind == "matrix":
            yield _line(f"[channels.{name}] kind", '"matrix"')
        if channel.kind == "webhook" and channel.body == "template":
            yield _line(f"[channels.{name}] body", '"template"')
        if channel.kind == "email" and channel.replies is not None:
            yield _line(f"[channels.{name}] replies", "answering by mail")
    for name in config.streams:
        yield from _later_of_stream(config, name)


def _later_of_stream(config: Config, name: str) -> Iterator[str]:
    stream = config.streams[name]
    if stream.form == "auto":
        yield _line(f"[streams.{name}] form", '"auto"')
    made_by = config.sources.get(stream.production.source) if stream.production is not None else None
    if made_by is not None and made_by.kind != "csv-drop":
        yield _line(f"[streams.{name}] production", "a source of this kind")


def load_config(path: Path) -> Config:
    """Read and check a configuration; raises ``ConfigError`` with every problem found."""
    path = path.absolute()
    name = path.name
    try:
        text = path.read_bytes().decode("utf-8")
    except OSError as error:
        raise ConfigError(
            [f"{path}: the configuration cannot be read: {error.strerror or error}."]
        ) from error
    except UnicodeDecodeError as error:
        raise ConfigError([f"{name}: the file is not UTF-8 text (byte {error.start})."]) from error
    try:
        raw = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise ConfigError([f"{name}: this is not valid TOML: {error}."]) from error
    problems = [f"{name}: {p}" for p in _control_characters(raw)]
    config: Config | None = None
    try:
        config = Config.model_validate({**raw, "path": path} if "path" not in raw else raw)
    except ValidationError as error:
        problems += [f"{name}: {_sentence(e, raw)}" for e in error.errors(include_url=False)]
    problems += [f"{name}: {p}" for p in _references(raw)]
    if config is not None:
        problems += [f"{name}: {p}" for p in _consistency(config)]
    if problems or config is None:
        raise ConfigError(list(dict.fromkeys(problems)))
    return config


def _control_characters(raw: Any, where: str = "") -> Iterator[str]:
    if isinstance(raw, Mapping):
        for key, value in raw.items():
            yield from _control_characters(value, f"{where}.{key}" if where else str(key))
    elif isinstance(raw, list):
        for value in raw:
            yield from _control_characters(value, where)
    elif isinstance(raw, str) and any(ord(c) < 32 or 0x7F <= ord(c) < 0xA0 for c in raw):
        if where.endswith((".delimiter", ".query", ".reaction_plan")) and not set(raw) - set("\t\n") & set(
            map(chr, range(32))
        ):
            return
        table, _, key = where.rpartition(".")
        yield f"[{table}] {key}: the text holds a control character; plain text was expected."


def _place(location: tuple[int | str, ...]) -> tuple[str, str, list[int | str]]:
    """Table and key of an error; union branches that pydantic adds are left out."""
    names = {"email", "matrix", "webhook", "Secret", "str", "Span", "ClusterColumn"}
    parts: list[int | str] = []
    for i, part in enumerate(location):
        inserted = isinstance(part, str) and (part in names or part.startswith("function-"))
        if inserted and i >= 2 and not (location[0] in {"streams", "sources"} and i == 2):
            continue
        parts.append(part)
    depth = 2 if parts and parts[0] in {"channels", "recipients", "sources", "streams"} else 1
    table = ".".join(str(p) for p in parts[:depth])
    key = ".".join(str(p) for p in parts[depth:])
    return table, key, parts


def _found(raw: Any, parts: list[int | str]) -> Any:
    for part in parts:
        try:
            raw = raw[part]
        except (KeyError, IndexError, TypeError):
            return None
    return raw


def _show(value: Any, parts: list[int | str]) -> str:
    if any(str(p) in _SECRET_KEYS for p in parts):
        return "a text" if isinstance(value, str) else f"a {type(value).__name__}"
    text = json.dumps(value, ensure_ascii=False, default=str)
    return text if len(text) <= 80 else text[:79] + "…"


def _sentence(error: Any, raw: Any) -> str:
    table, key, parts = _place(error["loc"])
    where = f"[{table}] {key}" if key else f"[{table}]"
    kind = error["type"]
    if kind == "extra_forbidden":
        last = str(parts[-1])
        known = _keys_at(error["loc"])
        close = get_close_matches(last, known, 1, 0.6)
        hint = f' did you mean "{close[0]}"?' if close else f" accepted are {', '.join(known)}."
        holder = f"[{table}]" if key else "the file"
        return f'{holder}: unknown key "{last}";{hint}'
    if kind == "missing":
        return f"{where}: this key is missing."
    if kind in {"union_tag_invalid", "union_tag_not_found"}:
        value = _found(raw, [*parts, "kind"])
        return (
            f'[{table}] kind: found {_show(value, ["kind"])}; accepted are "email", "matrix" and "webhook".'
        )
    value = _found(raw, parts)
    message = str(error["msg"]).removeprefix("Value error, ")
    if kind == "value_error":
        if isinstance(value, Mapping) and key != "baseline":
            return f"{where}: {message}."
        return f"{where}: found {_show(value, parts)}; accepted is {message}."
    message = message.removeprefix("Input should be ")
    return f"{where}: found {_show(value, parts)}; accepted is {message}."


def _keys_at(location: tuple[int | str, ...]) -> list[str]:
    """Return the keys that a table knows."""
    models: dict[str, type[BaseModel]] = {
        "plant": t.Plant, "store": t.Store, "calendar": t.Calendar, "schedule": t.Schedule, "alerting": t.Alerting,
        "recipients": t.Recipient, "sources": t.Source, "streams": t.Stream,
    }  # fmt: skip
    top = str(location[0])
    if len(location) == 1:
        return [n for n in Config.model_fields if n != "path"]
    if top == "channels":
        kinds: dict[str, type[BaseModel]] = {"email": t.EmailChannel, "matrix": t.MatrixChannel}
        return list(kinds.get(str(location[2]), t.WebhookChannel).model_fields)
    inner: dict[str, type[BaseModel]] = {
        "columns": t.SourceColumns, "baseline": t.BaselineSetting, "send": t.Send, "production": t.Production,
        "replies": t.Replies,
    }  # fmt: skip
    for part in location[2:-1]:
        if str(part) in inner:
            return [f.alias or n for n, f in inner[str(part)].model_fields.items()]
    return list(models[top].model_fields) if top in models else []


def _references(raw: Mapping[str, Any]) -> Iterator[str]:
    """Names that must exist elsewhere in the file."""

    def near(name: str, known: Mapping[str, Any]) -> str:
        close = get_close_matches(name, list(known), 1, 0.6)
        return f'did you mean "{close[0]}"?' if close else f"there are {', '.join(known) or 'none'}."

    def table(name: str) -> Mapping[str, Any]:
        value = raw.get(name)
        return value if isinstance(value, Mapping) else {}

    sources, recipients, channels = table("sources"), table("recipients"), table("channels")
    for name, stream in table("streams").items():
        if not isinstance(stream, Mapping):
            continue
        source = stream.get("source")
        if isinstance(source, str) and source not in sources:
            yield f'[streams.{name}] source: found "{source}"; {near(source, sources)}'
        production = stream.get("production")
        other = production.get("source") if isinstance(production, Mapping) else None
        if isinstance(other, str) and other not in sources:
            yield f'[streams.{name}] production.source: found "{other}"; {near(other, sources)}'
        notify = stream.get("notify")
        for group in notify if isinstance(notify, list) else []:
            if isinstance(group, str) and group not in recipients:
                yield f'[streams.{name}] notify: found "{group}"; {near(group, recipients)}'
    for name, recipient in table("recipients").items():
        ways = recipient.get("send") if isinstance(recipient, Mapping) else None
        for way in ways if isinstance(ways, list) else []:
            channel = way.get("channel") if isinstance(way, Mapping) else None
            if not isinstance(channel, str):
                continue
            if channel not in channels:
                yield f'[recipients.{name}] send: found channel "{channel}"; {near(channel, channels)}'
            elif (
                isinstance(channels[channel], Mapping)
                and channels[channel].get("kind") == "email"
                and not way.get("to")
            ):
                yield f'[recipients.{name}] send: channel "{channel}" is email and needs to = ["…@…"].'


def _series_keys(config: Config, name: str, stream: t.Stream) -> Iterator[str]:
    """Keys that make a series of more than a stream's own records."""
    counted = stream.exposure in {"units", "opportunities"}
    made_by = stream.source if stream.production is None else stream.production.source
    made = config.sources.get(made_by)
    unit = made.columns.unit if made is not None and made.columns is not None else None
    own = config.sources[stream.source].columns
    declared = made.columns.opportunities if made is not None and made.columns is not None else None
    if stream.exposure == "opportunities" and declared is None and stream.opportunities is None:
        yield (
            f"[streams.{name}] exposure: opportunities needs columns.opportunities in [sources.{made_by}]"
            " or a map in the stream."
        )
    if stream.exposure != "opportunities" and stream.opportunities is not None:
        yield f'[streams.{name}] opportunities: found with exposure = "{stream.exposure}"; accepted with exposure = "opportunities".'
    if stream.cluster is not None and stream.form == "per-unit":
        yield f'[streams.{name}] cluster: merging makes single events, which form = "per-unit" does not have; accepted with form = "gap".'
    if stream.production is not None and not counted:
        yield f'[streams.{name}] production: found with exposure = "{stream.exposure}"; it gives units or opportunities, so accepted with these.'
    if stream.production is not None and made_by == stream.source:
        yield f'[streams.{name}] production: found the stream\'s own source "{made_by}"; name another, or leave the key out.'
    if stream.locate == "unit":
        if stream.mature_after is None:
            yield f'[streams.{name}] locate: "unit" needs mature_after, or young units would look better than they are.'
        if (
            (unit is None and made is not None and made.kind != "mes-export")
            or own is None
            or own.unit is None
        ):
            yield f'[streams.{name}] locate: "unit" needs columns.unit in [sources.{made_by}] and in [sources.{stream.source}].'
        if not counted:
            yield f'[streams.{name}] locate: "unit" is accepted with exposure "units" or "opportunities"; found "{stream.exposure}".'


def _consistency(config: Config) -> Iterator[str]:
    """What only shows when tables are seen together."""
    if not config.streams:
        yield "there is no [streams.…] table; nothing would be watched."
    for name, stream in config.streams.items():
        source = config.sources.get(stream.source)
        columns = source.columns if source else None
        if source is None or columns is None:
            continue
        counted = stream.exposure in {"units", "opportunities"}
        if counted and not stream.event and columns.defects is None and stream.production is None:
            yield (
                f"[streams.{name}] event: this key is missing; with exposure in {stream.exposure} say which records are"
                ' failures, event = { result = ["FAIL"] }, or name a defects column in the source.'
            )
        if stream.form == "per-unit" and columns.defects is None:
            yield f"[streams.{name}] form: per-unit needs columns.defects in [sources.{stream.source}]."
        if stream.form == "per-unit" and not counted:
            yield f'[streams.{name}] exposure: found "{stream.exposure}"; per-unit accepts "units" and "opportunities".'
        yield from _series_keys(config, name, stream)
        if stream.retests in {"first-pass", "any"} and columns.unit is None:
            yield f'[streams.{name}] retests: "{stream.retests}" needs columns.unit in [sources.{stream.source}].'
