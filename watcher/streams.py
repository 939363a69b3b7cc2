"""Between the store and the rules: a stream's records become steps, its assessment becomes the contract's JSON."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Any
from zoneinfo import ZoneInfo

import numpy as np
import numpy.typing as npt

from rules import protocol
from rules.model import (
    Assessment,
    BaselineFigures,
    BaselinePlan,
    FloatArray,
    IntArray,
    Plan,
    Ratio,
    Settled,
    Signal,
    Steps,
)
from rules.series import calendar_gaps, count_series, first_pass, unit_gaps
from watcher.config import Config, Stream
from watcher.config.values import day_end_us, day_start_us
from watcher.store.alerts import Alert
from watcher.store.records import Record, RecordFrame
from watcher.workcalendar import WorkCalendar

__all__ = [
    "Built", "baseline_json", "build", "evidence_json", "inputs_of", "is_event_only", "is_failure", "is_one_of", "iso", "matches", "needed_cells", "plan_for", "settled_of",
    "status_json",
]  # fmt: skip

_COUNTED = ("units", "opportunities")


@dataclass(frozen=True, slots=True)
class Built:
    """A stream's series; ``record_ids`` names the record that closed each step, -1 for none."""

    steps: Steps
    record_ids: IntArray
    ahead: int
    """Records dated after the present moment: kept, not yet judged."""
    notes: tuple[str, ...]


def iso(time_us: int | None, zone: ZoneInfo) -> str | None:
    """RFC 3339 in plant time, or None."""
    if time_us is None:
        return None
    return datetime.fromtimestamp(time_us / 1e6, UTC).astimezone(zone).isoformat(timespec="seconds")


def is_event_only(config: Config, stream: Stream) -> bool:
    """Whether every record of the stream's source is itself a failure."""
    columns = config.sources[stream.source].columns
    counted = stream.exposure in _COUNTED
    return not counted and not stream.event and (columns is None or columns.defects is None)


def needed_cells(config: Config, source: str) -> list[str]:
    """Stored columns that the streams of a source look at."""
    out: dict[str, None] = {}
    for stream in config.streams.values():
        if stream.source == source:
            out |= dict.fromkeys([*stream.event, *stream.where])
    return list(out)


def _as_number(text: str) -> float | None:
    try:
        return float(text)
    except ValueError:
        return None


def is_one_of(cell: str, values: Sequence[str]) -> bool:
    """Whether a cell is one of the accepted values: as text, or as a number where both are numbers.

    Examples
    --------
    >>> is_one_of("2", ["LEAK", "2.0"]), is_one_of("leak", ["LEAK"])
    (True, False)
    """
    number = _as_number(cell)
    return cell in values or (number is not None and any(_as_number(v) == number for v in values))


def is_failure(config: Config, stream: Stream, record: Record) -> bool:
    """Whether a record, as it stands, is a failure of a stream."""
    if record.voided or not all(is_one_of(record.attributes.get(c, ""), v) for c, v in stream.where.items()):
        return False
    if stream.event:
        return all(is_one_of(record.attributes.get(c, ""), v) for c, v in stream.event.items())
    columns = config.sources[stream.source].columns
    return bool(record.defects) if columns is not None and columns.defects is not None else True


def matches(frame: RecordFrame, wanted: Mapping[str, Sequence[str]], size: int) -> npt.NDArray[np.bool_]:
    """Records whose cells match every column: as text, or as numbers where both are numbers."""
    keep = np.ones(size, dtype=bool)
    for column, values in wanted.items():
        cells = frame.cells[column][:size]
        known, inverse = np.unique(cells.astype(str), return_inverse=True)
        texts = set(values)
        numbers = {n for v in values if (n := _as_number(v)) is not None}
        good = np.array(
            [k in texts or (_as_number(k) in numbers if numbers else False) for k in known], dtype=bool
        )
        keep &= good[inverse] if known.size else False
    return keep


