"""Holding the lease while something is written: one active watcher per store."""

from __future__ import annotations

import os
import socket
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from datetime import datetime
from typing import Any

from watcher.store import Store
from watcher.store.lease import Lease, hold, holder, process_start, release

__all__ = ["LeaseHeldError", "holding", "owner"]


class LeaseHeldError(Exception):
    """Another watcher is active on this store."""


def owner(now: datetime) -> dict[str, Any]:
    """Say who we are."""
    pid = os.getpid()
    return {
        "host": socket.gethostname(), "pid": pid, "started": process_start(pid), "since": now.isoformat(timespec="seconds"),
    }  # fmt: skip


@contextmanager
def holding(store: Store, clock: Callable[[], datetime], *, ttl_s: float = 600.0) -> Iterator[Lease]:
    """Hold the lease for a block; raises ``LeaseHeldError`` naming who has it."""
    now = clock()
    lease = hold(store, owner=owner(now), now_us=round(now.timestamp() * 1e6), ttl_s=ttl_s)
    if lease is None:
        with store.reading() as conn:
            other = holder(conn, round(now.timestamp() * 1e6)) or {}
        raise LeaseHeldError(
            f"Another watcher is active on this store: host {other.get('host')}, process {other.get('pid')},"
            f" since {other.get('since')}."
        )
    try:
        yield lease
    finally:
        release(store, lease)
