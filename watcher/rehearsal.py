"""Rehearsal: the same engine over past records, to see what would have been alerted; nothing is sent or kept."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import ExitStack, contextmanager
from datetime import datetime, timedelta
from pathlib import Path
from typing import Any

from rules.assess import assess
from watcher import showing
from watcher.building import SeriesError, build, produced_for
from watcher.collect import collect
from watcher.config import Config, Span
from watcher.cycle import Frames, not_available
from watcher.feeds import alive_us
from watcher.reconcile import evidence_of
from watcher.store import Store
from watcher.store.records import SourceState, fingerprint_of, record_by_ids, source_state
from watcher.streams import baseline_json, iso, plan_for, status_json
from watcher.workcalendar import WorkCalendar

__all__ = ["rehearse"]


def rehearse(
    config: Config,
    *,
    start: datetime | None,
    end: datetime,
    settle_after: Span,
    clock: Callable[[], datetime],
) -> dict[str, Any]:
    """Return the contract's rehearsal object; alerts raised before ``start`` are left out of it.

    Records come from the store where it has them as the configuration understands them now, else they are
    collected without being kept. Each alert is taken as settled ``no-cause`` after ``settle_after``, and the
    rules restart.
    """
    with _past(config, end, clock()) as past:
        streams = [
            _one(past, name, start=start, end=end, settle_after=settle_after) for name in config.streams
        ]
        firsts = [t for source in config.sources if (t := past.first_us(source)) is not None]
    first = iso(min(firsts, default=None), config.zone)
    return {
        "from": start.astimezone(config.zone).isoformat(timespec="seconds") if start else first,
        "to": end.astimezone(config.zone).isoformat(timespec="seconds"),
        "streams": streams,
        "errors": past.errors,
    }


class _Past:
    """Past records of every source, from the store or read for this once."""

    def __init__(
        self, config: Config, stores: dict[str, Store], end: datetime, errors: list[dict[str, str]]
    ) -> None:
        self.config = config
        self.calendar = WorkCalendar.of(config)
        self.errors = errors
        self.stores = stores
        self._frames = {id(s): Frames(config, s) for s in stores.values()}
        self._states: dict[int, dict[str, SourceState]] = {}
        for store in stores.values():
            with store.reading() as conn:
                self._states[id(store)] = source_state(conn, round(end.timestamp() * 1e6))

    def frame(self, source: str) -> Any:
        """Return a source's records."""
        return self._frames[id(self.stores[source])].of(source)

    def attributes(self, source: str) -> Any:
        """Return a source's records with their attributes."""
        return self._frames[id(self.stores[source])].with_attributes(source)

    def state(self, source: str) -> SourceState | None:
        """Return a source's standing."""
        return self._states[id(self.stores[source])].get(source)

    def first_us(self, source: str) -> int | None:
        """Return the moment of a source's first record."""
        times = self.frame(source).time_us
        return int(times[0]) if times.size else None


@contextmanager
def _past(config: Config, end: datetime, real_now: datetime) -> Iterator[_Past]:
    with ExitStack() as stack:
        kept = _kept(config)
        have: set[str] = set()
        if kept is not None:
            stack.callback(kept.close)
            with kept.reading() as conn:
                states = source_state(conn)
                have = {
                    name
                    for name in config.sources
                    if name in states
                    and states[name].records
                    and fingerprint_of(conn, name) == config.reading_fingerprint(name)
                }
        fresh = Store.open("sqlite://")
        stack.callback(fresh.close)
        # nothing is stored, so that a file delivered this very moment can be read as it is
        settled = real_now + timedelta(seconds=1 + max(s.settle_seconds for s in config.sources.values()))
        reports = collect(config, fresh, now=settled, only=[n for n in config.sources if n not in have])
        errors = [{"source": r.source, "error": r.error} for r in reports if r.error is not None]
        stores = {n: kept if kept is not None and n in have else fresh for n in config.sources}
        yield _Past(config, stores, end, errors)


def _kept(config: Config) -> Store | None:
    """Return the plant's store, if there is one; rehearsing makes none."""
    path = config.store_url.removeprefix("sqlite:///")
    if config.store_url.startswith("sqlite:///") and not Path(path).exists():
        return None
    return Store.open(config.store_url)


def _unjudged(config: Config, name: str, why: str) -> dict[str, Any]:
    stream = config.streams[name]
    return {
        "stream": name, "form": stream.form, "exposure_unit": stream.exposure, "events": 0, "exposure": 0, "standing": "learning",
        "baseline": None, "alerts": [], "error": why,
    }  # fmt: skip


def _one(
    past: _Past, name: str, *, start: datetime | None, end: datetime, settle_after: Span
) -> dict[str, Any]:
    config = past.config
    stream = config.streams[name]
    missing = not_available(config, name)
    if missing is not None:
        return _unjudged(config, name, missing)
    end_us = round(end.timestamp() * 1e6)
    alive = end_us if config.sources[stream.source].proof_of_life == "reachable" else None
    alive = alive or alive_us(config, stream.source, past.state(stream.source), end_us)
    # whoever looks back knows that nothing more will come: no event waits for its production
    produced = produced_for(config, name, past.frame, lambda _: True)
    try:
        built = build(
            config,
            name,
            past.frame(stream.source),
            past.calendar,
            alive_us=alive,
            now_us=end_us,
            produced=produced,
        )
    except SeriesError as error:
        return _unjudged(config, name, str(error))
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
        with past.stores[stream.source].reading() as conn:
            numbers, merged = built.records_of(signal.steps)
            records = record_by_ids(conn, numbers)
        state = "settled" if signal.settled_us is not None and signal.settled_us <= end_us else "raised"
        settled = iso(signal.settled_us, config.zone) if state == "settled" else None
        found.append(
            {
                "id": f"R-{number:06d}",
                "state": state,
                "settled_at": settled,
                **evidence_of(config, view, signal, records, lambda: past.attributes(stream.source), merged),
            }
        )
    return {
        "stream": name, "form": stream.form, "exposure_unit": stream.exposure, "events": result.events, "exposure": result.exposure,
        "standing": result.standing, "baseline": baseline_json(result.baseline, config.zone), "alerts": found,
    }  # fmt: skip
