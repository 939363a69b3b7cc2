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

__all__ = ["Lease", "hold", "holder", "is_held", "release", "renew"]

_NAME = "watcher"


@dataclass(frozen=True, slots=True)
class Lease:
    """A held lease; ``token`` grows with every holder."""

    token: int
    owner: dict[str, Any]
    name: str = _NAME


def process_start(pid: int) -> str | None:
    """Tell processes of one number apart by when they started; None where the system does not say."""
    try:
        return Path(f"/proc/{pid}/stat").read_text(encoding="ascii").rsplit(")", 1)[1].split()[19]
    except (OSError, IndexError):
        return None


def _is_unburied(pid: int) -> bool:
    """Whether a process has ended and only its parent has not asked for it yet (state Z or X in /proc)."""
    try:
        return Path(f"/proc/{pid}/stat").read_text(encoding="ascii").rsplit(")", 1)[1].split()[0] in {
            "Z",
            "X",
        }
    except (OSError, IndexError):
        return False


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
    if _is_unburied(pid):
        return True
    started = process_start(pid)
    return started is not None and owner.get("started") is not None and started != owner["started"]


def holder(
    conn: sa.Connection, now_us: int, *, host: str | None = None, name: str = _NAME
) -> dict[str, Any] | None:
    """Return who holds the lease now, if anybody; a holder that died on ``host`` holds nothing."""
    row = conn.execute(sa.select(s.lease).where(s.lease.c.name == name)).mappings().first()
    if row is None or row["expires_us"] <= now_us:
        return None
    owner = dict(json.loads(row["owner"]))
    return None if host is not None and _is_dead(owner, host) else owner


def is_held(conn: sa.Connection, lease: Lease) -> bool:
    """Whether nobody else has taken the lease since, whatever the clocks say."""
    token = conn.execute(sa.select(s.lease.c.token).where(s.lease.c.name == lease.name)).scalar()
    return token == lease.token


def hold(
    store: Store, *, owner: dict[str, Any], now_us: int, ttl_s: float = 60.0, name: str = _NAME
) -> Lease | None:
    """Take the lease; None when another living watcher has it."""
    with store.writing() as conn:
        row = conn.execute(sa.select(s.lease).where(s.lease.c.name == name)).mappings().first()
        token = 1
        if row is not None:
            other = json.loads(row["owner"])
            if row["expires_us"] > now_us and not _is_dead(other, owner["host"]):
                return None
            token = row["token"] + 1
            conn.execute(sa.delete(s.lease).where(s.lease.c.name == name))
        expires = now_us + int(ttl_s * 1e6)
        conn.execute(
            sa.insert(s.lease).values(name=name, owner=json.dumps(owner), token=token, expires_us=expires)
        )
        return Lease(token, owner, name)


def renew(store: Store, lease: Lease, *, now_us: int, ttl_s: float = 60.0) -> bool:
    """Hold on; False when it was lost."""
    with store.writing() as conn:
        done = conn.execute(
            sa.update(s.lease).where((s.lease.c.name == lease.name) & (s.lease.c.token == lease.token))
            .values(expires_us=now_us + int(ttl_s * 1e6))
        )  # fmt: skip
        return done.rowcount == 1


def release(store: Store, lease: Lease) -> None:
    """Give it back; the row stays, so that tokens go on growing."""
    with store.writing() as conn:
        conn.execute(
            sa.update(s.lease)
            .where((s.lease.c.name == lease.name) & (s.lease.c.token == lease.token))
            .values(expires_us=0)
        )