def build(
    config: Config,
    name: str,
    frame: RecordFrame,
    calendar: WorkCalendar,
    *,
    alive_us: int | None,
    now_us: int,
) -> Built:
    """Rework a stream's records into its series, as far as they are known at ``now_us``."""
    stream = config.streams[name]
    size = int(np.searchsorted(frame.time_us, now_us, side="right"))
    ahead = frame.time_us.size - size
    index = np.nonzero(matches(frame, stream.where, size))[0]
    quantity, defects = frame.quantity[:size][index], np.nan_to_num(frame.defects[:size][index])
    times, ids = frame.time_us[:size][index], frame.id[:size][index]
    lot = quantity > 1
    counted = stream.exposure in _COUNTED
    columns = config.sources[stream.source].columns
    has_defects = columns is not None and columns.defects is not None
    if stream.event:
        failing = matches(frame, stream.event, size)[index]
    elif has_defects:
        failing = defects > 0
    else:
        failing = np.ones(index.size, dtype=bool)
    mode = stream.retests or ("first-pass" if columns is not None and columns.unit else "every")
    if mode != "every":
        keep, failing = first_pass(_unit_numbers(frame.unit[:size][index]), failing, mode)
        quantity, defects, lot = quantity[keep], defects[keep], lot[keep]
        times, ids, failing = times[keep], ids[keep], failing[keep]
        index = index[keep]
    weight = quantity.copy()
    if stream.exposure == "opportunities":
        weight *= np.nan_to_num(frame.opportunities[:size][index], nan=1.0)
    notes: list[str] = []
    if stream.form == "per-unit":
        counts = np.where(failing, np.maximum(defects, 0), 0).astype(np.int64)
        steps = count_series(weight, counts, times)
    elif counted:
        in_lot = np.minimum(np.maximum(defects, 1), quantity) if has_defects else np.ones(index.size)
        failures = np.where(failing, np.where(lot, in_lot, 1), 0).astype(np.int64)
        last = config.sources[stream.source].failing_unit == "last"
        steps = unit_gaps(weight, failures, times, lot=lot, failing_last=last)
    else:
        steps = _calendar_steps(
            config, stream, calendar, times=times, failing=failing, alive_us=alive_us, now_us=now_us
        )
        outside = (
            sum(calendar.next_working_us(int(t)) != int(t) for t in times[failing])
            if stream.exposure != "days"
            else 0
        )
        if outside:
            notes.append(
                f"{outside} of the events fell outside working time and count from the next working moment."
            )
    record_ids = np.where(steps.record >= 0, ids[steps.record], -1) if steps.record.size else steps.record
    return Built(steps, record_ids, ahead, (*steps.notes, *notes))


def _unit_numbers(unit: npt.NDArray[Any]) -> IntArray:
    """Number the units; those without a name stay apart."""
    numbers: dict[str, int] = {}
    out = np.empty(unit.size, dtype=np.int64)
    for i, name in enumerate(unit.tolist()):
        out[i] = -1 if name is None else numbers.setdefault(name, len(numbers))
    return out


def _calendar_steps(
    config: Config,
    stream: Stream,
    calendar: WorkCalendar,
    *,
    times: IntArray,
    failing: npt.NDArray[np.bool_],
    alive_us: int | None,
    now_us: int,
) -> Steps:
    event_times = times[failing]
    which = np.nonzero(failing)[0].astype(np.int64)
    event_only = is_event_only(config, stream)
    if times.size == 0:
        empty: FloatArray = np.zeros(0)
        return calendar_gaps(empty, event_times, which, knots=(empty, event_times), origin_is_event=False)
    start_us = int(times[0])
    alive = max(int(times[-1]), min(alive_us if alive_us is not None else int(times[-1]), now_us))
    knots = calendar.knots(stream.exposure, start_us, alive)
    positions = np.interp(event_times, knots[1], knots[0]) if event_times.size else np.zeros(0)
    return calendar_gaps(np.asarray(positions), event_times, which, knots=knots, origin_is_event=event_only)


def plan_for(config: Config, name: str, *, settle_after_us: int | None = None) -> Plan:
    """What the stream is to be judged by."""
    stream = config.streams[name]
    b = stream.baseline
    plan = BaselinePlan(
        first_events=b.first_events, grow_to=b.grow_to, rate=b.rate, events=b.events, exposure=b.exposure,
        from_us=None if b.from_ is None else day_start_us(b.from_, config.zone),
        to_us=None if b.to is None else day_end_us(b.to, config.zone),
    )  # fmt: skip
    return Plan(plan, config.stream_share(name), tuple(stream.watch), settle_after_us)


def settled_of(alerts: Sequence[Alert], now_us: int, zone: ZoneInfo) -> list[Settled]:
    """Return a stream's alerts as the rules want them: withdrawn ones left out, open ones unsettled."""
    out = []
    for a in alerts:
        if a.state == "withdrawn":
            continue
        settled = (
            a.settled_us
            if a.state == "settled" and a.settled_us is not None and a.settled_us <= now_us
            else None
        )
        change = a.finding == "intended-change"
        began = datetime.fromisoformat(a.evidence["shift_began"]["estimate"]) if change else None
        out.append(
            Settled(
                "worse" if a.direction == "worse" else "better", a.raised_us, settled, new_baseline=change,
                began_us=None if began is None else round(began.astimezone(zone).timestamp() * 1e6),
                absorb=a.finding != "cause-found",
            )
        )  # fmt: skip
    return out


