"""Whatever the order, the batches and the splitting of deliveries, the same records stand in the end."""

from __future__ import annotations

import tempfile
from dataclasses import dataclass
from pathlib import Path

from hypothesis import given, settings
from hypothesis import strategies as st

from connectors.base import SetAside
from watcher.store import Store
from watcher.store.intake import Counts, take_in
from watcher.store.records import records

SOURCE = "proof-test"


@dataclass(frozen=True)
class Told:
    """A row with its place in the order of delivery."""

    serial: str
    says: str
    voided: bool
    modified_us: int
    file: str
    line: int

    @property
    def rank(self) -> tuple[int, str, int]:
        return (self.modified_us, self.file, self.line)


def expected(told: list[Told]) -> set[tuple[str, str, bool]]:
    """Return the last statement on each record: the rule itself, written a second time without a store."""
    last: dict[str, Told] = {}
    for one in sorted(told, key=lambda t: t.rank):
        last[one.serial] = one
    return {(t.serial, t.says, t.voided) for t in last.values()}


@st.composite
def tellings(draw: st.DrawFn) -> list[Told]:
    """Files, some of one time, whose rows speak of few records; no two rows say the same of one record."""
    out = []
    for number in range(draw(st.integers(1, 4))):
        modified_us = draw(st.integers(1, 3))
        for line in range(2, 2 + draw(st.integers(0, 5))):
            serial, voided = draw(st.sampled_from("ABC")), draw(st.booleans())
            out.append(Told(serial, f"{number}-{line}", voided, modified_us, f"{number}.csv", line))
    return out


def pieces(draw: st.DrawFn, told: list[Told]) -> list[list[Told]]:
    """Cut each file's rows into deliveries, all of them in any order."""
    out: list[list[Told]] = []
    for file in sorted({t.file for t in told}):
        rows = draw(st.permutations([t for t in told if t.file == file]))
        size = draw(st.integers(1, max(1, len(rows))))
        out += [rows[i : i + size] for i in range(0, len(rows), size)]
    return draw(st.permutations(out))


@settings(max_examples=40)
@given(data=st.data(), told=tellings())
def test_order_batches_and_splitting_leave_the_same_records(row, delivery, data, told: list[Told]) -> None:
    deliveries = pieces(data.draw, told)
    size = data.draw(st.integers(1, 4))
    total = Counts()
    with (
        tempfile.TemporaryDirectory() as folder,
        Store.open(f"sqlite:///{Path(folder) / 'store.db'}") as store,
    ):
        for part in [*deliveries, *deliveries]:  # and once more: everything is then a repeat
            aside = [SetAside(part[0].file, 99, None, None, "The row has 3 fields; the header has 4.")]
            rows = [row(t.serial, t.says, t.line, voided=t.voided) for t in part]
            counts = take_in(
                store, SOURCE, delivery(part[0].file, part[0].modified_us, rows, aside, size=size), now_us=1
            )
            assert counts.rows == len(rows) + 1
            total.add(counts)
        with store.reading() as conn:
            stands = {(r.key["serial"], r.attributes["result"], r.voided) for r in records(conn, SOURCE)}
    assert total.rows == total.new + total.changed + total.voided + total.repeated + total.set_aside
    assert total.set_aside == 2 * len(deliveries)
    assert stands == expected(told)


def stands_after(store: Store, deliveries) -> list[tuple[str, float, bool]]:
    for one in deliveries:
        take_in(store, SOURCE, one, now_us=1)
    with store.reading() as conn:
        return [(r.attributes["result"], r.quantity, r.voided) for r in records(conn, SOURCE)]


def test_a_row_confirmed_by_a_later_file_outweighs_a_change_from_between_that_comes_last(
    store, row, delivery
) -> None:
    first, between, last = (
        delivery(f"{n}.csv", n, [row("S1", says)]) for n, says in ((1, "LEAK"), (2, "OK"), (3, "LEAK"))
    )
    # in order of delivery, the file of time 3 speaks last and says LEAK; so it must for any other order
    assert stands_after(store, [first, last, between]) == [("LEAK", 1.0, False)]


def test_a_voided_record_keeps_its_last_values_in_whichever_order_they_come(store, row, delivery) -> None:
    made = delivery("1.csv", 1, [row("S1", quantity=5.0)])
    void = delivery("2.csv", 2, [row("S1", "VOID", voided=True, quantity=9.0)])
    ((_, quantity, voided),) = stands_after(store, [void, made])
    assert (quantity, voided) == (5.0, True)
