"""What earlier tries at a message told, beyond what its outbox row keeps."""

from __future__ import annotations

import json

import sqlalchemy as sa

from watcher.store import schema as s

__all__ = ["last_pause_us", "refused_for_good"]


def refused_for_good(conn: sa.Connection, row_id: int) -> set[str]:
    """Return the addresses of a message that an earlier try found to be refused for good."""
    d = s.deliveries
    rows = conn.execute(sa.select(d.c.refused).where((d.c.outbox_id == row_id) & (d.c.refused != "[]")))
    return {address for (text,) in rows for address in json.loads(text)}


def last_pause_us(conn: sa.Connection, channel: str) -> int | None:
    """Return the last moment at which a channel was found wrongly set up; waiting counts from there."""
    d, t = s.deliveries, s.outbox
    found: int | None = conn.execute(
        sa.select(sa.func.max(d.c.at_us))
        .join(t, t.c.id == d.c.outbox_id)
        .where((t.c.channel == channel) & (d.c.outcome == "paused"))
    ).scalar()
    return found