def inputs_of(
    config: Config,
    name: str,
    *,
    version: int,
    alive_us: int | None,
    alerts: Sequence[Alert],
    ahead_of: int | None,
) -> str:
    """Fingerprint of everything an assessment depends on; equal inputs need no second assessment."""
    stream = config.streams[name]
    parts = [
        stream.model_dump(mode="json", exclude={"title", "reaction_plan", "notify", "share", "express_per", "exposure_name", "safety"}),
        config.calendar.model_dump(mode="json") if stream.exposure not in _COUNTED else None,
        config.stream_share(name), version, alive_us if stream.exposure not in _COUNTED else None, ahead_of,
        [(a.id, a.state, a.finding) for a in alerts], protocol.PROTOCOL_VERSION, config.plant.timezone,
        config.sources[stream.source].failing_unit,
    ]  # fmt: skip
    return hashlib.sha256(json.dumps(parts, sort_keys=True, default=str).encode()).hexdigest()[:32]


def _round(value: float | None, digits: int = 6) -> float | None:
    """Significant digits enough to redo every figure, without noise."""
    if value is None or not np.isfinite(value):
        return None
    return float(f"{value:.{digits}g}")


def _count(value: float | None) -> float | int | None:
    return None if value is None else int(value) if float(value).is_integer() else _round(value, 9)


def baseline_json(figures: BaselineFigures | None, zone: ZoneInfo) -> dict[str, Any] | None:
    """Return the contract's BASELINE object; ``to`` is the last day or moment that belongs to it."""
    if figures is None:
        return None
    end = figures.end_us - 1 if figures.source == "dated" and figures.end_us is not None else figures.end_us
    return {
        "events": _count(figures.events), "exposure": _count(figures.exposure), "rate": _round(figures.rate),
        "low": _round(figures.low), "high": _round(figures.high), "confidence": figures.confidence,
        "from": iso(figures.start_us, zone), "to": iso(end, zone), "source": figures.source, "dispersion": _round(figures.index, 4),
        "warnings": [{"code": w.code, "text": w.text} for w in figures.warnings],
    }  # fmt: skip


def _ratio(ratio: Ratio) -> dict[str, Any]:
    return {"estimate": _round(ratio.estimate, 4), "low": _round(ratio.low, 4), "high": _round(ratio.high, 4)}


def evidence_json(
    config: Config, name: str, signal: Signal, keys: Sequence[Mapping[str, str]], summary: str
) -> dict[str, Any]:
    """Return the contract's ALERT object without id and state."""
    zone = config.zone
    began = signal.began
    rate = signal.since_events / signal.since_exposure if signal.since_exposure > 0 else None
    return {
        "stream": name, "direction": signal.direction, "raised_at": iso(signal.raised_us, zone), "as_of": iso(signal.as_of_us, zone),
        "shift_began": {
            "estimate": iso(began.estimate_us, zone), "earliest": iso(began.earliest_us, zone),
            "latest": iso(began.latest_us, zone), "exposure_at": _count(began.exposure_at),
            "exposure_earliest": _count(began.exposure_earliest), "exposure_latest": _count(began.exposure_latest),
        },
        "rules": [
            {"rule": h.rule, "design_ratio": _round(h.design_ratio, 4), "statistic": _round(h.statistic), "limit": _round(h.limit)}
            for h in signal.hits
        ],
        "baseline": baseline_json(signal.baseline, zone),
        "since": {"events": signal.since_events, "exposure": _count(signal.since_exposure), "rate": _round(rate)},
        "rate_ratio": {**_ratio(signal.ratio), "confidence": signal.ratio.confidence, "uncorrected": _ratio(signal.uncorrected)},
        "recurrence_years": _round(signal.recurrence_years, 3), "recurrence_capped": signal.recurrence_capped,
        "exposure_unit": config.streams[name].exposure, "look_first": [], "looked_at": None, "records": [dict(k) for k in keys],
        "eased": signal.eased, "updates": signal.updates, "summary": summary,
    }  # fmt: skip


def status_json(
    config: Config, name: str, assessment: Assessment, *, standing: str, last_event_us: int | None, alert: str | None,
    ahead: int, notes: Sequence[str],
) -> dict[str, Any]:  # fmt: skip
    """One stream of ``status --json``."""
    stream, zone = config.streams[name], config.zone
    advice = [{"code": c.code, "text": c.text} for c in assessment.cautions]
    if assessment.baseline is not None:
        advice += [{"code": w.code, "text": w.text} for w in assessment.baseline.warnings]
    return {
        "stream": name, "title": stream.title, "form": stream.form, "exposure_unit": stream.exposure, "standing": standing,
        "events": assessment.events, "exposure": _count(assessment.exposure), "open_gap": _count(assessment.open_gap),
        "mean_gap": _round(assessment.mean_gap), "baseline": baseline_json(assessment.baseline, zone),
        "last_event": iso(last_event_us, zone), "alert": alert, "advice": advice, "level": _round(assessment.level, 3),
        "ahead": ahead, "notes": list(notes),
    }  # fmt: skip
