"""One active watcher per store: a lease with an end, and a number that fences off whoever lost it."""

from __future__ import annotations

import json
import os
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import sqlalchemy as sa

from watcher.store import schema as s
from watcher.store.engine import Store

__all__ = ["Lease", "hold", "holder", "release", "renew"]

_NAME = "watcher"


@dataclass(frozen=True, slots=True)
class Lease:
    """A held lease; ``token`` grows with every holder."""

    token: int
    owner: dict[str, Any]


def process_start(pid: int) -> str | None:
    """Tell processes of one number apart by when they started; None where the system does not say."""
    try:
        return Path(f"/proc/{pid}/stat").read_text(encoding="ascii").rsplit(")", 1)[1].split()[19]
    except (OSError, IndexError):
        return None


def _is_dead(owner: dict[str, Any], host: str) -> bool:
    """Whether the holder was a process of this host that no longer runs."""
    if owner.get("host") != host:
        return False
    pid = int(owner.get("pid", 0))
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return True
    except PermissionError:
        return False
    started = process_start(pid)
    return started is not None and owner.get("started") is not None and started != owner["started"]


def holder(conn: sa.Connection, now_us: int) -> dict[str, Any] | None:
    """Return who holds the lease now, if anybody."""
    row = conn.execute(sa.select(s.lease).where(s.lease.c.name == _NAME)).mappings().first()
    if row is None or row["expires_us"] <= now_us:
        return None
    return dict(json.loads(row["owner"]))


def hold(store: Store, *, owner: dict[str, Any], now_us: int, ttl_s: float = 60.0) -> Lease | None:
    """Take the lease; None when another living watcher has it."""
    with store.writing() as conn:
        row = conn.execute(sa.select(s.lease).where(s.lease.c.name == _NAME)).mappings().first()
        token = 1
        if row is not None:
            other = json.loads(row["owner"])
            if row["expires_us"] > now_us and not _is_dead(other, owner["host"]):
                return None
            token = row["token"] + 1
            conn.execute(sa.delete(s.lease).where(s.lease.c.name == _NAME))
        expires = now_us + int(ttl_s * 1e6)
        conn.execute(
            sa.insert(s.lease).values(name=_NAME, owner=json.dumps(owner), token=token, expires_us=expires)
        )
        return Lease(token, owner)


def renew(store: Store, lease: Lease, *, now_us: int, ttl_s: float = 60.0) -> bool:
    """Hold on; False when it was lost."""
    with store.writing() as conn:
        done = conn.execute(
            sa.update(s.lease).where((s.lease.c.name == _NAME) & (s.lease.c.token == lease.token))
            .values(expires_us=now_us + int(ttl_s * 1e6))
        )  # fmt: skip
        return done.rowcount == 1


def release(store: Store, lease: Lease) -> None:
    """Give it back; the row stays, so that tokens go on growing."""
    with store.writing() as conn:
        conn.execute(
            sa.update(s.lease)
            .where((s.lease.c.name == _NAME) & (s.lease.c.token == lease.token))
            .values(expires_us=0)
        )
