"""One pass: collect, assess, raise or withdraw, deliver. A step function; only its caller reads the clock."""

from __future__ import annotations

import logging
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from datetime import datetime, timedelta
from typing import Any

from rules.assess import assess
from rules.model import Assessment, Signal
from watcher import showing
from watcher.building import Built, SeriesError, build, needed_cells, produced_for
from watcher.collect import SourceReport, collect
from watcher.config import Config
from watcher.config.values import day_end_us
from watcher.feeds import alive_us, is_stale, tell_of_feeds
from watcher.notices import tell_of_delivery, tell_of_set_aside, tell_of_streams
from watcher.notify.deliver import deliver_due
from watcher.reconcile import Changes, reconcile
from watcher.sending import enqueue_alert
from watcher.showing import unknown_json
from watcher.store import Store, StoreError
from watcher.store.alerts import Alert, alerts, note_reminder
from watcher.store.outbox import note_pass
from watcher.store.records import RecordFrame, record_frame, records_version, source_state
from watcher.store.standings import all_standings, note_baseline, note_standing
from watcher.streams import inputs_of, plan_for, settled_of, status_json
from watcher.workcalendar import WorkCalendar

__all__ = ["CycleReport", "Frames", "not_available", "run_cycle"]

_LOG = logging.getLogger(__name__)


@dataclass(slots=True)
class CycleReport:
    """What a pass did."""

    at: datetime
    sources: list[SourceReport] = field(default_factory=list)
    streams: dict[str, str] = field(default_factory=dict)
    broken: dict[str, str] = field(default_factory=dict)
    """Streams that could not be judged, and why."""
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
            "waiting": self.waiting, "broken": [{"stream": k, "error": v} for k, v in self.broken.items()],
        }  # fmt: skip


class Frames:
    """Records of each source, loaded at most once a pass."""

    def __init__(self, config: Config, store: Store) -> None:
        self._config = config
        self._store = store
        self._loaded: dict[str, RecordFrame] = {}
        self._with_attributes: dict[str, RecordFrame] = {}

    def of(self, source: str) -> RecordFrame:
        """Return a source's records."""
        if source not in self._loaded:
            with self._store.reading() as conn:
                self._loaded[source] = record_frame(conn, source, needed_cells(self._config, source))
        return self._loaded[source]

    def with_attributes(self, source: str) -> RecordFrame:
        """Return a source's records with every attribute; only an alert asks for them."""
        if source not in self._with_attributes:
            columns = self._config.sources[source].columns
            cells = [
                *needed_cells(self._config, source),
                *(columns.attributes if columns is not None else ()),
            ]
            with self._store.reading() as conn:
                self._with_attributes[source] = record_frame(conn, source, list(dict.fromkeys(cells)))
        return self._with_attributes[source]


def run_cycle(config: Config, store: Store, *, now: datetime, clock: Callable[[], datetime]) -> CycleReport:
    """Make one pass at ``now`` (aware, plant time); ``clock`` is the real one, for signatures only."""
    report = CycleReport(now.astimezone(config.zone))
    report.sources = collect(config, store, now=now)
    this = _Pass(config, store, now)
    for name in config.streams:
        try:
            missing = not_available(config, name)
            if missing is not None:
                _note_unjudged(this, name, missing)
                report.broken[name] = missing
                continue
            report.streams[name] = _assess_one(this, name, report.changes)
        except StoreError:
            raise
        except SeriesError as error:
            _note_unjudged(this, name, str(error))
            report.broken[name] = str(error)
        except Exception as error:  # noqa: BLE001 - the one boundary of a stream: the others go on
            why = f"Unexpected {type(error).__name__}; the log has the details."
            if this.before.get(name) is None or this.before[name].data.get("error") != why:
                _LOG.exception("Stream %s could not be judged", name)
            else:
                _LOG.error("Stream %s: %s", name, why)
            _note_unjudged(this, name, why)
            report.broken[name] = why
    tell_of_feeds(config, store, this.states, this.calendar, now)
    tell_of_set_aside(config, store, now)
    tell_of_streams(config, store, report.broken, now)
    _remind(config, store, this.calendar, now)
    _deliver(config, store, report, now=now, clock=clock)
    with store.writing() as conn:
        note_pass(conn, now, clock())
    return report


