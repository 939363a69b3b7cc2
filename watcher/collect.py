"""Collecting: every source is asked for what is new, and one that fails never stops the others."""

from __future__ import annotations

import logging
from collections.abc import Collection
from dataclasses import asdict, dataclass, field
from datetime import datetime
from typing import Any

from connectors import open_source
from connectors.base import ConnectorError
from watcher.config import Config
from watcher.store import Store, StoreError
from watcher.store.intake import Counts, take_in
from watcher.store.records import drops_seen, forget_drops, note_contact, note_fingerprint

__all__ = ["SourceReport", "collect"]

_LOG = logging.getLogger(__name__)


@dataclass(slots=True)
class SourceReport:
    """What one source brought."""

    source: str
    files: int = 0
    counts: Counts = field(default_factory=Counts)
    error: str | None = None

    def as_json(self) -> dict[str, Any]:
        """Return the contract's object."""
        return {"source": self.source, "files": self.files, **asdict(self.counts), "error": self.error}


def collect(
    config: Config, store: Store, *, now: datetime, only: Collection[str] | None = None
) -> list[SourceReport]:
    """Ask every source (or ``only`` some); troubles are noted in its report and in ``status``."""
    reports = []
    for name in config.sources if only is None else only:
        report = SourceReport(name)
        try:
            _collect_one(config, store, name, report, now)
        except StoreError:
            raise
        except ConnectorError as error:
            report.error = str(error)
            _LOG.warning("Source %s: %s", name, error)
        except Exception as error:  # noqa: BLE001 - the one boundary of a source: the others go on
            report.error = f"Unexpected {type(error).__name__}; see the log."
            _LOG.exception("Source %s failed", name)
        with store.writing() as conn:
            note_contact(conn, name, round(now.timestamp() * 1e6), report.error)
        reports.append(report)
    return reports


def _collect_one(config: Config, store: Store, name: str, report: SourceReport, now: datetime) -> None:
    if config.sources[name].kind != "csv-drop":
        raise ConnectorError(f'Kind "{config.sources[name].kind}" is not yet available in this version.')
    with store.writing() as conn:
        if note_fingerprint(conn, name, config.reading_fingerprint(name)):
            _LOG.warning("Source %s is understood differently now; its files are read again", name)
            forget_drops(conn, name)
    with store.reading() as conn:
        seen = drops_seen(conn, name)
    now_us = round(now.timestamp() * 1e6)
    for delivery in open_source(config.source_settings(name)).deliveries(seen, now):
        counts = take_in(store, name, delivery, now_us=now_us)
        report.files += 1
        report.counts.add(counts)
        if delivery.refusal is not None:
            _LOG.warning("Source %s refused %s: %s", name, delivery.file, delivery.refusal.reason)
        elif counts.rows:
            _LOG.info("Source %s read %s: %s", name, delivery.file, counts)
