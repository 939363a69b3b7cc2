"""What is to be sent: written with the alert, tried until it arrived or was given up."""

from __future__ import annotations

import json
from dataclasses import dataclass
from datetime import datetime, timedelta
from typing import Any

import sqlalchemy as sa

from watcher.store import schema as s

__all__ = [
    "ChannelState", "Delivered", "OutMessage", "Undelivered", "Waiting", "channel_state", "deliveries", "digest_sent", "due", "enqueue",
    "last_digest", "last_pass", "note_digest", "note_notice", "note_pass", "note_try", "notice_state", "notices_in", "pause_channel", "resume_channel", "undelivered",
]  # fmt: skip

_DONE = ("sent", "refused", "given-up")


@dataclass(frozen=True, slots=True)
class OutMessage:
    """One message for one group on one channel."""

    message_id: str
    kind: str
    alert_id: int | None
    stream: str | None
    recipient: str
    channel: str
    to: tuple[str, ...]
    thread: str | None
    payload: dict[str, Any]


@dataclass(frozen=True, slots=True)
class Waiting:
    """An outbox row that is due; ``accepted`` are addresses that must not get it again."""

    id: int
    message: OutMessage
    tries: int
    created_us: int
    accepted: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Delivered:
    """One try."""

    at_us: int
    channel: str
    recipient: str
    outcome: str
    detail: str


@dataclass(frozen=True, slots=True)
class Undelivered:
    """A message, or some of its addresses, that will never arrive; nobody was told of it yet."""

    about: str
    """Subject under which it is noted as told."""
    message_id: str
    recipient: str
    channel: str
    outcome: str
    detail: str


@dataclass(frozen=True, slots=True)
class ChannelState:
    """Health of a channel."""

    waiting: int = 0
    failed: int = 0
    last_delivery_us: int | None = None
    error: str | None = None
    paused_until_us: int | None = None
    fingerprint: str | None = None


def enqueue(conn: sa.Connection, message: OutMessage, *, at_us: int) -> bool:
    """Put a message out for sending; False when it was there already."""
    t = s.outbox
    same = (
        (t.c.message_id == message.message_id)
        & (t.c.channel == message.channel)
        & (t.c.recipient == message.recipient)
    )
    if conn.execute(sa.select(t.c.id).where(same)).first():
        return False
    conn.execute(
        sa.insert(t).values(
            message_id=message.message_id, kind=message.kind, alert_id=message.alert_id, stream=message.stream,
            recipient=message.recipient, channel=message.channel, to=json.dumps(message.to), thread=message.thread,
            payload=json.dumps(message.payload, ensure_ascii=False), created_us=at_us, next_us=at_us, tries=0,
            state="waiting", accepted="[]",
        )
    )  # fmt: skip
    return True


def due(conn: sa.Connection, now_us: int) -> list[Waiting]:
    """Messages to be tried now, oldest first."""
    t = s.outbox
    rows = conn.execute(
        sa.select(t).where((t.c.state == "waiting") & (t.c.next_us <= now_us)).order_by(t.c.id)
    ).mappings()
    return [
        Waiting(
            r["id"],
            OutMessage(
                r["message_id"], r["kind"], r["alert_id"], r["stream"], r["recipient"], r["channel"], tuple(json.loads(r["to"])),
                r["thread"], json.loads(r["payload"]),
            ),
            r["tries"], r["created_us"], tuple(json.loads(r["accepted"])),
        )
        for r in rows
    ]  # fmt: skip


def note_try(
    conn: sa.Connection, row_id: int, *, at_us: int, outcome: str, detail: str, accepted: tuple[str, ...] = (),
    refused: tuple[str, ...] = (), next_us: int | None = None,
) -> None:  # fmt: skip
    """Note a try: ``sent``, ``refused`` and ``given-up`` end it, everything else waits until ``next_us``."""
    t = s.outbox
    row = conn.execute(sa.select(t.c.accepted, t.c.channel).where(t.c.id == row_id)).one()
    done = outcome in _DONE
    everybody = list(dict.fromkeys([*json.loads(row.accepted), *accepted]))
    conn.execute(
        sa.update(t).where(t.c.id == row_id).values(
            state=outcome if done else "waiting", tries=t.c.tries + 1, accepted=json.dumps(everybody),
            next_us=at_us if next_us is None else next_us, error=None if outcome == "sent" else detail,
        )
    )  # fmt: skip
    conn.execute(
        sa.insert(s.deliveries).values(
            outbox_id=row_id,
            at_us=at_us,
            outcome=outcome,
            detail=detail,
            accepted=json.dumps(accepted),
            refused=json.dumps(refused),
        )
    )
    _channel_row(conn, row.channel)
    values: dict[str, Any] = {"error": None if outcome == "sent" else detail}
    if accepted or outcome == "sent":
        values["last_delivery_us"] = at_us
    conn.execute(sa.update(s.channels).where(s.channels.c.channel == row.channel).values(**values))


def _channel_row(conn: sa.Connection, channel: str) -> None:
    if not conn.execute(sa.select(s.channels.c.channel).where(s.channels.c.channel == channel)).first():
        conn.execute(sa.insert(s.channels).values(channel=channel))


