"""One pass: collect, assess, raise or withdraw, deliver. A step function; only its caller reads the clock."""

from __future__ import annotations

import logging
from collections.abc import Callable
from dataclasses import dataclass, field
from datetime import datetime, timedelta
from typing import Any

from rules.assess import assess
from watcher import showing
from watcher.collect import SourceReport, collect
from watcher.config import Config
from watcher.feeds import alive_us, is_stale, tell_of_feeds
from watcher.notify.deliver import DeliveryReport, deliver_due
from watcher.reconcile import Changes, reconcile
from watcher.sending import enqueue_alert, enqueue_notice
from watcher.store import Store, StoreError
from watcher.store.alerts import Alert, alerts, note_reminder
from watcher.store.records import RecordFrame, SourceState, record_frame, records_version, source_state
from watcher.store.standings import all_standings, note_baseline, note_standing
from watcher.streams import Built, build, inputs_of, needed_cells, plan_for, settled_of, status_json
from watcher.workcalendar import WorkCalendar

__all__ = ["CycleReport", "Frames", "run_cycle"]

_LOG = logging.getLogger(__name__)


@dataclass(slots=True)
class CycleReport:
    """What a pass did."""

    at: datetime
    sources: list[SourceReport] = field(default_factory=list)
    streams: dict[str, str] = field(default_factory=dict)
    broken: list[str] = field(default_factory=list)
    changes: Changes = field(default_factory=Changes)
    delivered: int = 0
    waiting: int = 0
    given_up: int = 0

    @property
    def is_fine(self) -> bool:
        """Whether nothing was left undone; rows set aside are not a fault of the pass."""
        return not (self.broken or self.given_up or any(s.error for s in self.sources))

    def as_json(self) -> dict[str, Any]:
        """Return the contract's object."""
        return {
            "at": self.at.isoformat(timespec="seconds"), "sources": [s.as_json() for s in self.sources],
            "streams": [{"stream": k, "standing": v} for k, v in self.streams.items()], "raised": self.changes.raised,
            "updated": self.changes.updated, "withdrawn": self.changes.withdrawn, "delivered": self.delivered,
            "waiting": self.waiting,
        }  # fmt: skip


class Frames:
    """Records of each source, loaded at most once a pass."""

    def __init__(self, config: Config, store: Store) -> None:
        self._config = config
        self._store = store
        self._loaded: dict[str, RecordFrame] = {}

    def of(self, source: str) -> RecordFrame:
        """Return a source's records."""
        if source not in self._loaded:
            with self._store.reading() as conn:
                self._loaded[source] = record_frame(conn, source, needed_cells(self._config, source))
        return self._loaded[source]


def run_cycle(config: Config, store: Store, *, now: datetime, clock: Callable[[], datetime]) -> CycleReport:
    """Make one pass at ``now`` (aware, plant time); ``clock`` is the real one, for signatures only."""
    report = CycleReport(now.astimezone(config.zone))
    report.sources = collect(config, store, now=now)
    calendar = WorkCalendar.of(config)
    with store.reading() as conn:
        states = source_state(conn)
    frames = Frames(config, store)
    for name in config.streams:
        try:
            report.streams[name] = _assess_one(
                config, store, name, frames, states, calendar, now=now, report=report
            )
        except StoreError:
            raise
        except Exception:  # noqa: BLE001 - the one boundary of a stream: the others go on
            _LOG.exception("Stream %s could not be assessed", name)
            report.broken.append(name)
    tell_of_feeds(config, store, states, calendar, now)
    _tell_of_broken(config, store, report, now)
    _remind(config, store, calendar, now)
    _deliver(config, store, report, now=now, clock=clock)
    return report


