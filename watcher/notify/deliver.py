"""Delivery: what is due is tried, what failed waits longer each time, what cannot arrive is given up and counted."""

from __future__ import annotations

import hashlib
import hmac
import logging
import random
import secrets
import traceback
from collections.abc import Callable
from dataclasses import dataclass, field
from datetime import datetime, timedelta
from zoneinfo import ZoneInfo

from watcher.config import Config, EmailChannel, WebhookChannel
from watcher.config.values import Secret, SecretMissingError
from watcher.notify.base import ChannelSender, Message, Outcome, PayloadError
from watcher.notify.mail import MailSender
from watcher.notify.trust import TrustError, trusted_file
from watcher.notify.webhook import WebhookSender
from watcher.store import Store
from watcher.store import outbox as box
from watcher.store.tries import last_pause_us, refused_for_good

__all__ = ["DeliveryReport", "deliver_due", "sender_for", "settings_mark"]

_LOG = logging.getLogger(__name__)
Clock = Callable[[], datetime]

# RFC 5321 4.5.4.1 leaves waits and end to the client; an alert is tried sooner than mail between servers
_WAITS_MIN = (1.0, 2.0, 5.0, 15.0, 30.0)
_HOURLY_MIN = 60.0
_JITTER = 0.2
_GIVE_UP_US = 5 * 86_400_000_000
_PAUSE = timedelta(hours=6)
_LATE = timedelta(hours=1)
_FAILURES_IN_A_ROW = 3
"""After so many a channel rests for the pass: a server that answers nothing must not hold up the others."""
_HASH_ROUNDS = 100_000


@dataclass(slots=True)
class DeliveryReport:
    """What a pass delivered; ``failed`` counts messages refused for good or given up in it."""

    delivered: int = 0
    waiting: int = 0
    failed: int = 0


@dataclass(slots=True)
class _Line:
    """A channel during one pass."""

    sender: ChannelSender | None
    reopening: bool = False
    failures: int = 0
    rest: str | None = None
    """Why nothing more is tried in this pass."""
    rest_s: float | None = None
    """How long the receiver asked to be left alone."""
    asleep: bool = field(default=False)
    """Paused: what waits is left as it is."""


def sender_for(config: Config, name: str, clock: Clock) -> ChannelSender | None:
    """Return the sender of a channel; None for a kind that is not there or not yet available."""
    channel = config.channels.get(name)
    if isinstance(channel, EmailChannel):
        return MailSender(channel, plant=config.plant.name, folder=config.folder)
    if isinstance(channel, WebhookChannel):
        return WebhookSender(channel, plant=config.plant.name, folder=config.folder, clock=clock)
    return None


def settings_mark(config: Config, name: str, salt: str | None = None) -> str:
    """Return a text that changes when a channel's settings, secrets or certificates do.

    It is kept in the store, so that it must not give the secrets away: salted, and slow to try guesses on.
    """
    channel = config.channels[name]
    salt = salt or secrets.token_hex(16)
    parts = [channel.model_dump_json(exclude={"password", "secret", "token", "url"})]
    for key in ("password", "secret", "token", "url"):
        value = getattr(channel, key, None)
        if isinstance(value, Secret):
            try:
                value = value.reveal()
            except (SecretMissingError, UnicodeError):
                value = "missing"
        parts.append(str(value))
    try:
        trusted = trusted_file(channel.ca_file, config.folder, "SSL_CERT_FILE", "REQUESTS_CA_BUNDLE")
        if trusted is not None and trusted.is_file():
            parts.append(hashlib.sha256(trusted.read_bytes()).hexdigest())
    except (TrustError, OSError):
        parts.append("no certificates")
    text = "\x1f".join(parts).encode("utf-8", errors="replace")
    return f"{salt}${hashlib.pbkdf2_hmac('sha256', text, bytes.fromhex(salt), _HASH_ROUNDS).hex()[:32]}"


def _same_settings(config: Config, name: str, mark: str | None) -> bool:
    salt, sign, _ = (mark or "").partition("$")
    if not sign:
        return False
    try:
        return hmac.compare_digest(settings_mark(config, name, salt), mark or "")
    except ValueError:
        return False


def deliver_due(
    config: Config, store: Store, *, now: datetime, clock: Clock, rng: random.Random | None = None
) -> DeliveryReport:
    """Try everything that is due.

    Parameters
    ----------
    now : datetime
        Plant time: it decides what is due, how long the next wait is and what is given up.
    clock : callable
        The real time, for signatures and for dates in a receiver's answer.
    rng : random.Random, optional
        Source of the waits' spread.

    Notes
    -----
    A trouble of delivery never leaves this function; only ``StoreError`` does, since without the store the
    outcome of a try could not be kept and the message would be sent again.
    """
    rng = rng or random.Random()  # noqa: S311 - spread of waits, nothing secret
    report = DeliveryReport()
    now_us = _us(now)
    with store.reading() as conn:
        waiting = box.due(conn, now_us)
        states = box.channel_state(conn)
    lines: dict[str, _Line] = {}
    try:
        for row in waiting:
            name = row.message.channel
            if name not in lines:
                lines[name] = _line(config, name, states.get(name), now_us, clock)
            line = lines[name]
            if line.asleep:
                continue
            outcome = _try(config, store, line, row, now)
            _learn(line, outcome)
            _note(config, store, line, row, outcome, now_us=now_us, rng=rng, report=report)
    finally:
        for name, line in lines.items():
            _close(name, line)
    with store.reading() as conn:
        report.waiting = sum(s.waiting for s in box.channel_state(conn).values())
    return report


