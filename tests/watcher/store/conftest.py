"""Stores for the tests: SQLite always, PostgreSQL where its programs are on this machine."""

from __future__ import annotations

import os
import pwd
import shutil
import subprocess
import tempfile
import uuid
from collections.abc import Callable, Iterator, Sequence
from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest

from connectors.base import Batch, Delivery, Row, SetAside
from watcher.store import Store
from watcher.store.records import Record, records

START = datetime(2026, 3, 2, 8, tzinfo=UTC)
PROGRAMS = ("initdb", "pg_ctl", "psql")
RowMaker = Callable[..., Row]
DeliveryMaker = Callable[..., Delivery]


def _server_folder() -> Path | None:
    """Folder of the server's programs: where pg_config says, else where PATH finds them."""
    places = []
    if config := shutil.which("pg_config"):
        said = subprocess.run([config, "--bindir"], capture_output=True, text=True, check=False)
        places.append(Path(said.stdout.strip()))
    if found := shutil.which("initdb"):
        places.append(Path(found).resolve().parent)
    return next((p for p in places if all((p / name).is_file() for name in PROGRAMS)), None)


def _as_user() -> list[str] | None:
    """Prefix that leaves root, whom initdb refuses; empty for anybody else, None where nobody else is at hand."""
    if os.geteuid() != 0:
        return []
    if not shutil.which("runuser"):
        return None
    known = {entry.pw_name for entry in pwd.getpwall()}
    name = next((n for n in ("postgres", "nobody") if n in known), None)
    return None if name is None else ["runuser", "-u", name, "--"]


SERVER = _server_folder()
PREFIX = _as_user()
KINDS = ["sqlite"] if SERVER is None or PREFIX is None else ["sqlite", "postgresql"]


def pytest_report_collectionfinish() -> str:
    """Say which stores are tested: a missing server leaves no other trace."""
    if "postgresql" in KINDS:
        return f"stores: sqlite, postgresql ({SERVER})"
    return "stores: sqlite only; no PostgreSQL server programs that can be run here"


@pytest.fixture(scope="session")
def postgres() -> Iterator[str]:
    """Serve on a Unix socket alone, without waiting for the disk; ended at the end of the run."""
    assert SERVER is not None
    assert PREFIX is not None
    folder = Path(tempfile.mkdtemp(prefix="gb", dir="/tmp"))  # short: a socket's path has 107 bytes at most
    try:
        if PREFIX:
            shutil.chown(folder, PREFIX[2])
        data = str(folder / "data")

        def quietly(*command: str) -> None:
            subprocess.run([*PREFIX, *command], check=True, capture_output=True, cwd=folder)

        init = [
            str(SERVER / "initdb"),
            "--no-sync",
            "-U",
            "gapbell",
            "-A",
            "trust",
            "-E",
            "UTF8",
            "--locale=C",
        ]
        quietly(*init, "-D", data)
        control = [str(SERVER / "pg_ctl"), "-D", data]
        options = f"-F -c listen_addresses='' -k {folder}"
        # without a log file the server would keep our pipes open, and run() would wait for it
        quietly(*control, "-w", "-l", str(folder / "log"), "-o", options, "start")
        try:
            yield f"postgresql+psycopg://gapbell@/postgres?host={folder}"
        finally:
            quietly(*control, "-m", "immediate", "stop")
    finally:
        shutil.rmtree(folder, ignore_errors=True)


@pytest.fixture(params=KINDS)
def url(request: pytest.FixtureRequest, tmp_path: Path) -> str:
    """Address of a store that does not exist yet."""
    if request.param == "sqlite":
        return f"sqlite:///{tmp_path / 'store.db'}"
    import sqlalchemy as sa

    base = request.getfixturevalue("postgres")
    schema = f"t{uuid.uuid4().hex}"
    engine = sa.create_engine(base)
    with engine.begin() as conn:
        conn.exec_driver_sql(f"CREATE SCHEMA {schema}")
    engine.dispose()
    return f"{base}&options=-csearch_path%3D{schema}"


@pytest.fixture
def store(url: str) -> Iterator[Store]:
    """Open a fresh store."""
    with Store.open(url) as opened:
        yield opened


@pytest.fixture(scope="session")
def row() -> RowMaker:
    """Make a row; ``says`` is its content and stands in its one cell."""

    def make(
        serial: str,
        says: str = "OK",
        line: int = 2,
        *,
        voided: bool = False,
        quantity: float = 1.0,
        minutes: int = 0,
    ) -> Row:
        when = START + timedelta(minutes=minutes)
        content = f"{says}{'-void' if voided else ''}"
        return Row(
            line,
            serial,
            content,
            {"serial": serial},
            when,
            serial,
            quantity,
            None,
            None,
            {"result": says},
            voided,
        )

    return make


@pytest.fixture(scope="session")
def delivery() -> DeliveryMaker:
    """Make a delivery of rows, ``size`` to a batch."""

    def make(
        file: str, modified_us: int, rows: Sequence[Row], aside: Sequence[SetAside] = (), size: int = 5_000
    ) -> Delivery:
        parts = [rows[i : i + size] for i in range(0, len(rows), size)] or [[]]
        batches = [
            Batch(len(part) + (len(aside) if i == 0 else 0), part, aside if i == 0 else ())
            for i, part in enumerate(parts)
        ]
        print_ = f"{file}@{modified_us}".encode("utf-8", "backslashreplace").decode()
        return Delivery(file, 100, modified_us, print_, iter(batches))

    return make


@pytest.fixture(scope="session")
def listed() -> Callable[..., list[Record]]:
    """Return what ``records`` lists."""

    def read(store: Store, *, history: bool = False) -> list[Record]:
        with store.reading() as conn:
            return list(records(conn, "proof-test", history=history))

    return read
