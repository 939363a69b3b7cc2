"""A pass is killed with SIGKILL at random moments; run again, no record, alert or message is lost or doubled.

What is expected is what a pass leaves that nobody killed, over the same files.
"""

from __future__ import annotations

import json
import logging
import os
import random
import signal
import sqlite3
import subprocess
import sys
import time
from collections import Counter
from collections.abc import Iterator
from contextlib import closing
from datetime import datetime, timedelta
from email import message_from_bytes
from pathlib import Path
from typing import Any
from zoneinfo import ZoneInfo

import pytest
from aiosmtpd.controller import Controller

DRIVER = Path(__file__).with_name("cycle_driver.py")
ZONE = ZoneInfo("Europe/Oslo")
FIRST = datetime(2026, 1, 5, 8, tzinfo=ZONE)
AT = FIRST + timedelta(days=120)
RUNS, COLD_RUNS = 10, 3  # the first is had four times
SECONDS_MAX = 60

CONFIG = """
[plant]
name = "Skerry Point Works"
timezone = "Europe/Oslo"
[alerting]
false_alerts_per_year = 3.0
[channels.mail]
kind = "email"
host = "127.0.0.1"
port = {port}
security = "none"
sender = "gapbell@skerry.example"
[recipients.quality]
send = [{{ channel = "mail", to = ["qa@skerry.example", "qb@skerry.example"] }}]
[recipients.maintainers]
send = [{{ channel = "mail", to = ["it@skerry.example"] }}]
feed_notices = true
[sources.proof-test]
kind = "csv-drop"
folder = "drops"
columns = {{ time = "tested_at", unit = "serial" }}
key = ["serial"]
void = {{ result = ["VOID"] }}
stale_after = "20 days"
"""
STREAM = """
[streams.{name}]
title = "{name} at proof test"
source = "proof-test"
event = {{ result = ["{result}"] }}
baseline = {{ first_events = 12 }}
notify = ["quality"]
"""


class Sink:
    """Counts what arrives by Message-ID and addresses."""

    def __init__(self) -> None:
        self.got: Counter[tuple[str, str]] = Counter()

    async def handle_DATA(self, _server: Any, _session: Any, envelope: Any) -> str:
        name = str(message_from_bytes(envelope.content)["Message-ID"])
        self.got.update((name, address) for address in envelope.rcpt_tos)
        return "250 kept"


class _Controller(Controller):
    """Takes a free port; the library itself probes port 0."""

    def _trigger_server(self) -> None:
        self.port = self.server.sockets[0].getsockname()[1]  # type: ignore[union-attr]
        super()._trigger_server()


@pytest.fixture
def sink() -> Iterator[tuple[Sink, int]]:
    logging.getLogger("mail.log").setLevel(logging.CRITICAL)
    kept = Sink()
    controller = _Controller(kept, hostname="127.0.0.1", port=0)
    controller.start()
    try:
        yield kept, controller.port
    finally:
        controller.stop()


def make_yard(folder: Path, port: int) -> None:
    """Three files: a stream that gets worse, one that gets better, corrections, a void and rows that cannot be read."""
    streams = [("leak", "LEAK"), ("score", "SCORED"), ("slip", "SLIP")]
    text = CONFIG.format(port=port) + "".join(STREAM.format(name=n, result=r) for n, r in streams)
    (folder / "drops").mkdir(parents=True)
    (folder / "plant.toml").write_text(text)

    def row(i: int, result: str) -> str:
        return f"S{i},{FIRST + timedelta(minutes=30 * i):%Y-%m-%dT%H:%M:%S},{result}\n"

    def result(i: int) -> str:
        if (i % 40 == 39 and i < 3000) or (i % 6 == 5 and i >= 3000):
            return "LEAK"
        return "SCORED" if i % 61 == 60 and i < 2200 else "SLIP" if i % 97 == 96 else "OK"

    files = {
        "a.csv": [row(i, result(i)) for i in range(2600)],
        "b.csv": [row(i, result(i)) for i in range(2500, 3300)] + ["S9000,soon,OK\n"],
        "c.csv": [row(i, "OK") for i in (39, 79)] + [row(119, "VOID"), row(119, "OK"), "S9001,later,OK\n"],
    }
    for days, (name, rows) in enumerate(files.items()):
        path = folder / "drops" / name
        path.write_text("serial,tested_at,result\n" + "".join(rows))
        os.utime(path, ((AT - timedelta(days=9 - days)).timestamp(),) * 2)


def contents(folder: Path) -> dict[str, list[Any]]:
    """Everything that must not depend on how often a pass was begun."""
    asked = {
        "records": "SELECT identity, content, key, time_us, unit, quantity, cells, file, line, revision, voided FROM records",
        "revisions": "SELECT r.identity, v.content, v.file FROM revisions v JOIN records r ON r.id = v.record_id",
        "rejects": 'SELECT source, file, line, "column", value, reason, cleared_us FROM rejects',
        "drops": "SELECT source, file, size, modified_us, fingerprint, complete, rows, set_aside FROM drops",
        "alerts": "SELECT id, stream, direction, state, raised_us, noticed_us, evidence FROM alerts",
        "history": "SELECT alert_id, at_us, what FROM alert_history",
        "standings": "SELECT stream, standing, data FROM standings",
        "baselines": "SELECT stream, data FROM baselines",
        "outbox": "SELECT message_id, kind, recipient, channel, state FROM outbox",
        "notices": "SELECT subject, state FROM notices WHERE subject NOT LIKE 'standby%'",
    }  # fmt: skip
    with closing(sqlite3.connect(folder / "gapbell.db")) as conn:
        assert conn.execute("PRAGMA integrity_check").fetchall() == [("ok",)]
        return {name: sorted(conn.execute(sql), key=repr) for name, sql in asked.items()}