class _Pass:
    """What a pass knows when it begins to assess; read once, since nobody else writes meanwhile."""

    def __init__(self, config: Config, store: Store, now: datetime) -> None:
        self.config = config
        self.store = store
        self.now = now
        self.now_us = round(now.timestamp() * 1e6)
        self.calendar = WorkCalendar.of(config)
        self.frames = Frames(config, store)
        self.stored: dict[str, list[Alert]] = {}
        with store.reading() as conn:
            self.states = source_state(conn, self.now_us)
            self.before = all_standings(conn)
            self.versions = {name: records_version(conn, name) for name in config.sources}
            for alert in alerts(conn):
                self.stored.setdefault(alert.stream, []).append(alert)

    def is_silent(self, source: str) -> bool:
        """Whether a source has been silent for longer than it may."""
        return is_stale(self.config, source, self.states.get(source), self.calendar, self.now)

    def inputs(self, name: str, stored: list[Alert], *, alive: int | None, stale: bool, ahead: bool) -> str:
        """Fingerprint of what a stream's assessment depends on."""
        source = self.config.streams[name].source
        made_by = self.config.streams[name].production
        to = self.config.streams[name].baseline.to
        told = inputs_of(
            self.config,
            name,
            version=self.versions[source]
            if made_by is None
            else (self.versions[source], self.versions[made_by.source]),
            alive_us=alive,
            alerts=stored,
            ahead_of=self.now_us if ahead or self.config.streams[name].mature_after is not None else None,
        )
        # what only the moment decides: silence, the end of a dated baseline, settlements already in force
        dated = to is not None and self.now_us >= day_end_us(to, self.config.zone)
        waits = made_by is not None and self.is_silent(made_by.source)
        settled = sum(a.settled_us is not None and a.settled_us <= self.now_us for a in stored)
        return f"{told}{'s' if stale else ''}{'d' if dated else ''}{'p' if waits else ''}{settled}"


def not_available(config: Config, name: str) -> str | None:
    """Say which key of a stream asks for what this version cannot do; judged without it, its figures would be wrong."""
    lines = [line for line in config.later_of(name) if not line.startswith(f"[streams.{name}] form")]
    return lines[0] if lines else None


def _note_unjudged(this: _Pass, name: str, why: str) -> None:
    """Keep what is known of a stream, with the reason why it could not be judged."""
    before = this.before.get(name)
    stream = this.config.streams[name]
    data = dict(before.data) if before is not None else unknown_json(name, stream)
    data |= {"error": why, "advice": [{"code": "not-judged", "text": why}]}
    standing = before.standing if before is not None else "learning"
    with this.store.writing() as conn:
        note_standing(conn, name, standing, data, inputs="", at_us=this.now_us)


def _judge(this: _Pass, name: str, built: Built) -> tuple[Assessment, list[Alert]]:
    """Assess; an alert settled before its signal would have been raised has lost its evidence, and is left out.

    The k-th signal of a direction stands for the k-th alert: without this, an alert settled as a recording
    error whose records were then corrected would swallow the next real shift.
    """
    told = [a for a in this.stored.get(name, []) if a.state != "withdrawn"]
    plan = plan_for(this.config, name)
    while True:
        result = assess(built.steps, plan, settled_of(told, this.now_us, this.config.zone), this.now_us)
        spent = _without_evidence(result.signals, told)
        if spent is None:
            return result, told
        told = [a for a in told if a.id != spent.id]


