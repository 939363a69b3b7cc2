"""The digest of a period: gathered, composed once, put out once."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import UTC, datetime, timedelta
from typing import Any

from watcher import showing
from watcher.building import SeriesError, build, is_failure, produced_for
from watcher.config import Config
from watcher.cycle import Frames
from watcher.feeds import alive_us, is_stale
from watcher.notify.base import Message
from watcher.notify.digest import digest_message
from watcher.notify.views import DigestView
from watcher.pictures import tile
from watcher.sending import enqueue_for
from watcher.showing import shown_key
from watcher.store import Store
from watcher.store.alerts import alerts
from watcher.store.outbox import channel_state, digest_sent, last_digest, note_digest
from watcher.store.records import revised_between, source_state
from watcher.store.standings import all_standings
from watcher.streams import iso
from watcher.workcalendar import WorkCalendar

__all__ = ["channel_rows", "digest_view", "last_due", "period_of", "send_digest", "source_rows"]

_LOOK_BACK = tuple(timedelta(hours=h) for h in (2, 26, 8 * 24, 40 * 24, 400 * 24))
_MOST_TAKEN_BACK = 100


def last_due(config: Config, now: datetime) -> datetime | None:
    """Return the latest moment at or before ``now`` at which a digest was due."""
    from apscheduler.triggers.cron import CronTrigger

    trigger = CronTrigger.from_crontab(config.schedule.digest, timezone=config.zone)
    until = now.astimezone(UTC)
    for back in _LOOK_BACK:  # from near to far, so that neither a daily nor a yearly one takes long to find
        found: datetime | None = None
        at = until - back
        while at <= until:
            local: datetime | None = trigger.get_next_fire_time(None, at.astimezone(config.zone))
            if local is None:
                break
            # counted in UTC: local times of one zone compare by the wall, and go back an hour in autumn
            following = local.astimezone(UTC)
            if at <= following <= until:
                found = following
            at = max(at, following) + timedelta(seconds=1)
        if found is not None:
            return found.astimezone(config.zone)
    return None


def period_of(config: Config, now: datetime) -> str:
    """Name the digest that is due at ``now``: by the clock on the wall, which shows an hour twice in autumn."""
    return f"{(last_due(config, now) or now).astimezone(config.zone):%Y-%m-%dT%H:%M}"


def source_rows(config: Config, store: Store, now: datetime) -> list[dict[str, Any]]:
    """Return ``sources`` of ``status --json``."""
    calendar = WorkCalendar.of(config)
    with store.reading() as conn:
        states = source_state(conn, round(now.timestamp() * 1e6))
    out = []
    for name in config.sources:
        s = states.get(name)
        out.append(
            {
                "source": name, "last_contact": iso(s.last_contact_us, config.zone) if s else None,
                "last_record": iso(s.last_record_us, config.zone) if s else None, "records": s.records if s else 0,
                "set_aside": s.set_aside if s else 0, "stale": is_stale(config, name, s, calendar, now),
                "error": s.error if s else None,
            }
        )  # fmt: skip
    return out


def channel_rows(config: Config, store: Store) -> list[dict[str, Any]]:
    """Return ``channels`` of ``status --json``."""
    with store.reading() as conn:
        states = channel_state(conn)
    out = []
    for name in config.channels:
        s = states.get(name)
        out.append(
            {
                "channel": name, "waiting": s.waiting if s else 0, "failed": s.failed if s else 0,
                "last_delivery": iso(s.last_delivery_us, config.zone) if s else None, "error": s.error if s else None,
                "paused_until": iso(s.paused_until_us, config.zone) if s else None,
            }
        )  # fmt: skip
    return out


def digest_view(config: Config, store: Store, *, now: datetime) -> DigestView:
    """Gather everything that a digest tells."""
    now_us = round(now.timestamp() * 1e6)
    calendar = WorkCalendar.of(config)
    frames = Frames(config, store)
    with store.reading() as conn:
        standings, states, still_open = (
            all_standings(conn),
            source_state(conn, now_us),
            alerts(conn, open_only=True),
        )
        since_us = last_digest(conn)
    start = now - timedelta(days=7)
    if since_us is not None:
        before = datetime.fromtimestamp(since_us / 1e6, now.tzinfo)
        start = before if before < now - timedelta(days=1) else start
    views, unseen = {}, []
    for name, stream in config.streams.items():
        standing = standings.get(name)
        if standing is None:
            unseen.append(f"{stream.title}: not assessed yet.")
            continue
        alive = alive_us(config, stream.source, states.get(stream.source), now_us)
        produced = produced_for(
            config,
            name,
            frames.of,
            lambda source: is_stale(config, source, states.get(source), calendar, now),
        )
        try:
            built = build(
                config,
                name,
                frames.of(stream.source),
                calendar,
                alive_us=alive,
                now_us=now_us,
                produced=produced,
            )
        except SeriesError as error:
            unseen.append(f"{stream.title}: {error}")
            continue
        views[name] = showing.stream_view(
            config, name, standing.data, showing.series_view(built.steps, standing.data)
        )
        if standing.standing == "silent":
            unseen.append(f"{stream.title}: its source {stream.source} is silent.")
    shown = []
    for alert in sorted(still_open, key=lambda a: (a.state != "raised", a.id)):
        if alert.stream in views:
            shown.append(showing.alert_view(views[alert.stream], alert))
    taken_back = _taken_back(config, store, round(start.timestamp() * 1e6), now_us)
    return DigestView(
        start,
        now,
        list(views.values()),
        shown,
        source_rows(config, store, now),
        channel_rows(config, store),
        unseen,
        taken_back,
    )


def _taken_back(config: Config, store: Store, since_us: int, until_us: int) -> list[str]:
    """Say which failures a correction took back: none may vanish unseen."""
    lines: dict[tuple[str, int], str] = {}
    with store.reading() as conn:
        for source in config.sources:
            streams = {n: s for n, s in config.streams.items() if s.source == source}
            for old, now in revised_between(conn, source, since_us, until_us):
                for name, stream in streams.items():
                    if not is_failure(config, stream, old) or is_failure(config, stream, now):
                        continue
                    how = "voided" if now.voided else "corrected and no longer counts"
                    key = " ".join(shown_key(config, now).values())
                    lines[name, now.id] = (
                        f"{stream.title}: the failure {key} was {how} ({now.file}, line {now.line})."
                    )
    out = list(lines.values())
    if len(out) > _MOST_TAKEN_BACK:
        more = len(out) - _MOST_TAKEN_BACK
        out = [*out[:_MOST_TAKEN_BACK], f"… and {more} more; gapbell records --history shows them."]
    return out


def send_digest(config: Config, store: Store, *, now: datetime) -> bool:
    """Put the digest of the latest due period out, once; False when it was there already."""
    period = period_of(config, now)
    with store.reading() as conn:
        if digest_sent(conn, period):
            return False
    view = digest_view(config, store, now=now)
    tiles = {f"tile-{i}": tile(s) for i, s in enumerate(view.streams) if s.series is not None}
    plant = showing.plant_view(config)

    def make(recipient: str) -> Message:
        return digest_message(
            plant, view, recipient=recipient, message_id=f"digest-{period}", now=now, tiles=tiles
        )

    with store.writing() as conn:
        if digest_sent(conn, period):
            return False
        enqueue_for(conn, config, _groups(config), make, now=now)
        note_digest(conn, period, round(now.timestamp() * 1e6))
    return True


def _groups(config: Config) -> Sequence[str]:
    return [n for n, r in config.recipients.items() if r.digest]
