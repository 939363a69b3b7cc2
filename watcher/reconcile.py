"""Signals against stored alerts: what is raised, what has grown, what lost its evidence."""

from __future__ import annotations

import logging
from collections.abc import Callable, Collection
from dataclasses import dataclass, field
from datetime import datetime
from typing import Any

from rules.model import Assessment, Signal
from watcher import showing
from watcher.building import Built
from watcher.config import Config
from watcher.notify.compose import summary_sentence
from watcher.notify.views import RecordView, StreamView
from watcher.notify.words import clean
from watcher.pictures import alert_pictures
from watcher.places import compared_attributes, places
from watcher.sending import enqueue_alert
from watcher.store import Store
from watcher.store.alerts import Alert, raise_alert, refresh_alert, withdraw_alert
from watcher.store.records import Record, RecordFrame, corrected_since, record_by_ids
from watcher.streams import evidence_json

__all__ = ["Changes", "evidence_of", "reconcile"]

_LOG = logging.getLogger(__name__)
_MOST_NAMED = 5


@dataclass(slots=True)
class Changes:
    """Labels of the alerts that a pass touched."""

    raised: list[str] = field(default_factory=list)
    updated: list[str] = field(default_factory=list)
    withdrawn: list[str] = field(default_factory=list)

    def add(self, other: Changes) -> None:
        """Add another stream's."""
        self.raised += other.raised
        self.updated += other.updated
        self.withdrawn += other.withdrawn


def evidence_of(
    config: Config, view: StreamView, signal: Signal, records: list[Record], attributes: Callable[[], RecordFrame],
    merged: Collection[int] = (),
) -> dict[str, Any]:  # fmt: skip
    """Return the contract's ALERT object of a signal; ``attributes`` loads the source's records with theirs.

    ``merged`` numbers the records that are listed but count with another event of their cluster.
    """
    keys = [showing.shown_key(config, r) for r in records]
    body = evidence_json(config, view.name, signal, keys, "")
    if compared_attributes(config, view.name):
        counting = [r for r in records if r.id not in merged]
        body |= places(config, view.name, signal, counting, attributes())
    body["summary"] = summary_sentence(view, signal.direction, body, showing.plant_view(config))
    return body


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
    attributes: Callable[[], RecordFrame],
) -> Changes:
    """Bring a stream's alerts in line with its assessment, each with its messages in one transaction.

    ``stored`` are the alerts that the assessment was told of, in the order of their raising; ``attributes``
    loads the source's records with their attributes.
    """
    changes = Changes()
    now_us = round(now.timestamp() * 1e6)
    queues = {d: [a for a in stored if a.direction == d] for d in ("worse", "better")}
    for signal in assessment.signals:
        known = queues[signal.direction].pop(0) if queues[signal.direction] else None
        if known is not None and not known.is_open:
            continue
        if known is not None and _is_another_shift(known, signal):
            _withdraw(config, store, known, view, now)
            changes.withdrawn.append(known.label)
            known = None
        with store.reading() as conn:
            numbers, merged = built.records_of(signal.steps)
            records = record_by_ids(conn, numbers)
        evidence = evidence_of(config, view, signal, records, attributes, merged)
        shown = showing.record_views(config, records)
        if known is None:
            pictures = _pictures(view, evidence, signal.direction) if config.recipients_of(name) else []
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


def _is_another_shift(known: Alert, signal: Signal) -> bool:
    """Whether a signal cannot be what an open alert was raised for: it began after that had been raised.

    An update keeps the moment of raising; another one means that corrections took the first evidence away.
    """
    return signal.raised_us != known.raised_us and signal.began.earliest_us > known.raised_us


def _pictures(view: StreamView, evidence: dict[str, Any], direction: str) -> list[tuple[str, bytes, str]]:
    """Draw the alert; one that cannot be drawn goes out without."""
    try:
        return alert_pictures(view, evidence, direction)
    except Exception:  # noqa: BLE001 - an alert without its picture is better than none
        _LOG.exception("The pictures of stream %s could not be drawn", view.name)
        return []


def _refresh(
    config: Config, store: Store, known: Alert, evidence: dict[str, Any], signal: Signal, *, view: StreamView,
    shown: list[RecordView], now: datetime,
) -> bool:  # fmt: skip
    """Replace an open alert's evidence; a message goes out only when it really grew."""
    now_us = round(now.timestamp() * 1e6)
    grown = bool(evidence["updates"] > known.evidence.get("updates", 0))
    eased = evidence["eased"] and not known.evidence.get("eased")
    what = "updated" if grown else "eased" if eased else "corrected"
    pictures = _pictures(view, evidence, signal.direction) if grown else []
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
        keys = [showing.shown_key(config, r) for r in corrected]
        rested_on = [k for k in keys if k in alert.evidence["records"]]
        keys = rested_on or keys
        names = ", ".join(clean(" ".join(k.values())) for k in keys[:_MOST_NAMED])
        more = f" and {len(keys) - _MOST_NAMED} more" if len(keys) > _MOST_NAMED else ""
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