def _without_evidence(signals: Sequence[Signal], told: list[Alert]) -> Alert | None:
    for direction in ("worse", "better"):
        pairs = zip(
            [s for s in signals if s.direction == direction],
            [a for a in told if a.direction == direction],
            strict=False,
        )
        for signal, alert in pairs:
            if alert.settled_us is not None and alert.settled_us < signal.raised_us:
                return alert
    return None


def _assess_one(this: _Pass, name: str, changes: Changes) -> str:
    config, store = this.config, this.store
    source = config.streams[name].source
    state = this.states.get(source)
    alive = alive_us(config, source, state, this.now_us)
    stale = this.is_silent(source)
    stored = this.stored.get(name, [])
    before = this.before.get(name)
    # records dated ahead make the outcome depend on the moment itself
    ahead = before is not None and bool(before.data.get("ahead"))
    inputs = this.inputs(name, stored, alive=alive, stale=stale, ahead=ahead)
    if before is not None and before.inputs == inputs and before.assessed_us <= this.now_us:
        return before.standing
    built = build(
        config, name, this.frames.of(source), this.calendar, alive_us=alive, now_us=this.now_us,
        produced=produced_for(config, name, this.frames.of, this.is_silent),
    )  # fmt: skip
    result, told = _judge(this, name, built)
    standing = "silent" if stale else result.standing
    data = status_json(
        config,
        name,
        result,
        standing=standing,
        last_event_us=_last_event_us(built),
        alert=None,
        ahead=built.ahead,
        notes=built.notes,
    )
    view = showing.stream_view(config, name, data, showing.series_view(built.steps, data))
    mine = reconcile(
        config, store, name, built=built, assessment=result, view=view, stored=told, now=this.now,
        attributes=lambda: this.frames.with_attributes(source),
    )  # fmt: skip
    changes.add(mine)
    with store.writing() as conn:
        now_stored = alerts(conn, stream=name)
        still = [a for a in now_stored if a.is_open]
        data["alert"] = still[-1].label if still else None
        after = this.inputs(name, now_stored, alive=alive, stale=stale, ahead=bool(built.ahead))
        note_standing(conn, name, standing, data, inputs=after, at_us=this.now_us)
        if data["baseline"] is not None:
            note_baseline(
                conn,
                name,
                data["baseline"],
                at_us=this.now_us,
                by=_by(now_stored, data),
                why=_why(now_stored, data),
            )
    return standing


def _last_event_us(built: Built) -> int | None:
    steps = built.steps
    hit = steps.time_us[steps.events > 0]
    return int(hit[-1]) if hit.size else None


def _intended(stored: list[Alert], data: dict[str, Any]) -> Alert | None:
    """Return the alert whose settling started the present baseline."""
    if data["baseline"]["source"] != "after-change":
        return None
    return next((a for a in reversed(stored) if a.finding == "intended-change"), None)


def _by(stored: list[Alert], data: dict[str, Any]) -> str:
    alert = _intended(stored, data)
    return alert.settled_by or "gapbell" if alert is not None else "gapbell"


def _why(stored: list[Alert], data: dict[str, Any]) -> str:
    alert = _intended(stored, data)
    if alert is not None:
        return f"new after the intended change of {alert.label}"
    return {
        "first-events": "the first events; grown while steady, or its records changed",
        "dated": "dates in the configuration",
    }.get(data["baseline"]["source"], "stated in the configuration")


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
    """Deliver; what can never arrive becomes a feed notice, which is delivered a second later."""
    tell_of_delivery(config, store, now)  # what a pass that was cut off could not tell any more
    first = deliver_due(config, store, now=now, clock=clock)
    report.delivered, report.waiting, report.given_up = first.delivered, first.waiting, first.failed
    if tell_of_delivery(config, store, now):
        second = deliver_due(config, store, now=now + timedelta(seconds=1), clock=clock)
        report.delivered += second.delivered
        report.given_up += second.failed
        report.waiting = second.waiting
