"""Feeds: up to when each is proven alive, and which have fallen silent."""

from __future__ import annotations

from datetime import UTC, datetime

from watcher.config import Config
from watcher.sending import enqueue_notice
from watcher.store import Store
from watcher.store.records import SourceState
from watcher.workcalendar import WorkCalendar

__all__ = ["alive_us", "is_stale", "last_sign_us", "tell_of_feeds"]


def alive_us(config: Config, source: str, state: SourceState | None, now_us: int) -> int | None:
    """Moment up to which a source is proven alive; None when it never spoke."""
    if state is None:
        return None
    proof = config.sources[source].proof_of_life
    extra = {"file": state.last_file_us, "reachable": state.last_contact_us if state.error is None else None}
    signs = [state.last_record_us, extra[proof] if proof else None]
    known = [min(s, now_us) for s in signs if s is not None]
    return max(known) if known else None


def last_sign_us(config: Config, source: str, state: SourceState | None, now_us: int) -> int | None:
    """Return when a source last proved to be alive: by a record, or by its agreed proof of life.

    A file that brings nothing new proves nothing unless files are the agreed proof: a frozen export is
    delivered night after night too.
    """
    return alive_us(config, source, state, now_us)


def is_stale(
    config: Config, source: str, state: SourceState | None, calendar: WorkCalendar, now: datetime
) -> bool:
    """Whether a source has been silent for longer than it may."""
    span = config.sources[source].stale_after
    last = last_sign_us(config, source, state, round(now.timestamp() * 1e6))
    if span is None or last is None:
        return False
    return calendar.passed(datetime.fromtimestamp(last / 1e6, UTC), now, span)


def tell_of_feeds(
    config: Config, store: Store, states: dict[str, SourceState], calendar: WorkCalendar, now: datetime
) -> None:  # fmt: skip
    """Put out feed notices for sources that fell silent or failed, and for those that are back."""
    now_us = round(now.timestamp() * 1e6)
    for name, source in config.sources.items():
        state = states.get(name)
        last = last_sign_us(config, name, state, now_us)
        when = (
            "ever"
            if last is None
            else f"since {datetime.fromtimestamp(last / 1e6, UTC).astimezone(config.zone):%d %B %Y, %H:%M}"
        )
        if state is not None and state.error is not None:
            kind, subject = "failed", f"Source {name} cannot be read"
            lines = [state.error, f"It was last heard from {when} ({config.plant.timezone})."]
        elif is_stale(config, name, state, calendar, now):
            kind, subject = "silent", f"Source {name} is silent"
            streams = [s.title for s in config.streams.values() if s.source == name]
            lines = [
                f"Nothing has come from source {name} {when} ({config.plant.timezone}); at most {source.stale_after} were expected.",
                "Until it is back, its streams stand as silent and the quiet counts for nothing: "
                + "; ".join(streams)
                + ".",
            ]
            fed = [s.title for s in config.streams.values() if s.production and s.production.source == name]
            if not streams:
                lines.pop()
            if fed:
                lines.append(
                    "It gives the exposure of streams whose later events are placed at the last known production: "
                    + "; ".join(fed)
                    + "."
                )
        else:
            kind, subject = "well", f"Source {name} is back"
            lines = [f"Records come from source {name} again; everything delivered in between is taken in."]
        with store.writing() as conn:
            enqueue_notice(
                conn, config, about=f"source {name}", state=kind, subject=subject, lines=lines, now=now
            )