def words(folder: Path) -> list[str]:
    return ["-c", str(folder / "plant.toml"), "cycle", "--at", AT.isoformat(), "--json"]


def finish(folder: Path) -> dict[str, Any]:
    """Make a pass in this process."""
    from click.testing import CliRunner

    from watcher.cli import main

    done = CliRunner().invoke(main, words(folder))
    assert done.exit_code == 0, done.output
    return dict(json.loads(done.stdout))


class Driver:
    """Processes that run a pass, and are killed."""

    def __init__(self, process: subprocess.Popen[str]) -> None:
        self.process = process

    def line(self) -> str:
        assert self.process.stdout is not None
        return self.process.stdout.readline().strip()

    def run(self, folder: Path, kill_after: float | None) -> int:
        """Run a pass; returns how it ended."""
        assert self.process.stdin is not None
        after = "-" if kill_after is None else f"{kill_after:.4f}"
        self.process.stdin.write(" ".join([after, *words(folder)]) + "\n")
        self.process.stdin.flush()
        return int(self.line())


@pytest.fixture(scope="module")
def driver() -> Iterator[Driver]:
    with subprocess.Popen(
        [sys.executable, str(DRIVER)],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        stderr=subprocess.DEVNULL,
        text=True,
    ) as process:
        made = Driver(process)
        assert made.line() == "ready"
        yield made
        assert process.stdin is not None
        process.stdin.close()


def test_the_scenario_is_worth_killing(tmp_path: Path, sink: tuple[Sink, int]) -> None:
    """From how the files are made: one stream worse, one better, two rows set aside, and silence since day 69 of 120."""
    kept, port = sink
    make_yard(tmp_path, port)
    report = finish(tmp_path)
    assert report["raised"] == ["A-000001", "A-000002"]
    assert report["sources"][0]["set_aside"] == 2
    # two alerts to two addresses, two notices to one
    addresses = ["it@skerry.example", "qa@skerry.example", "qb@skerry.example"]
    assert Counter(address for _, address in kept.got) == dict.fromkeys(addresses, 2)


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(4))
def test_killed_at_random_moments_and_run_again_nothing_is_lost_or_doubled(
    tmp_path: Path, sink: tuple[Sink, int], driver: Driver, seed: int
) -> None:
    kept, port = sink
    for name in ("first", "clean"):  # the second one is timed: by then the disk has everything at hand
        make_yard(tmp_path / name, port)
        kept.got.clear()
        started = time.monotonic()
        assert driver.run(tmp_path / name, None) == 0
        whole = time.monotonic() - started
    expected, mails = contents(tmp_path / "clean"), set(kept.got)
    assert set(kept.got.values()) == {1}
    rng = random.Random(20260105 + seed)
    killed = doubled = 0
    for run in range(RUNS):
        folder = tmp_path / str(run)
        make_yard(folder, port)
        kept.got.clear()
        moments = [rng.random() * whole for _ in range(rng.choice((1, 1, 2, 3)))]
        for moment in moments:
            killed += driver.run(folder, moment) == -signal.SIGKILL
        finish(folder)
        told = f"run {run}, killed after {', '.join(f'{m:.3f}' for m in moments)} of {whole:.3f} s"
        found = contents(folder)
        for name in expected:
            assert found[name] == expected[name], f"{name}: {told}"
        # a mail may come again when the process died between sending it and noting so, under the same Message-ID
        assert set(kept.got) == mails, told
        doubled += sum(n - 1 for n in kept.got.values())
        if run % 5 == 0:  # and once more: nothing is left to be done
            assert finish(folder)["delivered"] == 0
            assert contents(folder)["outbox"] == expected["outbox"], told
    assert killed > RUNS // 2  # else the moments came too late to try anything
    assert doubled <= killed


@pytest.mark.slow
def test_a_plain_command_killed_at_random_moments_is_made_good_by_the_next_one(
    tmp_path: Path, sink: tuple[Sink, int]
) -> None:
    kept, port = sink
    make_yard(tmp_path / "clean", port)
    command = [sys.executable, "-m", "watcher"]
    started = time.monotonic()
    subprocess.run(
        [*command, *words(tmp_path / "clean")], check=True, capture_output=True, timeout=SECONDS_MAX
    )
    whole = time.monotonic() - started
    expected, mails = contents(tmp_path / "clean"), set(kept.got)
    rng = random.Random(7)
    for run in range(COLD_RUNS):
        folder = tmp_path / str(run)
        make_yard(folder, port)
        kept.got.clear()
        with subprocess.Popen(
            [*command, *words(folder)], stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL
        ) as process:
            time.sleep((0.4 + 0.6 * rng.random()) * whole)  # the first part is spent on imports
            process.kill()
        finish(folder)
        assert contents(folder) == expected
        assert set(kept.got) == mails
