"""Where to look first: attributes of the events since a shift against production, or against earlier events."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from rules.look_first import SHOWN_FROM, look_first
from rules.model import Signal
from watcher.building import is_event_only, matches
from watcher.config import Config
from watcher.store.records import Record, RecordFrame

__all__ = ["compared_attributes", "places"]

_MOST = 5


def compared_attributes(config: Config, name: str) -> list[str]:
    """Attributes of a stream's source that may be shown and are not what the stream is chosen by."""
    stream = config.streams[name]
    columns = config.sources[stream.source].columns
    if columns is None:
        return []
    apart = {*columns.private, *stream.event, *stream.where, columns.unit, columns.time}
    return [a for a in columns.attributes if a not in apart]


def places(
    config: Config, name: str, signal: Signal, records: Sequence[Record], frame: RecordFrame
) -> dict[str, Any]:
    """Return ``look_first`` of the contract's ALERT object, what was compared, and with what.

    Parameters
    ----------
    records : sequence of Record
        The events since the shift.
    frame : RecordFrame
        The source's records with their attributes.
    """
    names = compared_attributes(config, name)
    stream = config.streams[name]
    none: dict[str, Any] = {"look_first": [], "looked_at": {"attributes": names, "against": None}}
    if signal.direction != "worse" or len(records) < 2 or not names:
        return none
    size = int(np.searchsorted(frame.time_us, signal.as_of_us, side="right"))
    mine = matches(frame, stream.where, size)
    began = frame.time_us[:size] >= signal.began.estimate_us
    against = "production"
    weights = np.where(mine & began, frame.quantity[:size], 0.0)
    carried = np.nonzero(weights > 0)[0]
    if is_event_only(config, stream) or stream.production is not None or carried.size <= len(records):
        against = "earlier events"
        failing = matches(frame, stream.event, size) if stream.event else np.nan_to_num(frame.defects[:size], nan=1.0) > 0  # fmt: skip
        carried = np.nonzero(mine & failing & ~began)[0]
    if carried.size == 0:
        return none
    since = {a: [r.attributes.get(a, "") for r in records] for a in names}
    usual = {a: frame.cells[a][:size][carried].tolist() for a in names}
    found = look_first(since, usual, weights=weights[carried] if against == "production" else None)
    return {
        "look_first": [
            {
                "attribute": p.attribute, "value": p.value, "events": p.events, "of": p.of,
                "usual_share": round(p.usual_share, 4), "p_adjusted": float(f"{p.p_adjusted:.2g}"), "p": float(f"{p.p:.3g}"),
            }
            for p in found[:_MOST]
            if p.p_adjusted <= SHOWN_FROM and p.value
        ],
        "looked_at": {"attributes": names, "against": against},
    }  # fmt: skip
