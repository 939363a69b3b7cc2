"""Putting messages into the outbox, for every recipient and way, in the caller's transaction."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from datetime import datetime

import sqlalchemy as sa

from watcher.config import Config
from watcher.notify.base import Message
from watcher.notify.compose import alert_message, feed_notice
from watcher.notify.views import AlertView
from watcher.showing import plant_view
from watcher.store.alerts import Alert
from watcher.store.outbox import OutMessage, enqueue, note_notice, notice_state

__all__ = ["enqueue_alert", "enqueue_for", "enqueue_notice"]

_DAY_US = 86_400_000_000


def _us(moment: datetime) -> int:
    return round(moment.timestamp() * 1e6)


def enqueue_for(
    conn: sa.Connection, config: Config, recipients: Iterable[str], make: Callable[[str], Message], *, now: datetime,
    alert: Alert | None = None, stream: str | None = None,
) -> int:  # fmt: skip
    """Put one message out for each recipient on each of its ways; returns how many are new."""
    new = 0
    for name in recipients:
        message = make(name)
        payload = message.to_payload()
        for way in config.recipients[name].send:
            new += enqueue(
                conn,
                OutMessage(
                    message.message_id, message.kind, alert.id if alert else None, stream, name, way.channel, way.to,
                    message.thread, payload,
                ),
                at_us=_us(now),
            )  # fmt: skip
    return new


def enqueue_alert(
    conn: sa.Connection, config: Config, alert: Alert, view: AlertView, *, kind: str, suffix: str, now: datetime,
    pictures: Sequence[tuple[str, bytes, str]] = (),
) -> int:  # fmt: skip
    """Put out a message about an alert; ``suffix`` makes its id: "a-000012.raised"."""
    stem = alert.label.lower()

    def make(recipient: str) -> Message:
        return alert_message(
            plant_view(config), view, kind=kind, recipient=recipient, message_id=f"{stem}.{suffix}", thread=f"{stem}.raised",
            now=now, pictures=pictures,
        )  # fmt: skip

    return enqueue_for(
        conn, config, config.recipients_of(alert.stream), make, now=now, alert=alert, stream=alert.stream
    )


def enqueue_notice(
    conn: sa.Connection,
    config: Config,
    *,
    about: str,
    state: str,
    subject: str,
    lines: Sequence[str],
    now: datetime,
) -> bool:
    """Tell the maintainers once per change of state, and remind them at most once a day while it lasts."""
    before = notice_state(conn, about)
    if before is not None and before[0] == state and (state == "well" or _us(now) - before[1] < _DAY_US):
        return False
    if before is None and state == "well":
        return False
    stamp = now.strftime("%Y%m%dT%H%M")

    def make(recipient: str) -> Message:
        return feed_notice(
            plant_view(config), subject=subject, lines=lines, recipient=recipient,
            message_id=f"notice-{about.replace(' ', '-')}-{state}-{stamp}", now=now,
        )  # fmt: skip

    groups = [n for n, r in config.recipients.items() if r.feed_notices]
    enqueue_for(conn, config, groups, make, now=now)
    note_notice(conn, about, state, _us(now))
    return True
