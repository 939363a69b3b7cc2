"""Faults that were found once and stay cured."""

from __future__ import annotations

import os
from datetime import UTC, datetime
from pathlib import Path
from zoneinfo import ZoneInfo

import pytest

from connectors.base import ColumnMap, SourceSettings
from connectors.csv_drop import CsvDrop
from watcher.store import Store, StoreError
from watcher.store.intake import take_in
from watcher.store.records import drops_seen, forget_drops, records

SOURCE = "proof-test"


class PulledPlugError(Exception):
    """Stands for the moment of a crash."""


def test_a_changed_configuration_lets_unchanged_files_be_read_again(store, tmp_path: Path) -> None:
    folder = tmp_path / "drops"
    folder.mkdir()
    (folder / "a.csv").write_text("tested_at,serial\n2026-03-02T08:00:00Z,S1\n")
    os.utime(folder / "a.csv", (1_700_000_000, 1_700_000_000))
    columns = ColumnMap("tested_at", "serial")
    drop = CsvDrop(SourceSettings(SOURCE, "csv-drop", tmp_path, columns, ZoneInfo("UTC"), folder=folder))

    def reads() -> int:
        with store.reading() as conn:
            seen = drops_seen(conn, SOURCE)
        found = list(drop.deliveries(seen, datetime(2026, 4, 1, tzinfo=UTC)))
        for one in found:
            take_in(store, SOURCE, one, now_us=1)
        return len(found)

    assert (reads(), reads()) == (1, 0)
    with store.writing() as conn:
        forget_drops(conn, SOURCE)
    assert reads() == 1


def test_a_crash_while_a_file_is_read_again_loses_no_record(store, row, delivery) -> None:
    rows = [row(f"S{i}", line=i + 2) for i in range(3)]
    take_in(store, SOURCE, delivery("a.csv", 1, rows), now_us=1)
    with store.writing() as conn:
        forget_drops(conn, SOURCE)

    def stops(_step: str) -> None:
        raise PulledPlugError

    with pytest.raises(PulledPlugError):
        take_in(store, SOURCE, delivery("a.csv", 1, rows), now_us=2, at_step=stops)
    with store.reading() as conn:
        assert [r.unit for r in records(conn, SOURCE)] == ["S0", "S1", "S2"]


def test_revisions_count_from_one_when_an_older_file_comes_late(store, row, delivery) -> None:
    take_in(store, SOURCE, delivery("b.csv", 2, [row("S1", "OK")]), now_us=1)
    take_in(store, SOURCE, delivery("a.csv", 1, [row("S1", "LEAK")]), now_us=2)
    with store.reading() as conn:
        told = [(r.revision, r.attributes["result"]) for r in records(conn, SOURCE, history=True)]
    assert told == [(1, "LEAK"), (2, "OK")]


@pytest.mark.parametrize(
    "url",
    ["nonsense", "mysql://gapbell@db/gapbell"],
    ids=["no url at all", "another kind of database"],
)
def test_an_address_that_cannot_be_used_is_said_in_a_sentence(url: str) -> None:
    with pytest.raises(StoreError, match=r"\.$"):
        Store.open(url)


def test_a_store_file_that_others_may_read_is_closed_to_them(tmp_path: Path) -> None:
    path = tmp_path / "store.db"
    path.touch(mode=0o644)
    path.chmod(0o644)
    Store.open(f"sqlite:///{path}").close()
    assert path.stat().st_mode & 0o077 == 0


def test_a_file_whose_name_is_no_text_is_taken_in(store, row, delivery) -> None:
    name = os.fsdecode(b"l\xf6kka.csv")
    assert take_in(store, SOURCE, delivery(name, 1, [row("S1")]), now_us=1).new == 1


def test_records_of_one_moment_stand_in_one_order_whichever_came_first(tmp_path: Path, row, delivery) -> None:
    from watcher.store.records import record_frame

    orders = []
    for number, serials in enumerate((("S-7", "S-07"), ("S-07", "S-7"))):
        with Store.open(f"sqlite:///{tmp_path / f'{number}.db'}") as store:
            for at, serial in enumerate(serials):
                take_in(store, SOURCE, delivery(f"{serial}.csv", at, [row(serial)]), now_us=1)
            with store.reading() as conn:
                orders.append(record_frame(conn, SOURCE, []).unit.tolist())
    assert orders[0] == orders[1]
