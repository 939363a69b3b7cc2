"""Rehearsal: the same engine over past records, to see what would have been alerted; nothing is sent or kept."""

from __future__ import annotations

from collections.abc import Callable
from datetime import datetime
from pathlib import Path
from typing import Any

from rules.assess import assess
from watcher import showing
from watcher.collect import collect
from watcher.config import Config, Span
from watcher.cycle import Frames
from watcher.feeds import alive_us
from watcher.reconcile import evidence_of
from watcher.store import Store
from watcher.store.records import SourceState, record_by_ids, source_state
from watcher.streams import baseline_json, build, iso, plan_for, status_json
from watcher.workcalendar import WorkCalendar

__all__ = ["rehearse"]


def rehearse(
    config: Config,
    *,
    start: datetime | None,
    end: datetime,
    settle_after: Span,
    tell: Callable[[str], None] | None = None,
) -> dict[str, Any]:
    """Return the contract's rehearsal object.

    Records come from the store where it has them, else they are collected without being kept. Each alert is
    taken as settled ``no-cause`` after ``settle_after``, and the rules restart.
    """
    store = _records_of(config, end)
    try:
        calendar = WorkCalendar.of(config)
        frames = Frames(config, store)
        with store.reading() as conn:
            states = source_state(conn, round(end.timestamp() * 1e6))
        streams = []
        for name in config.streams:
            if tell is not None:
                tell(name)
            streams.append(
                _one(
                    config,
                    store,
                    name,
                    frames,
                    states,
                    calendar,
                    start=start,
                    end=end,
                    settle_after=settle_after,
                )
            )
    finally:
        store.close()
    first = start.astimezone(config.zone).isoformat(timespec="seconds") if start else None
    return {
        "from": first,
        "to": end.astimezone(config.zone).isoformat(timespec="seconds"),
        "streams": streams,
    }


def _records_of(config: Config, end: datetime) -> Store:
    path = config.store_url.removeprefix("sqlite:///")
    if config.store_url.startswith("sqlite:///") and not Path(path).exists():
        empty = True
    else:
        store = Store.open(config.store_url)
        with store.reading() as conn:
            empty = not any(s.records for s in source_state(conn).values())
        if not empty:
            return store
        store.close()
    store = Store.open("sqlite://")
    collect(config, store, now=end)
    return store


def _one(
    config: Config, store: Store, name: str, frames: Frames, states: dict[str, SourceState], calendar: WorkCalendar, *,
    start: datetime | None, end: datetime, settle_after: Span,
) -> dict[str, Any]:  # fmt: skip
    stream = config.streams[name]
    end_us = round(end.timestamp() * 1e6)
    alive = end_us if config.sources[stream.source].proof_of_life == "reachable" else None
    alive = alive or alive_us(config, stream.source, states.get(stream.source), end_us)
    built = build(config, name, frames.of(stream.source), calendar, alive_us=alive, now_us=end_us)
    plan = plan_for(config, name, settle_after_us=round(settle_after.plain().total_seconds() * 1e6))
    result = assess(built.steps, plan, [], end_us)
    data = status_json(
        config,
        name,
        result,
        standing=result.standing,
        last_event_us=None,
        alert=None,
        ahead=0,
        notes=built.notes,
    )
    view = showing.stream_view(config, name, data)
    found = []
    for number, signal in enumerate(result.signals, start=1):
        if start is not None and signal.raised_us < round(start.timestamp() * 1e6):
            continue
        with store.reading() as conn:
            records = record_by_ids(
                conn, [int(built.record_ids[i]) for i in signal.steps if built.record_ids[i] >= 0]
            )
        state = "settled" if signal.settled_us is not None and signal.settled_us <= end_us else "raised"
        settled = iso(signal.settled_us, config.zone) if state == "settled" else None
        found.append(
            {
                "id": f"R-{number:06d}",
                "state": state,
                "settled_at": settled,
                **evidence_of(config, view, signal, records),
            }
        )
    return {
        "stream": name, "form": stream.form, "exposure_unit": stream.exposure, "events": result.events, "exposure": result.exposure,
        "standing": result.standing, "baseline": baseline_json(result.baseline, config.zone), "alerts": found,
    }  # fmt: skip