def pause_channel(conn: sa.Connection, channel: str, *, until_us: int, fingerprint: str, error: str) -> None:
    """Leave a channel alone until a moment, or until its settings (``fingerprint``) change."""
    _channel_row(conn, channel)
    values = {"paused_until_us": until_us, "fingerprint": fingerprint, "error": error}
    conn.execute(sa.update(s.channels).where(s.channels.c.channel == channel).values(**values))


def resume_channel(conn: sa.Connection, channel: str) -> None:
    """Let a paused channel be tried again."""
    conn.execute(
        sa.update(s.channels)
        .where(s.channels.c.channel == channel)
        .values(paused_until_us=None, fingerprint=None)
    )


def channel_state(conn: sa.Connection) -> dict[str, ChannelState]:
    """Return the health of every channel that was ever used."""
    t = s.outbox
    counts: dict[tuple[str, str], int] = {}
    for channel, state, count in conn.execute(
        sa.select(t.c.channel, t.c.state, sa.func.count()).group_by(t.c.channel, t.c.state)
    ):
        counts[channel, state] = count
    rows = {r["channel"]: r for r in conn.execute(sa.select(s.channels)).mappings()}
    out = {}
    for name in {c for c, _ in counts} | set(rows):
        r = rows.get(name)
        out[name] = ChannelState(
            counts.get((name, "waiting"), 0), counts.get((name, "refused"), 0) + counts.get((name, "given-up"), 0),
            r["last_delivery_us"] if r else None, r["error"] if r else None, r["paused_until_us"] if r else None,
            r["fingerprint"] if r else None,
        )  # fmt: skip
    return out


def deliveries(conn: sa.Connection, alert_id: int) -> list[Delivered]:
    """Return every try at every message of an alert."""
    t, d = s.outbox, s.deliveries
    rows = conn.execute(
        sa.select(d.c.at_us, t.c.channel, t.c.recipient, d.c.outcome, d.c.detail)
        .join(t, t.c.id == d.c.outbox_id).where(t.c.alert_id == alert_id).order_by(d.c.id)
    )  # fmt: skip
    return [Delivered(*r) for r in rows]


def undelivered(conn: sa.Connection) -> list[Undelivered]:
    """Return what was refused or given up and is not yet noted as told; feed notices themselves are left out."""
    t, d, n = s.outbox, s.deliveries, s.notices
    # one number for a message on its way: told at most once, whatever happens between the try and the notice
    about = sa.literal("message ") + sa.cast(t.c.id, sa.Text)
    rows = conn.execute(
        sa.select(about, t.c.message_id, t.c.recipient, t.c.channel, d.c.outcome, d.c.detail)
        .join(t, t.c.id == d.c.outbox_id)
        .where(t.c.kind != "feed-notice")
        .where(d.c.outcome.in_(("refused", "given-up")) | (d.c.refused != "[]"))
        .where(~sa.exists().where(n.c.subject == about))
        .order_by(d.c.id)
    )
    return list({r[0]: Undelivered(*r) for r in rows}.values())


def digest_sent(conn: sa.Connection, period: str) -> bool:
    """Whether the digest of a period was composed."""
    return conn.execute(sa.select(s.digests.c.period).where(s.digests.c.period == period)).first() is not None


def last_digest(conn: sa.Connection) -> int | None:
    """Return when the last digest was composed."""
    return conn.execute(sa.select(sa.func.max(s.digests.c.at_us))).scalar()


def note_digest(conn: sa.Connection, period: str, at_us: int) -> None:
    """Note that it was."""
    conn.execute(sa.insert(s.digests).values(period=period, at_us=at_us))


def notice_state(conn: sa.Connection, subject: str) -> tuple[str, int] | None:
    """Return the state last told of a subject, and when."""
    row = conn.execute(
        sa.select(s.notices.c.state, s.notices.c.at_us).where(s.notices.c.subject == subject)
    ).first()
    return (row.state, row.at_us) if row else None


def notices_in(conn: sa.Connection, state: str) -> set[str]:
    """Return the subjects whose last told state is this one."""
    t = s.notices
    return set(conn.execute(sa.select(t.c.subject).where(t.c.state == state)).scalars())


_LAST = "last pass"
_LIVE = timedelta(minutes=10)


def note_pass(conn: sa.Connection, now: datetime, real_now: datetime) -> None:
    """Note that a pass was made, and whether its moment was the real one or a stated one."""
    note_notice(
        conn, _LAST, "live" if abs(now - real_now) < _LIVE else "stated", round(now.timestamp() * 1e6)
    )


def last_pass(conn: sa.Connection) -> tuple[int, bool] | None:
    """Return the moment of the last pass, and whether it was a stated one."""
    found = notice_state(conn, _LAST)
    return None if found is None else (found[1], found[0] == "stated")


def note_notice(conn: sa.Connection, subject: str, state: str, at_us: int) -> None:
    """Note what was told."""
    conn.execute(sa.delete(s.notices).where(s.notices.c.subject == subject))
    conn.execute(sa.insert(s.notices).values(subject=subject, state=state, at_us=at_us))
