"""Collects a folder of drops into a store, and on request kills itself with SIGKILL at a named step; run by the kill tests."""

from __future__ import annotations

import os
import signal
import sys
from collections.abc import Callable
from datetime import UTC, datetime
from pathlib import Path
from zoneinfo import ZoneInfo

from connectors.base import Batch, ColumnMap, Delivery, SourceSettings
from connectors.csv_drop import CsvDrop
from watcher.store import Store
from watcher.store.intake import Counts, take_in
from watcher.store.records import drops_seen

SOURCE = "proof-test"
NOW = datetime(2026, 4, 1, tzinfo=UTC)
BATCH = 40


def settings(base: Path) -> SourceSettings:
    columns = ColumnMap("tested_at", "serial", attributes=("result", "status"))
    return SourceSettings(
        SOURCE, "csv-drop", base, columns, ZoneInfo("UTC"), folder=base / "drops", key=("serial",), void={"status": ("VOID",)}
    )  # fmt: skip


def small(delivery: Delivery) -> Delivery:
    """Cut a delivery's batches small, so that there are many moments between transactions."""

    def parts():
        for batch in delivery.batches:
            for i in range(0, len(batch.understood), BATCH):
                rows = batch.understood[i : i + BATCH]
                aside = batch.set_aside if i == 0 else ()
                yield Batch(len(rows) + len(aside), rows, aside)

    return Delivery(
        delivery.file, delivery.size, delivery.modified_us, delivery.fingerprint, parts(), delivery.refusal
    )


def collect(url: str, base: Path, at_step: Callable[[str], None] | None = None) -> Counts:
    """One pass over the folder."""
    total = Counts()
    with Store.open(url) as store:
        with store.reading() as conn:
            seen = drops_seen(conn, SOURCE)
        for delivery in CsvDrop(settings(base)).deliveries(seen, NOW):
            total.add(take_in(store, SOURCE, small(delivery), now_us=1, at_step=at_step))
    return total


def main() -> None:
    """Arguments: url, folder, step to die at (- for none), how often the step is passed before."""
    url, base, wanted, passes = sys.argv[1], Path(sys.argv[2]), sys.argv[3], int(sys.argv[4])
    met = 0

    def at_step(name: str) -> None:
        nonlocal met
        if name == wanted:
            if met == passes:
                os.kill(os.getpid(), signal.SIGKILL)
            met += 1

    print("ready", flush=True)
    collect(url, base, at_step)


if __name__ == "__main__":
    main()
