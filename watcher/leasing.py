"""Holding the lease while something is written; one active watcher per store."""

from __future__ import annotations

import logging
import os
import socket
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from datetime import datetime
from typing import Any

import sqlalchemy as sa

from watcher.store import LeaseLostError, Store, StoreError
from watcher.store.lease import Lease, hold, holder, is_held, process_start, release, renew
from watcher.store.outbox import note_notice, notice_state, notices_in

__all__ = ["DAEMON", "LeaseHeldError", "active", "holding", "note_standby", "owner", "standbys"]

_LOG = logging.getLogger(__name__)
DAEMON = "daemon"
"""Lease of a watcher that stays; the other one is held by whoever writes, for as long as that takes."""
TTL_S = 60.0
_RENEW_S = 15.0
Clock = Callable[[], datetime]


class LeaseHeldError(Exception):
    """Another watcher is active on this store."""

    def __init__(self, other: dict[str, Any]) -> None:
        super().__init__(
            f"Another watcher is active on this store: host {other.get('host')}, process {other.get('pid')},"
            f" since {other.get('since')}."
        )


def _us(moment: datetime) -> int:
    return round(moment.timestamp() * 1e6)


def owner(now: datetime) -> dict[str, Any]:
    """Say who we are."""
    pid = os.getpid()
    return {
        "host": socket.gethostname(), "pid": pid, "started": process_start(pid), "since": now.isoformat(timespec="seconds"),
    }  # fmt: skip


def active(store: Store, clock: Clock) -> dict[str, Any] | None:
    """Return the living watcher of this store: one that stays, else one that is writing just now."""
    now_us, host = _us(clock()), socket.gethostname()
    with store.reading() as conn:
        return holder(conn, now_us, host=host, name=DAEMON) or holder(conn, now_us, host=host)


@contextmanager
def holding(store: Store, clock: Clock, *, alone: bool = False, wait_s: float = 0.0) -> Iterator[Lease]:
    """Hold the writing lease for a block; it is renewed meanwhile, and whoever lost it writes nothing any more.

    Parameters
    ----------
    alone : bool
        Give way to a watcher that stays, even while it rests.
    wait_s : float
        How long to wait for another that is writing just now.

    Raises
    ------
    LeaseHeldError
        Naming who is active.
    """
    lease = _take(store, clock, alone=alone, wait_s=wait_s)
    done = threading.Event()
    keeper = threading.Thread(target=_keep, args=(store, lease, clock, done), daemon=True)

    def fence(conn: sa.Connection) -> None:
        if not is_held(conn, lease):
            raise LeaseLostError(
                "Another watcher took over meanwhile; this pass stops here, the other goes on."
            )

    keeper.start()
    store.fence = fence
    try:
        yield lease
    finally:
        done.set()
        keeper.join()
        store.fence = None
        release(store, lease)


def _take(store: Store, clock: Clock, *, alone: bool, wait_s: float) -> Lease:
    until = time.monotonic() + wait_s
    me = owner(clock())
    while True:
        if alone:
            with store.reading() as conn:
                other = holder(conn, _us(clock()), host=me["host"], name=DAEMON)
            if other is not None:
                raise LeaseHeldError(other)
        lease = hold(store, owner=me, now_us=_us(clock()), ttl_s=TTL_S)
        if lease is not None:
            return lease
        if time.monotonic() >= until:
            raise LeaseHeldError(active(store, clock) or {})
        time.sleep(0.1)


def _keep(store: Store, lease: Lease, clock: Clock, done: threading.Event) -> None:
    """Renew the lease until the work is done; a renewal that fails is tried again until the lease has ended."""
    while not done.wait(_RENEW_S):
        try:
            if not renew(store, lease, now_us=_us(clock()), ttl_s=TTL_S):
                return
        except LeaseLostError:
            return
        except StoreError as error:
            _LOG.warning("The lease could not be renewed: %s", error)


def note_standby(store: Store, clock: Clock, *, over: bool = False) -> None:
    """Note that this watcher stands by, ready to take over; it is forgotten when it no longer says so."""
    me = owner(clock())
    with store.writing() as conn:
        note_notice(conn, f"standby {me['host']} {me['pid']}", "over" if over else "standby", _us(clock()))


def standbys(conn: sa.Connection, now_us: int) -> list[dict[str, Any]]:
    """Return the watchers that stand by."""
    out = []
    for subject in sorted(notices_in(conn, "standby")):
        found = notice_state(conn, subject)
        if subject.startswith("standby ") and found is not None and now_us - found[1] < TTL_S * 1e6:
            _, host, pid = subject.split(" ")
            out.append({"host": host, "pid": int(pid)})
    return out