def _assess_one(
    config: Config, store: Store, name: str, frames: Frames, states: dict[str, SourceState], calendar: WorkCalendar, *, now: datetime,
    report: CycleReport,
) -> str:  # fmt: skip
    stream = config.streams[name]
    now_us = round(now.timestamp() * 1e6)
    state = states.get(stream.source)
    alive = alive_us(config, stream.source, state, now_us)
    stale = is_stale(config, stream.source, state, calendar, now)
    with store.reading() as conn:
        stored = alerts(conn, stream=name)
        version = records_version(conn, stream.source)
        before = all_standings(conn).get(name)
    # records dated ahead make the outcome depend on the moment itself
    ahead_of = now_us if before is not None and before.data.get("ahead") else None
    inputs = inputs_of(config, name, version=version, alive_us=alive, alerts=stored, ahead_of=ahead_of) + (
        "s" if stale else ""
    )
    if before is not None and before.inputs == inputs and before.assessed_us <= now_us:
        return before.standing
    built = build(config, name, frames.of(stream.source), calendar, alive_us=alive, now_us=now_us)
    result = assess(built.steps, plan_for(config, name), settled_of(stored, now_us, config.zone), now_us)
    standing = "silent" if stale else result.standing
    last_us = _last_event_us(built)
    data = status_json(
        config,
        name,
        result,
        standing=standing,
        last_event_us=last_us,
        alert=None,
        ahead=built.ahead,
        notes=built.notes,
    )
    view = showing.stream_view(config, name, data, showing.series_view(built.steps, data))
    changes = reconcile(
        config, store, name, built=built, assessment=result, view=view, stored=stored, now=now
    )
    report.changes.raised += changes.raised
    report.changes.updated += changes.updated
    report.changes.withdrawn += changes.withdrawn
    with store.writing() as conn:
        now_stored = alerts(conn, stream=name)
        still = [a for a in now_stored if a.is_open]
        data["alert"] = still[-1].label if still else None
        after = inputs_of(
            config,
            name,
            version=version,
            alive_us=alive,
            alerts=now_stored,
            ahead_of=now_us if built.ahead else None,
        )
        note_standing(conn, name, standing, data, inputs=after + ("s" if stale else ""), at_us=now_us)
        if data["baseline"] is not None:
            note_baseline(conn, name, data["baseline"], at_us=now_us, by="gapbell", why=_why(stored, data))
    return standing


def _last_event_us(built: Built) -> int | None:
    steps = built.steps
    hit = steps.time_us[steps.events > 0]
    return int(hit[-1]) if hit.size else None


def _why(stored: list[Alert], data: dict[str, Any]) -> str:
    if data["baseline"]["source"] == "after-change":
        changed = [a for a in stored if a.finding == "intended-change"]
        return (
            f"new after {changed[-1].label}, settled by {changed[-1].settled_by}"
            if changed
            else "new after a change"
        )
    return {
        "first-events": "grown while steady, or records changed",
        "dated": "dates in the configuration",
    }.get(data["baseline"]["source"], "stated in the configuration")


def _tell_of_broken(config: Config, store: Store, report: CycleReport, now: datetime) -> None:
    for name in config.streams:
        broken = name in report.broken
        with store.writing() as conn:
            enqueue_notice(
                conn, config, about=f"stream {name}", state="broken" if broken else "well", now=now,
                subject=f"Stream {name} {'could not be assessed' if broken else 'is assessed again'}",
                lines=["The log has the details; the other streams go on."] if broken else ["Nothing was lost meanwhile."],
            )  # fmt: skip


def _remind(config: Config, store: Store, calendar: WorkCalendar, now: datetime) -> None:
    """Repeat once an alert that nobody took."""
    with store.reading() as conn:
        waiting = [a for a in alerts(conn, open_only=True) if a.state == "raised" and a.reminded_us is None]
    for alert in waiting:
        if alert.stream not in config.streams:
            continue
        noticed = datetime.fromtimestamp(alert.noticed_us / 1e6, now.tzinfo)
        if not calendar.passed(noticed, now, config.alerting.remind_after):
            continue
        with store.writing() as conn:
            data = all_standings(conn).get(alert.stream)
            view = showing.stream_view(config, alert.stream, data.data if data else {})
            note_reminder(conn, alert.id, round(now.timestamp() * 1e6))
            enqueue_alert(
                conn,
                config,
                alert,
                showing.alert_view(view, alert),
                kind="reminder",
                suffix="reminder",
                now=now,
            )


def _deliver(
    config: Config, store: Store, report: CycleReport, *, now: datetime, clock: Callable[[], datetime]
) -> None:
    """Deliver; what could not arrive becomes a feed notice, which is delivered a second later."""
    first = deliver_due(config, store, now=now, clock=clock)
    second = DeliveryReport()
    if first.notices:
        for about, line in first.notices:
            with store.writing() as conn:
                enqueue_notice(
                    conn,
                    config,
                    about=about,
                    state="failed",
                    subject="A message could not be delivered",
                    lines=[line],
                    now=now,
                )
        second = deliver_due(config, store, now=now + timedelta(seconds=1), clock=clock)
        first.waiting = second.waiting
    report.delivered = first.delivered + second.delivered
    report.waiting = first.waiting
    report.given_up = first.failed + second.failed
