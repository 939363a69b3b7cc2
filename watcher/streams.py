"""Between the rules and the outside: a stream's plan from its settings, its assessment as the contract's JSON."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping, Sequence
from datetime import UTC, datetime
from typing import Any
from zoneinfo import ZoneInfo

import numpy as np

from rules import protocol
from rules.model import (
    Assessment,
    BaselineFigures,
    BaselinePlan,
    Plan,
    Ratio,
    Settled,
    Signal,
)
from watcher.building import COUNTED
from watcher.config import Config
from watcher.config.values import Span, day_end_us, day_start_us
from watcher.store.alerts import Alert

__all__ = [
    "baseline_json", "evidence_json", "inputs_of", "iso", "plan_for", "settled_of", "status_json",
]  # fmt: skip


def iso(time_us: int | None, zone: ZoneInfo) -> str | None:
    """RFC 3339 in plant time, or None."""
    if time_us is None:
        return None
    return datetime.fromtimestamp(time_us / 1e6, UTC).astimezone(zone).isoformat(timespec="seconds")


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
    version: int | tuple[int, int],
    alive_us: int | None,
    alerts: Sequence[Alert],
    ahead_of: int | None,
) -> str:
    """Fingerprint of everything an assessment depends on; equal inputs need no second assessment."""
    stream = config.streams[name]
    timed = stream.exposure not in COUNTED or stream.production is not None or stream.locate == "unit"
    lag = None if stream.production is None else stream.production.lag
    spans = [s for s in (stream.cluster, stream.mature_after, lag) if isinstance(s, Span)]
    worked = stream.exposure not in COUNTED or any(s.unit == "workdays" for s in spans)
    parts = [
        stream.model_dump(mode="json", exclude={"title", "reaction_plan", "notify", "share", "express_per", "exposure_name", "safety"}),
        config.calendar.model_dump(mode="json") if worked else None,
        config.stream_share(name), version, alive_us if timed else None, ahead_of,
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