def _us(moment: datetime) -> int:
    return round(moment.timestamp() * 1e6)


def _line(config: Config, name: str, state: box.ChannelState | None, now_us: int, clock: Clock) -> _Line:
    paused = state is not None and state.paused_until_us is not None and name in config.channels
    if (
        paused
        and state is not None
        and now_us < (state.paused_until_us or 0)
        and _same_settings(config, name, state.fingerprint)
    ):
        return _Line(None, asleep=True)
    return _Line(sender_for(config, name, clock), reopening=paused)


def _close(name: str, line: _Line) -> None:
    try:
        if line.sender is not None:
            line.sender.close()
    except Exception as error:  # noqa: BLE001 - what was sent is noted already
        _LOG.warning("Channel %s did not close in order (%s)", name, type(error).__name__)


def _try(config: Config, store: Store, line: _Line, row: box.Waiting, now: datetime) -> Outcome:
    name = row.message.channel
    if line.sender is None:
        if name in config.channels:
            kind = config.channels[name].kind
            return Outcome(
                "refused",
                f'Channel "{name}" is of kind "{kind}", which is not yet available in this version.',
            )
        return Outcome("refused", f'Channel "{name}" is not in the configuration any more.')
    if line.rest is not None:
        return Outcome(
            "later", f"Not tried in this pass, since the channel failed: {line.rest}", retry_after=line.rest_s
        )
    to = row.message.to
    if to:
        with store.reading() as conn:
            done = {*row.accepted, *refused_for_good(conn, row.id)} if row.tries else {*row.accepted}
        left = tuple(a for a in to if a not in done)
        if not left:
            return Outcome("sent", "Every address was dealt with before.")
    else:
        left = ()
    try:
        message = Message.from_payload(row.message.payload)
        age = now - message.created
        if age > _LATE:
            message = message.with_age(_age_line(age, message.created, config.zone))
        return line.sender.send(message, left, shown_to=to)
    except PayloadError as error:
        return Outcome("refused", str(error), refused=left)
    except Exception as error:  # noqa: BLE001 - the one boundary of a channel: nothing may stop the others
        # the trace without the error's own text, which may hold an address with a secret in it
        trace = "".join(traceback.format_tb(error.__traceback__))
        _LOG.error(
            "Channel %s failed on %s: %s\n%s", name, row.message.message_id, type(error).__name__, trace
        )
        return Outcome(
            "later", f"The channel failed unexpectedly ({type(error).__name__}); the log has the place."
        )


def _age_line(age: timedelta, created: datetime, zone: ZoneInfo) -> str:
    hours = age / timedelta(hours=1)
    if hours < 48:
        how = "1 hour" if round(hours) == 1 else f"{hours:.0f} hours"
    else:
        how = f"{hours / 24:.0f} days"
    written = created.astimezone(zone).strftime("%Y-%m-%d %H:%M")
    return f"Delivered late: this was written {how} ago, on {written}."


def _learn(line: _Line, outcome: Outcome) -> None:
    """Decide whether the channel is tried further in this pass."""
    if outcome.kind == "paused":
        line.asleep = True
    elif outcome.kind == "later" and line.rest is None:
        line.failures += 1
        if outcome.channel_wide or line.failures >= _FAILURES_IN_A_ROW:
            line.rest, line.rest_s = outcome.detail, outcome.retry_after
    elif outcome.kind in {"sent", "partly"}:
        line.failures = 0


def _note(
    config: Config, store: Store, line: _Line, row: box.Waiting, outcome: Outcome, *, now_us: int, rng: random.Random,
    report: DeliveryReport,
) -> None:  # fmt: skip
    """Keep how the try ended, and when the next one is due, in one transaction."""
    name = row.message.channel
    kind: str = outcome.kind
    next_us: int | None = None
    mark = settings_mark(config, name) if kind == "paused" else ""
    with store.writing() as conn:
        if kind in {"later", "partly"}:
            # a channel that was wrongly set up gets the five days anew, so that what waited is delivered
            since = max(row.created_us, last_pause_us(conn, name) or row.created_us)
            if now_us - since >= _GIVE_UP_US:
                kind = "given-up"
            else:
                next_us = now_us + _wait_us(row.tries, outcome.retry_after, rng)
        box.note_try(
            conn, row.id, at_us=now_us, outcome=kind, detail=outcome.detail, accepted=outcome.accepted,
            refused=outcome.refused, next_us=next_us,
        )  # fmt: skip
        if kind == "paused":
            until = now_us + round(_PAUSE.total_seconds() * 1e6)
            box.pause_channel(conn, name, until_us=until, fingerprint=mark, error=outcome.detail)
        elif line.reopening and line.sender is not None:
            box.resume_channel(conn, name)
            line.reopening = False
    report.delivered += kind == "sent"
    report.failed += kind in {"refused", "given-up"}
    level = logging.INFO if kind == "sent" else logging.WARNING
    _LOG.log(
        level, "%s to %s on %s: %s (%s)", row.message.message_id, row.message.recipient, name, kind, outcome.detail
    )  # fmt: skip


def _wait_us(tries: int, asked_s: float | None, rng: random.Random) -> int:
    """Wait before the next try: longer each time, spread so that messages do not come in step, never too early."""
    minutes = _WAITS_MIN[tries] if tries < len(_WAITS_MIN) else _HOURLY_MIN
    return round(max(minutes * 60 * rng.uniform(1 - _JITTER, 1 + _JITTER), asked_s or 0.0) * 1e6)
