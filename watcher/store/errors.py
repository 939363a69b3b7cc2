"""What can go wrong with the store, each in one sentence."""

from __future__ import annotations

__all__ = [
    "AlertStateError",
    "LeaseLostError",
    "StoreBusyError",
    "StoreError",
    "StoreNewerError",
    "StoreUnusableError",
    "translated",
]

from collections.abc import Iterator
from contextlib import contextmanager

from sqlalchemy.exc import DatabaseError, SQLAlchemyError


class StoreError(Exception):
    """Base of every error that leaves the store."""


class StoreBusyError(StoreError):
    """Another process holds the store; the next pass tries again."""


class StoreUnusableError(StoreError):
    """The store cannot be opened, read or written."""


class StoreNewerError(StoreError):
    """The store was written by a newer version."""


class LeaseLostError(StoreError):
    """Another watcher took over while this one was held up; what it was about to write is left to the other."""


class AlertStateError(StoreError):
    """A step in an alert's life that its state does not allow."""


_CAUSES = (
    ("database is locked", StoreBusyError, "The store is held by another process; nothing was changed, the next pass tries again."),
    ("readonly database", StoreUnusableError, "The store cannot be written: it, or its folder, is read-only."),
    ("read-only", StoreUnusableError, "The store cannot be written: it, or its folder, is read-only."),
    ("disk is full", StoreUnusableError, "The store cannot be written: the disk is full; nothing was left half done."),
    ("disk I/O error", StoreUnusableError, "The store cannot be read or written: the disk reports an error."),
    ("not a database", StoreUnusableError, "The store's file is not a database."),
    ("malformed", StoreUnusableError, "The store's file is damaged; restore it from a backup."),
    ("unable to open", StoreUnusableError, "The store cannot be opened: its folder is missing or closed to this user."),
)  # fmt: skip


@contextmanager
def translated() -> Iterator[None]:
    """Turn the database's errors into ours, once, at the boundary."""
    try:
        yield
    except SQLAlchemyError as error:
        text = str(getattr(error, "orig", None) or error)
        for mark, kind, sentence in _CAUSES:
            if mark in text:
                raise kind(sentence) from error
        if isinstance(error, DatabaseError):
            raise StoreUnusableError(f"The store could not be used: {' '.join(text.split())}.") from error
        raise
