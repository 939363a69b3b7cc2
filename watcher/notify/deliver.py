"""Delivery: what is due is tried, what failed waits longer each time, what cannot arrive is said to the maintainers."""

from __future__ import annotations

import hashlib
import logging
import random
from collections.abc import Callable
from dataclasses import dataclass, field
from datetime import datetime, timedelta

from watcher.config import Config, EmailChannel, WebhookChannel
from watcher.config.values import Secret, SecretMissingError
from watcher.notify.base import ChannelSender, Message, Outcome
from watcher.notify.mail import MailSender
from watcher.notify.webhook import WebhookSender
from watcher.store import Store
from watcher.store import outbox as box

__all__ = ["DeliveryReport", "deliver_due", "sender_for"]

_LOG = logging.getLogger(__name__)
_WAITS_MIN = (1.0, 2.0, 5.0, 15.0, 30.0)
_HOURLY_MIN = 60.0
_GIVE_UP = timedelta(days=5)
_PAUSE = timedelta(hours=6)
_LATE = timedelta(hours=1)


@dataclass(slots=True)
class DeliveryReport:
    """What a pass delivered; ``notices`` are (subject, sentence) for the maintainers."""

    delivered: int = 0
    waiting: int = 0
    failed: int = 0
    notices: list[tuple[str, str]] = field(default_factory=list)


def sender_for(config: Config, name: str, clock: Callable[[], datetime]) -> ChannelSender | None:
    """Return the sender of a channel; None for a kind that is not there or not yet available."""
    channel = config.channels.get(name)
    if isinstance(channel, EmailChannel):
        return MailSender(channel, plant=config.plant.name, folder=config.folder)
    if isinstance(channel, WebhookChannel):
        return WebhookSender(channel, plant=config.plant.name, folder=config.folder, clock=clock)
    return None


def _settings_mark(config: Config, name: str) -> str:
    """Changes when a channel's settings or secrets do; a one-way hash with the plant's name as salt."""
    channel = config.channels[name]
    parts = [config.plant.name, channel.model_dump_json(exclude={"password", "secret", "token", "url"})]
    for key in ("password", "secret", "token", "url"):
        value = getattr(channel, key, None)
        if isinstance(value, Secret):
            try:
                value = value.reveal()
            except SecretMissingError:
                value = "missing"
        parts.append(str(value))
    salt = hashlib.sha256(config.plant.name.encode()).digest()
    return hashlib.pbkdf2_hmac("sha256", "\x1f".join(parts).encode(), salt, 50_000).hex()[:32]


def deliver_due(
    config: Config,
    store: Store,
    *,
    now: datetime,
    clock: Callable[[], datetime],
    rng: random.Random | None = None,
) -> DeliveryReport:
    """Try everything that is due at ``now`` (plant time); ``clock`` is the real one, for signatures."""
    rng = rng or random.Random()  # noqa: S311 - jitter
    report = DeliveryReport()
    now_us = round(now.timestamp() * 1e6)
    with store.reading() as conn:
        waiting = box.due(conn, now_us)
        states = box.channel_state(conn)
    senders: dict[str, ChannelSender | None] = {}
    closed: set[str] = set()
    for name, state in states.items():
        if state.paused_until_us is None or name not in config.channels:
            continue
        if now_us >= state.paused_until_us or _settings_mark(config, name) != state.fingerprint:
            with store.writing() as conn:
                box.resume_channel(conn, name)
        else:
            closed.add(name)
    try:
        for row in waiting:
            name = row.message.channel
            if name in closed:
                continue
            if name not in senders:
                senders[name] = sender_for(config, name, clock)
            outcome = _try(senders[name], row, now)
            _note(config, store, row, outcome, now=now, rng=rng, report=report)
            if outcome.kind == "paused":
                closed.add(name)
    finally:
        for sender in senders.values():
            if sender is not None:
                sender.close()
    with store.reading() as conn:
        report.waiting = sum(s.waiting for s in box.channel_state(conn).values())
    return report


def _try(sender: ChannelSender | None, row: box.Waiting, now: datetime) -> Outcome:
    if sender is None:
        return Outcome(
            "refused", f'Channel "{row.message.channel}" is not configured, or its kind is not yet available.'
        )
    message = Message.from_payload(row.message.payload)
    age = now - message.created
    if age >= _LATE:
        hours = age.total_seconds() / 3600
        how = f"{hours:.0f} hours" if hours < 48 else f"{hours / 24:.0f} days"
        message = message.with_age(f"Delivered late: this was written {how} ago.")
    to = tuple(a for a in row.message.to if a not in row.accepted)
    try:
        return sender.send(message, to, shown_to=row.message.to)
    except Exception as error:  # noqa: BLE001 - the one boundary of a channel: nothing may stop the others
        _LOG.exception("Channel %s failed on %s", row.message.channel, row.message.message_id)
        return Outcome("later", f"unexpected {type(error).__name__}")


def _note(
    config: Config,
    store: Store,
    row: box.Waiting,
    outcome: Outcome,
    *,
    now: datetime,
    rng: random.Random,
    report: DeliveryReport,
) -> None:
    now_us = round(now.timestamp() * 1e6)
    name, ident = row.message.channel, row.message.message_id
    kind: str = outcome.kind
    next_us: int | None = None
    if kind in {"later", "partly"}:
        if now_us - row.created_us >= _GIVE_UP / timedelta(microseconds=1):
            kind = "given-up"
        else:
            minutes = _WAITS_MIN[row.tries] if row.tries < len(_WAITS_MIN) else _HOURLY_MIN
            seconds = max(minutes * 60 * rng.uniform(0.8, 1.2), outcome.retry_after or 0.0)
            next_us = now_us + int(seconds * 1e6)
    elif kind == "paused":
        until = now_us + int(_PAUSE.total_seconds() * 1e6)
        next_us = now_us
        with store.writing() as conn:
            box.pause_channel(
                conn, name, until_us=until, fingerprint=_settings_mark(config, name), error=outcome.detail
            )
        report.notices.append(
            (f"channel {name}", f'Channel "{name}" is paused for six hours: {outcome.detail}')
        )
    with store.writing() as conn:
        box.note_try(
            conn, row.id, at_us=now_us, outcome=kind, detail=outcome.detail, accepted=outcome.accepted,
            refused=outcome.refused, next_us=next_us,
        )  # fmt: skip
    if kind == "sent":
        report.delivered += 1
        if outcome.refused:
            report.notices.append(
                (
                    f"message {ident} {name}",
                    f"Message {ident} was not accepted for everybody: {outcome.detail}",
                )
            )
    elif kind in {"refused", "given-up"}:
        report.failed += 1
        why = "was given up after five days" if kind == "given-up" else "was refused for good"
        report.notices.append(
            (f"message {ident} {name}", f'Message {ident} on channel "{name}" {why}: {outcome.detail}')
        )
    _LOG.info("%s to %s on %s: %s (%s)", ident, row.message.recipient, name, kind, outcome.detail)
