"""Deliveries are taken in once, corrected by later ones, and what cannot be understood stays listed.

Expected values follow from the contract's words (identity, content, order of delivery); none is computed elsewhere.
"""

from __future__ import annotations

from dataclasses import asdict
from itertools import pairwise

import numpy as np
import pytest

from connectors.base import Delivery, SetAside
from watcher.store.intake import Counts, take_in
from watcher.store.records import (
    drops_seen,
    note_contact,
    note_fingerprint,
    record_by_ids,
    record_frame,
    records_version,
    rejects,
    source_state,
)

SOURCE = "proof-test"


def taken(store, delivery, now_us=10):
    return take_in(store, SOURCE, delivery, now_us=now_us)


def test_a_first_delivery_is_all_new(store, row, delivery, listed) -> None:
    counts = taken(store, delivery("a.csv", 1, [row(f"S{i}", line=i + 2) for i in range(3)]))
    assert counts == Counts(rows=3, new=3)
    assert [(r.key, r.revision, r.voided, r.file, r.line) for r in listed(store)] == [
        ({"serial": f"S{i}"}, 1, False, "a.csv", i + 2) for i in range(3)
    ]


@pytest.mark.parametrize("file", ["a.csv", "b.csv"], ids=["the same file, touched", "another file"])
def test_rows_met_again_are_repeated_and_change_nothing(store, row, delivery, listed, file: str) -> None:
    rows = [row(f"S{i}", line=i + 2) for i in range(3)]
    taken(store, delivery("a.csv", 1, rows))
    with store.reading() as conn:
        version = records_version(conn, SOURCE)
    assert taken(store, delivery(file, 2, rows)) == Counts(rows=3, repeated=3)
    with store.reading() as conn:
        assert records_version(conn, SOURCE) == version
    assert [r.revision for r in listed(store, history=True)] == [1, 1, 1]


def test_a_later_file_changes_a_record_and_the_earlier_values_are_kept(store, row, delivery, listed) -> None:
    taken(store, delivery("a.csv", 1, [row("S1", "LEAK")]))
    assert taken(store, delivery("b.csv", 2, [row("S1", "OK", line=7)])) == Counts(rows=1, changed=1)
    (now,) = listed(store)
    assert (now.attributes["result"], now.revision, now.file, now.line) == ("OK", 2, "b.csv", 7)
    assert [(r.attributes["result"], r.revision) for r in listed(store, history=True)] == [
        ("LEAK", 1),
        ("OK", 2),
    ]


def test_an_earlier_file_read_late_does_not_win(store, row, delivery, listed) -> None:
    taken(store, delivery("b.csv", 2, [row("S1", "OK")]))
    assert taken(store, delivery("a.csv", 1, [row("S1", "LEAK")])) == Counts(rows=1, repeated=1)
    assert [r.attributes["result"] for r in listed(store)] == ["OK"]
    assert sorted(r.attributes["result"] for r in listed(store, history=True)) == ["LEAK", "OK"]


def test_the_old_file_sent_again_does_not_undo_a_correction(store, row, delivery, listed) -> None:
    taken(store, delivery("a.csv", 1, [row("S1", "LEAK")]))
    taken(store, delivery("fix.csv", 2, [row("S1", "OK")]))
    grown = delivery("a.csv", 3, [row("S1", "LEAK"), row("S2", line=3)])
    assert taken(store, grown) == Counts(rows=2, new=1, repeated=1)
    assert [r.attributes["result"] for r in listed(store)] == ["OK", "OK"]


def test_of_equal_times_the_file_name_and_then_the_line_decides(store, row, delivery, listed) -> None:
    taken(store, delivery("b.csv", 1, [row("S1", "from b"), row("S2", "above", 3), row("S2", "below", 4)]))
    taken(store, delivery("a.csv", 1, [row("S1", "from a")]))
    assert [r.attributes["result"] for r in listed(store)] == ["from b", "below"]


@pytest.mark.parametrize("size", [1, 5_000], ids=["a batch each", "one batch"])
def test_rows_of_one_record_in_one_file_are_applied_in_order(store, row, delivery, listed, size: int) -> None:
    rows = [row("S1", "first", 2), row("S1", "second", 3), row("S1", "second", 4), row("S1", "third", 5)]
    assert taken(store, delivery("a.csv", 1, rows, size=size)) == Counts(rows=4, new=1, changed=2, repeated=1)
    says = [(r.attributes["result"], r.revision) for r in listed(store, history=True)]
    assert says == [("first", 1), ("second", 2), ("third", 3)]


def test_a_voided_record_keeps_its_last_values_and_leaves_the_frame(store, row, delivery, listed) -> None:
    taken(store, delivery("a.csv", 1, [row("S1", quantity=5.0), row("S2", line=3)]))
    void = row("S1", "VOID", voided=True, quantity=9.0)
    assert taken(store, delivery("b.csv", 2, [void])) == Counts(rows=1, voided=1)
    first, second = listed(store)
    assert (first.voided, first.quantity, first.revision, second.voided) == (True, 5.0, 2, False)
    with store.reading() as conn:
        assert record_frame(conn, SOURCE, []).unit.tolist() == ["S2"]


def test_a_void_before_its_record_holds_and_a_later_row_brings_it_back(store, row, delivery, listed) -> None:
    assert taken(store, delivery("b.csv", 2, [row("S1", "VOID", voided=True)])) == Counts(rows=1, voided=1)
    assert taken(store, delivery("a.csv", 1, [row("S1")])) == Counts(rows=1, repeated=1)
    assert [r.voided for r in listed(store)] == [True]
    assert taken(store, delivery("c.csv", 3, [row("S1", "RETESTED")])) == Counts(rows=1, changed=1)
    assert [r.voided for r in listed(store)] == [False]


