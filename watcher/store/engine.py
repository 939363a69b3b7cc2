"""Opening the store: SQLite or PostgreSQL, migrated, with writers that wait for each other."""

from __future__ import annotations

import os
import shutil
import sqlite3
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any, Self

import numpy as np
import sqlalchemy as sa

from watcher.store.errors import StoreNewerError, StoreUnusableError, translated

__all__ = ["SCHEMA_VERSION", "Store"]

SCHEMA_VERSION = "0001"
_KNOWN_VERSIONS = ("0001",)
_BUSY_MS = 15_000

sqlite3.register_adapter(np.int64, int)  # without it SQLite would store eight raw bytes


class Store:
    """A migrated store; every function of this package takes one of its connections."""

    def __init__(self, engine: sa.Engine) -> None:
        self.engine = engine
        self.fence: Callable[[sa.Connection], None] | None = None
        """Asked at the start of every writing transaction; raises when this process may no longer write."""

    @classmethod
    def open(cls, url: str) -> Store:
        """Open, and migrate if need be; raises ``StoreError``."""
        try:
            target = sa.make_url(url)
        except sa.exc.ArgumentError as error:
            raise StoreUnusableError(
                "The store's address is not understood; sqlite:///FILE or postgresql+psycopg://… was expected."
            ) from error
        path = Path(target.database) if target.get_backend_name() == "sqlite" and target.database else None
        if path is not None and str(path) != ":memory:":
            _touch_private(path)
        try:
            engine = _make_engine(target)
        except (ImportError, sa.exc.NoSuchModuleError) as error:
            kind = target.get_backend_name()
            raise StoreUnusableError(
                f"The store's kind {kind} cannot be used: its driver is not installed."
            ) from error
        store = cls(engine)
        try:
            with translated():
                store._migrate(path)
        except BaseException:
            engine.dispose()
            raise
        return store

    def close(self) -> None:
        """Give up every connection."""
        self.engine.dispose()

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    @contextmanager
    def reading(self) -> Iterator[sa.Connection]:
        """Connection that sees one consistent state and changes nothing."""
        with translated(), self.engine.connect() as plain:
            level = "REPEATABLE READ" if plain.dialect.name == "postgresql" else None
            conn = plain.execution_options(isolation_level=level) if level else plain
            yield conn
            conn.rollback()

    @contextmanager
    def writing(self) -> Iterator[sa.Connection]:
        """Connection in one transaction; the lock is taken at its start, so that it cannot fail half-way."""
        with translated(), self.engine.connect().execution_options(gapbell_write=True) as conn, conn.begin():
            _wait_for_writers(conn)
            if self.fence is not None:
                self.fence(conn)
            yield conn

    def _migrate(self, path: Path | None) -> None:
        with self.engine.connect() as conn:
            have = None
            if sa.inspect(conn).has_table("alembic_version"):
                have = conn.execute(sa.text("SELECT version_num FROM alembic_version")).scalar()
        if have == SCHEMA_VERSION:
            return
        if have is not None and have not in _KNOWN_VERSIONS:
            raise StoreNewerError(
                f"The store has schema {have}, this version of gapbell knows up to {SCHEMA_VERSION}; upgrade gapbell first."
            )
        if have is not None and path is not None:
            with sqlite3.connect(path) as source, sqlite3.connect(f"{path}.before-{SCHEMA_VERSION}") as copy:
                source.backup(copy)
        from alembic import command
        from alembic.config import Config

        config = Config()
        config.set_main_option(
            "script_location", str(Path(__file__).parent / "migrations").replace("%", "%%")
        )
        with self.engine.connect().execution_options(gapbell_write=True) as conn, conn.begin():
            _wait_for_writers(conn)
            config.attributes["connection"] = conn
            command.upgrade(config, "head")


def _wait_for_writers(conn: sa.Connection) -> None:
    """Let one writer in at a time on PostgreSQL too; SQLite's BEGIN IMMEDIATE does the same."""
    if conn.dialect.name == "postgresql":
        conn.exec_driver_sql("SELECT pg_advisory_xact_lock(7260417)")


def _touch_private(path: Path) -> None:
    """Create the file readable by its owner alone; SQLite gives its helpers the same mode."""
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        if not path.exists():
            os.close(os.open(path, os.O_CREAT | os.O_RDWR, 0o600))
        elif path.stat().st_uid == os.getuid() and path.stat().st_mode & 0o077:
            path.chmod(0o600)
    except OSError as error:
        raise StoreUnusableError(
            f'The store "{path}" cannot be created: {error.strerror or error}.'
        ) from error
    if shutil.disk_usage(path.parent).free < 1 << 20:
        raise StoreUnusableError(f'The store "{path}" cannot be used: its disk is full.')


def _make_engine(target: sa.URL) -> sa.Engine:
    if target.get_backend_name() != "sqlite":
        return sa.create_engine(target, pool_pre_ping=True)
    memory = target.database in {None, "", ":memory:"}
    options: dict[str, Any] = {"poolclass": sa.pool.StaticPool} if memory else {}
    engine = sa.create_engine(
        target, connect_args={"check_same_thread": False, "timeout": _BUSY_MS / 1000}, **options
    )

    @sa.event.listens_for(engine, "connect")
    def _on_connect(raw: Any, _record: Any) -> None:
        raw.isolation_level = None  # transactions are begun by us
        cursor = raw.cursor()
        cursor.execute(f"PRAGMA busy_timeout = {_BUSY_MS}")
        cursor.execute("PRAGMA journal_mode = WAL")
        # FULL: a raised alert or an accepted drop must outlive a power cut; commits are few and large
        cursor.execute("PRAGMA synchronous = FULL")
        cursor.execute("PRAGMA foreign_keys = ON")
        cursor.close()

    @sa.event.listens_for(engine, "begin")
    def _on_begin(conn: sa.Connection) -> None:
        write = conn.get_execution_options().get("gapbell_write")
        conn.exec_driver_sql("BEGIN IMMEDIATE" if write else "BEGIN")

    return engine
