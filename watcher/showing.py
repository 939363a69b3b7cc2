"""From stored things to what messages and pictures are told from."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from datetime import UTC, datetime
from typing import Any

import numpy as np

from rules.model import Steps
from watcher.config import Config, Stream
from watcher.notify.views import AlertView, PlantView, RecordView, SeriesView, StreamView
from watcher.notify.words import gap_unit
from watcher.store.alerts import Alert
from watcher.store.records import Record

__all__ = [
    "alert_view",
    "plant_view",
    "record_views",
    "series_view",
    "shown_key",
    "stream_view",
    "unknown_json",
]


def plant_view(config: Config) -> PlantView:
    """Return the plant."""
    return PlantView(config.plant.name, config.zone)


def series_view(steps: Steps, data: Mapping[str, Any]) -> SeriesView:
    """Return a stream's steps with the place of its baseline."""
    from rules.start import place_events

    positions, _ = place_events(steps, np.cumsum(steps.exposure))
    base = data.get("baseline")
    low = high = 0.0
    if base is not None and base["from"] is not None:
        low, high = (steps.timeline.position_at(_us(base[k])) for k in ("from", "to"))
    return SeriesView(steps.exposure, steps.events, positions, steps.open_exposure, steps.located, low, high)


def _us(text: str) -> int:
    return round(datetime.fromisoformat(text).timestamp() * 1e6)


def stream_view(
    config: Config, name: str, data: Mapping[str, Any], series: SeriesView | None = None
) -> StreamView:
    """Return a stream with its standing."""
    s = config.streams[name]
    return StreamView(
        name, s.title, gap_unit(s.exposure, s.exposure_name), s.express_per, s.form == "per-unit", s.safety, s.reaction_plan, data,
        series,
    )  # fmt: skip


def unknown_json(name: str, stream: Stream) -> dict[str, Any]:
    """Return one stream of ``status --json`` of which nothing is known yet."""
    return {
        "stream": name, "title": stream.title, "form": stream.form, "exposure_unit": stream.exposure, "standing": "learning",
        "events": 0, "exposure": 0, "open_gap": 0, "mean_gap": None, "baseline": None, "last_event": None, "alert": None,
        "advice": [], "level": 0.0, "ahead": 0, "notes": [],
    }  # fmt: skip


def shown_key(config: Config, record: Record) -> dict[str, str]:
    """Return a record's key without what is private."""
    columns = config.sources[record.source].columns
    private = set(columns.private) if columns is not None else set()
    return {k: v for k, v in record.key.items() if k not in private}


def record_views(config: Config, records: Sequence[Record]) -> list[RecordView]:
    """Return records without what is private."""
    out = []
    for r in records:
        columns = config.sources[r.source].columns
        shown = columns.attributes if columns is not None else ()
        private = set(columns.private) if columns is not None else set()
        attributes = {k: r.attributes[k] for k in shown if k in r.attributes and k not in private}
        time = datetime.fromtimestamp(r.time_us / 1e6, UTC)
        out.append(
            RecordView(time, r.unit, 1.0 if r.defects is None else r.defects, attributes, r.file, r.line)
        )
    return out


def alert_view(
    stream: StreamView, alert: Alert, records: Sequence[RecordView] = (), *, what_changed: str | None = None
) -> AlertView:
    """Return an alert as shown."""
    return AlertView(
        stream, alert.label, alert.direction, alert.state, alert.evidence, records, alert.taken_by, alert.settled_by, alert.finding,
        alert.note, what_changed or alert.withdrawn_why,
    )  # fmt: skip
