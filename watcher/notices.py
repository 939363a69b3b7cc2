"""What the maintainers are told of in a pass besides silent feeds: streams, set-aside rows, deliveries.

Everything is found in the store, not in the memory of the pass, so that a crash in between loses no notice.
"""

from __future__ import annotations

from collections.abc import Mapping
from datetime import datetime

from watcher.config import Config
from watcher.notify import words as w
from watcher.sending import enqueue_notice
from watcher.store import Store
from watcher.store.outbox import channel_state, note_notice, notice_state, notices_in, undelivered
from watcher.store.records import rejects_since

__all__ = ["tell_of_delivery", "tell_of_set_aside", "tell_of_streams"]

_DAY_US = 86_400_000_000
_MOST = 8


def _us(moment: datetime) -> int:
    return round(moment.timestamp() * 1e6)


def tell_of_streams(config: Config, store: Store, broken: Mapping[str, str], now: datetime) -> None:
    """Tell which streams could not be judged, and which are judged again; ``broken`` says why."""
    with store.reading() as conn:
        before = notices_in(conn, "broken")
    for name in config.streams:
        why = broken.get(name)
        if why is None and f"stream {name}" not in before:
            continue
        with store.writing() as conn:
            enqueue_notice(
                conn, config, about=f"stream {name}", state="well" if why is None else "broken", now=now,
                subject=f"Stream {name} {'is judged again' if why is None else 'could not be judged'}",
                lines=["Nothing was lost meanwhile."] if why is None else [why, "The other streams go on."],
            )  # fmt: skip


def tell_of_set_aside(config: Config, store: Store, now: datetime) -> None:
    """Tell of rows set aside since the last time, at most once a day and source."""
    now_us = _us(now)
    for name in config.sources:
        about = f"set aside {name}"
        with store.writing() as conn:
            before = notice_state(conn, about)
            if before is not None and 0 <= now_us - before[1] < _DAY_US:
                continue
            count, first = rejects_since(conn, name, None if before is None else before[1], _MOST)
            if not count:
                continue
            lines = [
                f"{r.file}, {'whole file' if r.line is None else f'line {r.line}'}: {r.reason}" for r in first
            ]
            if count > len(first):
                lines.append(f"… and {count - len(first):,} more.")
            lines.append(
                "Nothing is lost: gapbell rejects lists every one; once corrected in the source they are read."
            )
            enqueue_notice(
                conn, config, about=about, state=f"up to {now_us}", now=now, lines=lines,
                subject=f"Source {name}: {w.count(count, 'row')} set aside",
            )  # fmt: skip


def tell_of_delivery(config: Config, store: Store, now: datetime) -> bool:
    """Tell of messages that will never arrive and of channels that are closed; True when something is new."""
    new = False
    with store.writing() as conn:
        lost = undelivered(conn)
        if lost:
            lines = [
                f'{u.message_id} for {u.recipient} on channel "{u.channel}"'
                f" {'was given up after five days' if u.outcome == 'given-up' else 'was refused for good'}: {u.detail}"
                for u in lost[:_MOST]
            ]
            if len(lost) > _MOST:
                lines.append(f"… and {len(lost) - _MOST} more; gapbell status counts them.")
            what = "A message" if len(lost) == 1 else f"{len(lost)} messages"
            new |= enqueue_notice(
                conn, config, about=lost[0].about, state="told", now=now, lines=lines, subject=f"{what} could not be delivered"
            )  # fmt: skip
            for u in lost[1:]:
                note_notice(conn, u.about, "told", _us(now))
        states = channel_state(conn)
        for name in config.channels:
            state = states.get(name)
            closed = state is not None and state.paused_until_us is not None
            lines = (
                [
                    str(state.error),
                    "It is tried every six hours, and at once when its settings or secret change.",
                ]
                if state is not None and closed
                else ["What waited is being delivered."]
            )
            new |= enqueue_notice(
                conn, config, about=f"channel {name}", state="paused" if closed else "well", now=now, lines=lines,
                subject=f"Channel {name} {'is closed for now' if closed else 'works again'}",
            )  # fmt: skip
    return new
