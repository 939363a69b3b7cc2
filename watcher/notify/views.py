"""What a message is told from: plain values, gathered by the cycle, looked at by words and pictures."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import datetime
from typing import Any
from zoneinfo import ZoneInfo

from rules.model import FloatArray, IntArray

__all__ = ["AlertView", "DigestView", "PlantView", "RecordView", "SeriesView", "StreamView"]


@dataclass(frozen=True, slots=True)
class PlantView:
    """The plant."""

    name: str
    zone: ZoneInfo


@dataclass(frozen=True, slots=True)
class SeriesView:
    """A stream's steps for pictures; positions are exposure since the first record."""

    exposure: FloatArray
    events: IntArray
    event_positions: FloatArray
    open_exposure: float
    located: bool
    baseline_from: float
    baseline_to: float


@dataclass(frozen=True, slots=True)
class StreamView:
    """A stream as shown; ``data`` is its object in ``status --json``."""

    name: str
    title: str
    unit: str
    express_per: float
    per_unit: bool
    safety: bool
    reaction_plan: str | None
    data: Mapping[str, Any]
    series: SeriesView | None = None


@dataclass(frozen=True, slots=True)
class RecordView:
    """One event since the shift; private attributes are not in it."""

    time: datetime
    unit: str | None
    count: float
    attributes: Mapping[str, str]
    file: str
    line: int


@dataclass(frozen=True, slots=True)
class AlertView:
    """An alert as shown; ``evidence`` is the contract's ALERT object."""

    stream: StreamView
    label: str
    direction: str
    state: str
    evidence: Mapping[str, Any]
    records: Sequence[RecordView] = ()
    taken_by: str | None = None
    settled_by: str | None = None
    finding: str | None = None
    note: str | None = None
    what_changed: str | None = None


@dataclass(frozen=True, slots=True)
class DigestView:
    """A week at a glance."""

    start: datetime
    end: datetime
    streams: Sequence[StreamView]
    open_alerts: Sequence[AlertView]
    sources: Sequence[Mapping[str, Any]]
    channels: Sequence[Mapping[str, Any]]
    unseen: Sequence[str] = ()
    taken_back: Sequence[str] = field(default=())
