"""The daemon: passes and digests on schedule until told to stop; the only other place that reads the clock."""

from __future__ import annotations

import logging
import signal
import threading
from collections.abc import Callable
from datetime import datetime
from typing import Any

from watcher.commands import real_clock
from watcher.config import Config
from watcher.cycle import run_cycle
from watcher.digesting import last_due, send_digest
from watcher.leasing import LeaseHeldError, holding
from watcher.store import Store, StoreError
from watcher.store.outbox import last_digest, note_digest

__all__ = ["one_pass", "watch"]

_LOG = logging.getLogger(__name__)
_LATE_S = 3600 * 24 * 8
"""A late run still counts: a machine asleep for a week makes one pass, not none and not hundreds."""


def one_pass(config: Config, store: Store, clock: Callable[[], datetime]) -> None:
    """Make a pass, then any digest that is due; everything that goes wrong is logged and tried again next time."""
    try:
        with holding(store, clock):
            now = clock().astimezone(config.zone)
            _first_period(config, store, now)
            # the digest is put out before the pass, which then delivers it
            if send_digest(config, store, now=now):
                _LOG.info("The digest is on its way")
            report = run_cycle(config, store, now=now, clock=clock)
            _LOG.info(
                "Pass: %d raised, %d delivered, %d waiting",
                len(report.changes.raised),
                report.delivered,
                report.waiting,
            )
    except LeaseHeldError as error:
        _LOG.info("Standing by: %s", error)
    except StoreError as error:
        _LOG.error("The pass could not be finished: %s", error)
    except Exception:  # noqa: BLE001 - the daemon's own boundary: a watcher that dies silently is worse than none
        _LOG.exception("The pass failed")


def _first_period(config: Config, store: Store, now: datetime) -> None:
    """On a new store the digest of a week nobody watched is not sent."""
    with store.writing() as conn:
        due = last_due(config, now)
        if last_digest(conn) is None and due is not None:
            period = due.astimezone(config.zone).isoformat(timespec="minutes")
            note_digest(conn, period, round(now.timestamp() * 1e6))


def watch(
    config: Config, clock: Callable[[], datetime] = real_clock, stop: threading.Event | None = None
) -> int:
    """Stay until SIGTERM or SIGINT; returns the exit status."""
    from apscheduler.schedulers.background import BackgroundScheduler
    from apscheduler.triggers.cron import CronTrigger

    stop = stop or threading.Event()
    if threading.current_thread() is threading.main_thread():

        def on_signal(number: int, _frame: Any) -> None:
            _LOG.info("Stopping on %s", signal.Signals(number).name)
            stop.set()

        signal.signal(signal.SIGTERM, on_signal)
        signal.signal(signal.SIGINT, on_signal)
    for line in config.later:
        _LOG.warning("%s", line)
    with Store.open(config.store_url) as store:
        # in memory only, made anew from the configuration at each start; late and missed runs merge into one
        scheduler = BackgroundScheduler(timezone=config.zone)
        for name, line in (("collect", config.schedule.collect), ("digest", config.schedule.digest)):
            scheduler.add_job(
                one_pass, CronTrigger.from_crontab(line, timezone=config.zone), args=(config, store, clock), id=name,
                misfire_grace_time=_LATE_S, coalesce=True, max_instances=1,
            )  # fmt: skip
        one_pass(config, store, clock)
        scheduler.start()
        _LOG.info("Watching %d streams of %s", len(config.streams), config.plant.name)
        try:
            while not stop.wait(1.0):
                pass
        finally:
            scheduler.shutdown(wait=True)
    _LOG.info("Stopped")
    return 0
