"""The daemon: passes and digests on schedule until told to stop; the only other place that reads the clock."""

from __future__ import annotations

import logging
import os
import signal
import socket
import threading
import time
from collections.abc import Callable
from datetime import datetime
from typing import Any

from watcher.commands import real_clock
from watcher.config import Config
from watcher.cycle import run_cycle
from watcher.digesting import last_due, period_of, send_digest
from watcher.leasing import DAEMON, TTL_S, LeaseHeldError, holding, note_standby, owner
from watcher.notify.deliver import deliver_due
from watcher.store import LeaseLostError, Store, StoreError
from watcher.store.lease import Lease, hold, release, renew
from watcher.store.outbox import last_digest, note_digest

__all__ = ["one_pass", "watch"]

_LOG = logging.getLogger(__name__)
Clock = Callable[[], datetime]
_RENEW_S = 15.0
_STANDBY_S = 10.0
_WAIT_S = 60.0
"""How long a pass waits for somebody who takes or settles an alert just now."""


def one_pass(config: Config, store: Store, clock: Clock) -> None:
    """Make a pass, then any digest that is due; everything that goes wrong is logged and tried again next time."""
    try:
        with holding(store, clock, wait_s=_WAIT_S):
            now = clock().astimezone(config.zone)
            _first_period(config, store, now)
            report = run_cycle(config, store, now=now, clock=clock)
            _LOG.info(
                "Pass: %d raised, %d updated, %d withdrawn, %d delivered, %d waiting",
                len(report.changes.raised),
                len(report.changes.updated),
                len(report.changes.withdrawn),
                report.delivered,
                report.waiting,
            )
            if send_digest(config, store, now=now):
                _LOG.info("The digest is on its way")
                deliver_due(config, store, now=now, clock=clock)
    except LeaseHeldError as error:
        _LOG.info("This pass is left out: %s", error)
    except StoreError as error:
        _LOG.error("The pass could not be finished: %s", error)
    except Exception:  # noqa: BLE001 - the daemon's own boundary: a watcher that dies silently is worse than none
        _LOG.exception("The pass failed")


def _first_period(config: Config, store: Store, now: datetime) -> None:
    """On a new store the digest of a week nobody watched is not sent."""
    with store.writing() as conn:
        if last_digest(conn) is None and last_due(config, now) is not None:
            note_digest(conn, period_of(config, now), round(now.timestamp() * 1e6))


def watch(config: Config, clock: Clock = real_clock, stop: threading.Event | None = None) -> int:
    """Stay until SIGTERM or SIGINT; returns the exit status.

    One watcher of a store is active. Another one stands by and takes over when the active one ends: at once
    on the same host, else when its lease ends.
    """
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
        _tell_systemd("READY=1")
        while not stop.is_set():
            lease = _become_active(store, clock)
            if lease is None:
                _tell_systemd("WATCHDOG=1")
                stop.wait(_STANDBY_S)
                continue
            try:
                _stay_active(config, store, lease, clock, stop)
            finally:
                _give_back(store, lease)
        _tell_systemd("STOPPING=1")
    _LOG.info("Stopped")
    return 0


def _become_active(store: Store, clock: Clock) -> Lease | None:
    try:
        lease = hold(store, owner=owner(clock()), now_us=_us(clock()), ttl_s=TTL_S, name=DAEMON)
        note_standby(store, clock, over=lease is not None)
    except StoreError as error:
        _LOG.error("The store cannot be used just now: %s", error)
        return None
    if lease is None:
        _LOG.info("Standing by: another watcher is active")
    return lease


def _give_back(store: Store, lease: Lease) -> None:
    try:
        release(store, lease)
    except StoreError as error:
        _LOG.warning("The lease could not be given back: %s", error)


def _schedule(config: Config, store: Store, clock: Clock) -> Any:
    """Return the scheduler, not yet started, with what was missed while the watcher was down due at once."""
    from apscheduler.executors.pool import ThreadPoolExecutor
    from apscheduler.schedulers.background import BackgroundScheduler
    from apscheduler.triggers.cron import CronTrigger

    # in memory only, made anew from the configuration at each start; one thread, so that passes never overlap
    scheduler = BackgroundScheduler(timezone=config.zone, executors={"default": ThreadPoolExecutor(1)})
    how = {"args": (config, store, clock), "coalesce": True, "max_instances": 1}
    for name, line in (("collect", config.schedule.collect), ("digest", config.schedule.digest)):
        # no grace limit: a machine asleep for a week makes one pass when it wakes, not none and not hundreds
        trigger = CronTrigger.from_crontab(line, timezone=config.zone)
        job = scheduler.add_job(one_pass, trigger, id=name, misfire_grace_time=None, **how)
        if name == "collect":  # the first pass is made at once
            job.modify(next_run_time=datetime.now(config.zone))
    return scheduler


def _stay_active(config: Config, store: Store, lease: Lease, clock: Clock, stop: threading.Event) -> None:
    """Run the schedule until told to stop or until the lease is lost."""
    scheduler = _schedule(config, store, clock)
    scheduler.start()
    _LOG.info("Watching %d streams of %s", len(config.streams), config.plant.name)
    try:
        renewed = time.monotonic()
        while not stop.wait(0.5):
            if time.monotonic() - renewed < _RENEW_S:
                continue
            if not _renew(store, lease, clock):
                _LOG.warning("Another watcher took over while this one was held up; standing by")
                return
            renewed = time.monotonic()
            _tell_systemd("WATCHDOG=1")
    finally:
        scheduler.shutdown(wait=True)


def _renew(store: Store, lease: Lease, clock: Clock) -> bool:
    try:
        return renew(store, lease, now_us=_us(clock()), ttl_s=TTL_S)
    except LeaseLostError:
        return True  # the writing lease of a pass was lost, not this one
    except StoreError as error:
        _LOG.warning("The lease could not be renewed: %s", error)
        return True


def _us(moment: datetime) -> int:
    return round(moment.timestamp() * 1e6)


def _tell_systemd(state: str) -> None:
    """Tell the service manager, where there is one (sd_notify: a datagram to the socket that it names)."""
    address = os.environ.get("NOTIFY_SOCKET")
    if not address:
        return
    if address.startswith("@"):
        address = "\0" + address[1:]
    try:
        with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as out:
            out.sendto(state.encode("ascii"), address)
    except OSError as error:
        _LOG.warning("The service manager cannot be told: %s", error)
