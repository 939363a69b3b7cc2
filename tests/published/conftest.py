"""A plant in a folder, with open data as its drops, driven by the real command line."""

from __future__ import annotations

import csv
import json
import os
import subprocess
import sys
from collections.abc import Iterable, Sequence
from datetime import datetime
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner


class OpenPlant:
    """A folder with ``plant.toml`` and one drop, and its commands."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self._parts: list[str] = []

    def head(self, budget: float) -> None:
        """Name the plant; ``budget`` is false alerts a year over all its streams."""
        self._parts.append(
            f'[plant]\nname = "Open records"\ntimezone = "Europe/London"\n'
            f"[alerting]\nfalse_alerts_per_year = {budget}\n"
        )

    def source(
        self,
        name: str,
        columns: Sequence[str],
        rows: Iterable[Sequence[object]],
        understood: str,
        more: str = "",
    ) -> None:
        """Deliver rows as one file, and declare its source; ``understood`` is the inner part of ``columns``."""
        drops = self.folder / name
        drops.mkdir(parents=True)
        with (drops / "all.csv").open("w", newline="", encoding="utf-8") as file:
            writer = csv.writer(file)
            writer.writerow(columns)
            writer.writerows(rows)
        # a file counts as finished some seconds after its last change
        os.utime(drops / "all.csv", (0, 0))
        self._parts.append(
            f'[sources.{name}]\nkind = "csv-drop"\nfolder = "{name}"\ncolumns = {{ {understood} }}\n{more}\n'
        )

    def stream(self, name: str, source: str, lines: str) -> None:
        """Declare a stream."""
        self._parts.append(f'[streams.{name}]\ntitle = "{name}"\nsource = "{source}"\n{lines}\n')

    def configure(self) -> Path:
        """Write the configuration and return its path."""
        path = self.folder / "plant.toml"
        path.write_text("".join(self._parts), encoding="utf-8")
        return path

    def run(self, *words: str) -> Any:
        """Run a command with ``--json``."""
        from watcher.cli import main

        done = CliRunner().invoke(main, ["-c", str(self.configure()), *words, "--json"])
        assert done.exit_code == 0, done.output
        return json.loads(done.stdout)

    def run_apart(self, *words: str) -> Any:
        """Run a command with ``--json`` in a process of its own, as a plant's server does."""
        done = subprocess.run(
            [sys.executable, "-m", "watcher", "-c", str(self.configure()), *words, "--json"],
            capture_output=True, text=True, check=False, timeout=60,
        )  # fmt: skip
        assert done.returncode == 0, done.stdout + done.stderr
        return json.loads(done.stdout)

    def rehearse(self, to: str) -> dict[str, Any]:
        """Streams of a rehearsal by name."""
        return {s["stream"]: s for s in self.run("rehearse", "--to", to)["streams"]}

    def records(self) -> list[dict[str, Any]]:
        """Every record as understood, in order of time, after a pass."""
        found: list[dict[str, Any]] = self.run("records")["records"]
        return sorted(found, key=lambda r: datetime.fromisoformat(r["time"]))

    def status(self, at: str) -> dict[str, Any]:
        """Streams of ``status`` by name, after a pass at that time."""
        self.run("cycle", "--at", at)
        return {s["stream"]: s for s in self.run("status", "--at", at)["streams"]}


@pytest.fixture
def plant(tmp_path: Path) -> OpenPlant:
    """Make a fresh plant."""
    return OpenPlant(tmp_path)