def test_the_version_grows_with_every_accepted_change_of_its_source_alone(store, row, delivery) -> None:
    seen = []
    for modified_us, rows in enumerate(
        [[row("S1")], [row("S1")], [row("S1", "LEAK")], [row("S1", "X", voided=True)]]
    ):
        taken(store, delivery(f"{modified_us}.csv", modified_us, rows))
        with store.reading() as conn:
            seen.append(records_version(conn, SOURCE))
            assert records_version(conn, "another") == 0
    assert [later - earlier > 0 for earlier, later in pairwise(seen)] == [
        False,
        True,
        True,
    ]


def test_a_row_set_aside_is_listed_once_however_often_its_file_is_read(store, row, delivery) -> None:
    aside = SetAside("a.csv", 3, "n_defects", "two", "A whole number was expected.")
    for modified_us in (1, 2):
        counts = take_in(
            store, SOURCE, delivery("a.csv", modified_us, [row("S1")], [aside]), now_us=modified_us
        )
        assert counts.set_aside == 1
    with store.reading() as conn:
        (one,) = rejects(conn, SOURCE)
    assert asdict(one) == {"source": SOURCE, **asdict(aside), "at_us": 1}


def test_a_row_no_longer_in_its_file_is_marked_cleared_and_not_deleted(store, row, delivery) -> None:
    aside = SetAside("a.csv", 3, "n_defects", "two", "A whole number was expected.")
    taken(store, delivery("a.csv", 1, [row("S1")], [aside]), now_us=1)
    taken(store, delivery("a.csv", 2, [row("S1"), row("S2", line=3)]), now_us=2)
    with store.reading() as conn:
        assert rejects(conn) == []
        kept = conn.exec_driver_sql("SELECT line, cleared_us FROM rejects").all()
    assert [tuple(r) for r in kept] == [(3, 2)]


def test_a_refused_file_is_one_entry_without_line_and_is_not_read_again(store) -> None:
    refusal = SetAside("a.csv", None, None, None, "The file is empty.")
    counts = taken(store, Delivery("a.csv", 0, 1, "f", iter(()), refusal))
    assert counts == Counts()
    with store.reading() as conn:
        assert [(r.file, r.line, r.reason) for r in rejects(conn)] == [("a.csv", None, "The file is empty.")]
        assert drops_seen(conn, SOURCE)["a.csv"].complete


def test_a_drop_is_remembered_with_its_size_time_and_fingerprint(store, row, delivery) -> None:
    taken(store, delivery("a.csv", 1, [row("S1")]))
    with store.reading() as conn:
        (seen,) = drops_seen(conn, SOURCE).values()
    assert asdict(seen) == {
        "file": "a.csv",
        "size": 100,
        "modified_us": 1,
        "fingerprint": "a.csv@1",
        "complete": True,
    }


def test_the_same_content_under_a_new_time_counts_as_a_sign_of_life(store, row, delivery) -> None:
    taken(store, delivery("a.csv", 1, [row("S1")]))
    assert taken(store, Delivery("a.csv", 100, 9, "a.csv@1", iter(()))) == Counts()
    with store.reading() as conn:
        assert drops_seen(conn, SOURCE)["a.csv"].modified_us == 9
        assert source_state(conn)[SOURCE].last_file_us == 9


def test_the_frame_is_in_order_of_time_then_of_key_with_numbers_as_numbers(store, row, delivery) -> None:
    rows = [row("S10", line=2), row("S9", line=3), row("S2", "LEAK", line=4, minutes=-5, quantity=40.0)]
    taken(store, delivery("a.csv", 1, rows))
    with store.reading() as conn:
        frame = record_frame(conn, SOURCE, ["result", "absent"])
        again = record_by_ids(conn, [int(frame.id[2]), int(frame.id[0])])
        # numbers of numpy's own kind must find their records too
        assert len(record_by_ids(conn, list(frame.id))) == 3
    assert frame.unit.tolist() == ["S2", "S9", "S10"]
    assert frame.quantity.tolist() == [40.0, 1.0, 1.0]
    assert frame.cells["result"].tolist() == ["LEAK", "OK", "OK"]
    assert frame.cells["absent"].tolist() == ["", "", ""]
    assert np.isnan(frame.defects).all()
    assert frame.time_us.dtype == np.int64
    assert [r.unit for r in again] == ["S10", "S2"]


def test_a_source_shows_its_last_contact_its_newest_record_and_its_error(store, row, delivery) -> None:
    taken(store, delivery("a.csv", 7, [row("S1"), row("S2", line=3, minutes=3)]))
    with store.writing() as conn:
        note_contact(conn, SOURCE, 50, None)
        note_contact(conn, SOURCE, 60, "The folder cannot be read.")
    with store.reading() as conn:
        state = source_state(conn)[SOURCE]
        newest = max(record_frame(conn, SOURCE, []).time_us)
    assert (state.last_contact_us, state.last_record_us, state.last_file_us) == (50, newest, 7)
    assert (state.records, state.set_aside, state.error) == (2, 0, "The folder cannot be read.")


def test_a_changed_understanding_is_told_once_and_the_first_is_no_change(store) -> None:
    told = []
    for fingerprint in ("one", "one", "two", "two"):
        with store.writing() as conn:
            told.append(note_fingerprint(conn, SOURCE, fingerprint))
    assert told == [False, False, True, False]
