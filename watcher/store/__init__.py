"""What gapbell remembers: records, alerts, baselines, the outbox; in SQLite or PostgreSQL."""

from __future__ import annotations

from watcher.store.engine import Store
from watcher.store.errors import (
    AlertStateError,
    LeaseLostError,
    StoreBusyError,
    StoreError,
    StoreNewerError,
    StoreUnusableError,
)

__all__ = [
    "AlertStateError",
    "LeaseLostError",
    "Store",
    "StoreBusyError",
    "StoreError",
    "StoreNewerError",
    "StoreUnusableError",
]
