"""Signals against stored alerts: what is raised, what has grown, what lost its evidence."""

from __future__ import annotations

from dataclasses import dataclass, field
from datetime import datetime
from typing import Any

import sqlalchemy as sa

from rules.model import Assessment, Signal
from watcher import showing
from watcher.config import Config
from watcher.notify.compose import summary_sentence
from watcher.notify.views import RecordView, StreamView
from watcher.pictures import alert_pictures
from watcher.sending import enqueue_alert
from watcher.store import Store
from watcher.store.alerts import Alert, raise_alert, refresh_alert, withdraw_alert
from watcher.store.records import Record, corrected_since, record_by_ids
from watcher.streams import Built, evidence_json

__all__ = ["Changes", "evidence_of", "reconcile"]


@dataclass(slots=True)
class Changes:
    """Labels of the alerts that a pass touched."""

    raised: list[str] = field(default_factory=list)
    updated: list[str] = field(default_factory=list)
    withdrawn: list[str] = field(default_factory=list)


def evidence_of(
    config: Config, view: StreamView, signal: Signal, records: list[Record]
) -> dict[str, Any]:  # fmt: skip
    """Return the contract's ALERT object of a signal."""
    keys = [r.key for r in records]
    body = evidence_json(config, view.name, signal, keys, "")
    body["summary"] = summary_sentence(view, signal.direction, body, showing.plant_view(config))
    return body


def _records(conn: sa.Connection, built: Built, signal: Signal) -> list[Record]:
    ids = [int(built.record_ids[i]) for i in signal.steps if built.record_ids[i] >= 0]
    return record_by_ids(conn, ids)


def reconcile(
    config: Config,
    store: Store,
    name: str,
    *,
    built: Built,
    assessment: Assessment,
    view: StreamView,
    stored: list[Alert],
    now: datetime,
) -> Changes:
    """Bring a stream's alerts in line with its assessment, each with its messages in one transaction."""
    changes = Changes()
    now_us = round(now.timestamp() * 1e6)
    queues = {
        d: [a for a in stored if a.direction == d and a.state != "withdrawn"] for d in ("worse", "better")
    }
    for signal in assessment.signals:
        known = queues[signal.direction].pop(0) if queues[signal.direction] else None
        if known is not None and not known.is_open:
            continue
        with store.reading() as conn:
            records = _records(conn, built, signal)
        evidence = evidence_of(config, view, signal, records)
        shown = showing.record_views(config, records)
        if known is None:
            pictures = alert_pictures(view, evidence, signal.direction) if config.recipients_of(name) else []
            with store.writing() as conn:
                alert = raise_alert(
                    conn, name, signal.direction, evidence, raised_us=signal.raised_us, noticed_us=now_us
                )
                enqueue_alert(
                    conn, config, alert, showing.alert_view(view, alert, shown), kind="alert", suffix="raised", now=now,
                    pictures=pictures,
                )  # fmt: skip
            changes.raised.append(alert.label)
        elif known.evidence != evidence:
            if _refresh(config, store, known, evidence, signal, view=view, shown=shown, now=now):
                changes.updated.append(known.label)
    for left in [*queues["worse"], *queues["better"]]:
        if left.is_open:
            _withdraw(config, store, left, view, now)
            changes.withdrawn.append(left.label)
    return changes


def _refresh(
    config: Config, store: Store, known: Alert, evidence: dict[str, Any], signal: Signal, *, view: StreamView,
    shown: list[RecordView], now: datetime,
) -> bool:  # fmt: skip
    """Replace an open alert's evidence; a message goes out only when it really grew."""
    now_us = round(now.timestamp() * 1e6)
    grown = bool(evidence["updates"] > known.evidence.get("updates", 0))
    eased = evidence["eased"] and not known.evidence.get("eased")
    what = "updated" if grown else "eased" if eased else "corrected"
    pictures = alert_pictures(view, evidence, signal.direction) if grown else []
    with store.writing() as conn:
        alert = refresh_alert(conn, known.id, evidence, raised_us=signal.raised_us, at_us=now_us, what=what)
        if grown:
            enqueue_alert(
                conn, config, alert, showing.alert_view(view, alert, shown), kind="update", suffix=f"update-{evidence['updates']}",
                now=now, pictures=pictures,
            )  # fmt: skip
    return grown


def _withdraw(config: Config, store: Store, alert: Alert, view: StreamView, now: datetime) -> None:
    with store.reading() as conn:
        corrected = corrected_since(conn, config.streams[alert.stream].source, alert.noticed_us)
    why = "the records that it rested on were corrected or added to, and its evidence is gone."
    if corrected:
        names = ", ".join(" ".join(r.key.values()) for r in corrected[:5])
        more = f" and {len(corrected) - 5} more" if len(corrected) > 5 else ""
        why = f"records were corrected since ({names}{more}), and without them its evidence is gone."
    elif view.data["standing"] == "learning":
        why = "its baseline was set anew, and the evidence is judged from there."
    with store.writing() as conn:
        done = withdraw_alert(conn, alert.id, at_us=round(now.timestamp() * 1e6), why=why)
        enqueue_alert(
            conn,
            config,
            done,
            showing.alert_view(view, done, what_changed=why),
            kind="withdrawal",
            suffix="withdrawn",
            now=now,
        )
