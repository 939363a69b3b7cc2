"""An invented yard for the tests: a folder with a configuration and drops, a mail server, and the command line."""

from __future__ import annotations

import json
import logging
import os
from collections.abc import Callable, Iterator, Sequence
from datetime import datetime, timedelta
from email import message_from_bytes, policy
from email.message import EmailMessage
from pathlib import Path
from typing import Any
from zoneinfo import ZoneInfo

import pytest
from aiosmtpd.controller import Controller
from click.testing import CliRunner, Result

ZONE = ZoneInfo("Europe/Oslo")
FIRST = datetime(2026, 1, 5, 8, tzinfo=ZONE)

HEAD = """
[plant]
name = "Skerry Point Works"
timezone = "Europe/Oslo"
"""
MAIL = """
[channels.mail]
kind = "email"
host = "127.0.0.1"
port = {port}
security = "none"
sender = "gapbell@skerry.example"
[recipients.quality]
send = [{{ channel = "mail", to = ["qa@skerry.example"] }}]
digest = true
[recipients.maintainers]
send = [{{ channel = "mail", to = ["it@skerry.example"] }}]
feed_notices = true
"""
SOURCE = """
[sources.proof-test]
kind = "csv-drop"
folder = "drops"
columns = { time = "tested_at", unit = "serial", attributes = ["fixture"], private = ["operator"] }
key = ["serial"]
void = { result = ["VOID"] }
stale_after = "5 days"
"""
LEAK = """
[streams.seal-leak]
title = "Seal leaks at proof test"
source = "proof-test"
event = { result = ["LEAK"] }
exposure_name = "cartridges"
baseline = { first_events = 12 }
notify = ["quality"]
"""
COLUMNS = "serial,tested_at,fixture,operator,result"


class Sink:
    """A mail server that keeps what it gets, or answers what it is told to."""

    def __init__(self) -> None:
        self.mails: list[EmailMessage] = []
        self.refused: dict[str, str] = {}
        """Address -> answer at RCPT TO."""
        self.answer = "250 kept"
        """Answer after DATA."""
        self.port = 0

    async def handle_RCPT(
        self, _server: Any, _session: Any, envelope: Any, address: str, options: Any
    ) -> str:
        if address in self.refused:
            return self.refused[address]
        envelope.rcpt_tos.append(address)
        envelope.rcpt_options.extend(options)
        return "250 OK"

    async def handle_DATA(self, _server: Any, _session: Any, envelope: Any) -> str:
        if self.answer.startswith("250"):
            mail = message_from_bytes(envelope.content, policy=policy.default)
            assert isinstance(mail, EmailMessage)
            self.mails.append(mail)
        return self.answer

    def told(self) -> list[tuple[str, str]]:
        """Kind and address of each mail, in order of arrival."""
        return [(m["Gapbell-Kind"], str(m["To"])) for m in self.mails]


class _Controller(Controller):
    """Takes a free port; the library itself probes port 0."""

    def _trigger_server(self) -> None:
        self.port = self.server.sockets[0].getsockname()[1]  # type: ignore[union-attr]
        super()._trigger_server()


@pytest.fixture
def sink() -> Iterator[Sink]:
    """Run the mail server."""
    logging.getLogger("mail.log").setLevel(logging.CRITICAL)
    kept = Sink()
    controller = _Controller(kept, hostname="127.0.0.1", port=0)
    controller.start()
    kept.port = controller.port
    try:
        yield kept
    finally:
        controller.stop()


class Yard:
    """A folder with ``plant.toml`` and drops, and its commands."""

    def __init__(self, folder: Path, sink: Sink) -> None:
        self.folder = folder
        self.sink = sink
        (folder / "drops").mkdir()
        self.configure()

    @property
    def path(self) -> Path:
        return self.folder / "plant.toml"

    def configure(self, *parts: str, head: str = HEAD) -> None:
        """Write the configuration; without parts the source and the stream of seal leaks."""
        mail = MAIL.format(port=self.sink.port)
        self.path.write_text(head + mail + "".join(parts or (SOURCE, LEAK)), encoding="utf-8")

    def drop(
        self, name: str, lines: Sequence[str], at: datetime, *, columns: str = COLUMNS, folder: str = "drops"
    ) -> Path:
        """Deliver a file at a moment."""
        path = self.folder / folder / name
        path.parent.mkdir(exist_ok=True)
        path.write_text("\n".join([columns, *lines]) + "\n", encoding="utf-8")
        os.utime(path, (at.timestamp(), at.timestamp()))
        return path

    def run(self, *words: str) -> Result:
        """Run a command."""
        from watcher.cli import main

        return CliRunner().invoke(main, ["-c", str(self.path), *words])

    def json(self, *words: str, status: int = 0) -> Any:
        """Run a command with ``--json`` and read the one document that it prints."""
        done = self.run(*words, "--json")
        assert done.exit_code == status, done.output
        return json.loads(done.stdout)

    def cycle(self, at: datetime, status: int = 0) -> Any:
        """Make a pass."""
        return self.json("cycle", "--at", at.isoformat(), status=status)

    def stream(self, name: str = "seal-leak") -> Any:
        """Return one stream of ``status`` as of the last pass."""
        done = self.run("status", "--json", "--at", self.last)
        return next(s for s in json.loads(done.stdout)["streams"] if s["stream"] == name)

    last = FIRST.isoformat()


@pytest.fixture
def yard(tmp_path: Path, sink: Sink) -> Yard:
    """Make a fresh yard."""
    return Yard(tmp_path, sink)


LineMaker = Callable[..., list[str]]


@pytest.fixture(scope="session")
def tested() -> LineMaker:
    """Make rows of units tested every two hours; unit numbers in ``leaks`` fail."""

    def make(units: range, leaks: Sequence[int] | set[int] = (), *, says: str = "LEAK") -> list[str]:
        return [
            f"S{i},{FIRST + timedelta(hours=2 * i):%Y-%m-%dT%H:%M:%S},F{i % 5},op{i % 3},{says if i in leaks else 'OK'}"
            for i in units
        ]

    return make


@pytest.fixture(scope="session")
def moment() -> Callable[[int], datetime]:
    """Moment at which a unit of ``tested`` left the test, plus a minute."""
    return lambda i: FIRST + timedelta(hours=2 * i, minutes=1)
