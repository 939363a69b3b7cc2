"""Collecting is killed with SIGKILL at every named step and at random moments; run again, nothing is lost or doubled.

The expected store is that of a run nobody killed, over the same files.
"""

from __future__ import annotations

import importlib.util
import os
import random
import signal
import sqlite3
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import closing
from pathlib import Path
from types import ModuleType
from typing import Any

import pytest

DRIVER = Path(__file__).with_name("collect_driver.py")
STEPS = ("before-batch", "in-batch", "after-batch", "in-finish", "after-finish")
SECONDS_MAX = 60
RANDOM_RUNS = 30
HEADER = "tested_at,serial,result,status\n"


def _load() -> ModuleType:
    spec = importlib.util.spec_from_file_location("collect_driver", DRIVER)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def line(number: int, result: str = "OK", status: str = "") -> str:
    return f"2026-03-{1 + number % 28:02d}T08:00:00Z,S{number},{result},{status}\n"


@pytest.fixture(scope="module")
def base(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Three drops: records, then changes, voids, repeats and new ones, then a late file with bad rows."""
    folder = tmp_path_factory.mktemp("plant")
    (folder / "drops").mkdir()
    first = [line(n) for n in range(400)]
    second = [line(n, "LEAK") for n in range(0, 200, 7)] + [line(n, "OK", "VOID") for n in range(3, 200, 11)]
    second += [line(n) for n in range(300, 500)] + [line(5, "WEEP"), line(5, "LEAK")]
    third = ["yesterday,S900,OK,\n", *[line(n) for n in range(500, 700)], "2026-03-02T08:00:00Z,,OK,\n"]
    for hour, (name, rows) in enumerate((("a.csv", first), ("b.csv", second), ("c.csv", third))):
        path = folder / "drops" / name
        path.write_text(HEADER + "".join(rows))
        os.utime(path, (1_772_400_000 + 3600 * hour,) * 2)
    return folder


def contents(path: Path) -> dict[str, list[Any]]:
    """Everything that must not depend on how often a file was begun; numbers of rows and moments left out."""
    asked = {
        "records": "SELECT identity, content, key, time_us, unit, quantity, cells, file, line, revision, voided FROM records",
        "revisions": "SELECT r.identity, v.content, v.file FROM revisions v JOIN records r ON r.id = v.record_id",
        "rejects": 'SELECT source, file, line, "column", value, reason, cleared_us FROM rejects',
        "drops": "SELECT source, file, size, modified_us, fingerprint, complete, rows, set_aside FROM drops",
    }  # fmt: skip
    with closing(sqlite3.connect(path)) as conn:
        assert conn.execute("PRAGMA integrity_check").fetchall() == [("ok",)]
        assert conn.execute("PRAGMA foreign_key_check").fetchall() == []
        return {name: sorted(conn.execute(sql), key=repr) for name, sql in asked.items()}


@pytest.fixture(scope="module")
def driver() -> ModuleType:
    return _load()


@pytest.fixture(scope="module")
def clean(base: Path, driver: ModuleType, tmp_path_factory: pytest.TempPathFactory) -> dict[str, list[Any]]:
    """Collect once, undisturbed."""
    path = tmp_path_factory.mktemp("clean") / "store.db"
    counts = driver.collect(f"sqlite:///{path}", base)
    # counted by hand from the three files above: 400 + 249 + 202 rows, of which two cannot be read
    assert (counts.rows, counts.set_aside) == (400 + 29 + 18 + 200 + 2 + 202, 2)
    assert counts.rows == counts.new + counts.changed + counts.voided + counts.repeated + counts.set_aside
    return contents(path)


def begun(path: Path, base: Path, step: str = "-", passes: int = 0) -> subprocess.Popen[str]:
    """Start collecting in a process of its own; it says ready once everything is imported."""
    command = [sys.executable, str(DRIVER), f"sqlite:///{path}", str(base), step, str(passes)]
    process = subprocess.Popen(command, stdout=subprocess.PIPE, text=True)
    assert process.stdout is not None
    assert process.stdout.readline() == "ready\n"
    return process


@pytest.mark.parametrize("passes", [0, 2], ids=["first", "third"])
@pytest.mark.parametrize("step", STEPS)
def test_killed_at_a_named_step_and_run_again_the_store_is_that_of_a_clean_run(
    base: Path, clean: dict[str, list[Any]], driver: ModuleType, tmp_path: Path, step: str, passes: int
) -> None:
    path = tmp_path / "store.db"
    with begun(path, base, step, passes) as process:
        assert process.wait(SECONDS_MAX) == -signal.SIGKILL
    driver.collect(f"sqlite:///{path}", base)
    assert contents(path) == clean
    assert driver.collect(f"sqlite:///{path}", base).rows == 0


def moments(seed: int) -> Iterator[float]:
    rng = random.Random(seed)
    while True:
        yield rng.random()


@pytest.mark.slow
def test_killed_at_random_moments_and_run_again_the_store_is_that_of_a_clean_run(
    base: Path, clean: dict[str, list[Any]], driver: ModuleType, tmp_path: Path
) -> None:
    started = time.monotonic()
    with begun(tmp_path / "timed.db", base) as process:
        started = time.monotonic()
        assert process.wait(SECONDS_MAX) == 0
    whole = time.monotonic() - started
    killed = 0
    for run, moment in zip(range(RANDOM_RUNS), moments(20260302), strict=False):
        path = tmp_path / f"{run}.db"
        with begun(path, base) as process:
            time.sleep(moment * whole)
            process.send_signal(signal.SIGKILL)
            killed += process.wait(SECONDS_MAX) == -signal.SIGKILL
        driver.collect(f"sqlite:///{path}", base)
        assert contents(path) == clean, f"run {run}, killed after {moment * whole:.3f} s"
    assert killed > RANDOM_RUNS // 2  # else the moments came too late to try anything
