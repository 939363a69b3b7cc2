"""From the cells of one row to a record, or to the reason why not; shared by every tabular kind."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

from connectors.base import Row, SourceSettings
from connectors.tabular import (
    NotUnderstoodError,
    digest,
    is_damaged_identifier,
    normal_name,
    number_reader,
    read_time,
)

__all__ = ["BadCell", "RowReader"]


@dataclass(frozen=True, slots=True)
class BadCell:
    """Why a row could not be understood."""

    column: str | None
    value: str | None
    reason: str


class RowReader:
    """Turns trimmed cells into rows; made once for a file's header."""

    def __init__(self, settings: SourceSettings, header: Sequence[str]) -> None:
        names = [normal_name(h) for h in header]

        def at(column: str | None) -> int | None:
            return None if column is None else names.index(normal_name(column))

        c = settings.columns
        self._settings = settings
        self._time = names.index(normal_name(c.time))
        self._unit, self._quantity, self._defects = at(c.unit), at(c.quantity), at(c.defects)
        self._opportunities = at(c.opportunities)
        self._number = number_reader(settings.decimal, settings.thousands)
        stored = dict.fromkeys([*settings.stored, *c.attributes, *c.private, *settings.key, *settings.void])
        self._stored = [(name, names.index(normal_name(name))) for name in stored]
        declared = [c.time, c.unit, c.quantity, c.defects, c.opportunities, *stored]
        shown_key = settings.key or tuple(dict.fromkeys(n for n in declared if n))
        self._key = [(name, names.index(normal_name(name))) for name in shown_key]
        # the whole row is its identity where no key is declared; column order must not matter
        order = sorted(range(len(names)), key=lambda i: names[i])
        self._identity = [i for _, i in self._key] if settings.key else order
        self._void = [
            (names.index(normal_name(n)), frozenset(v.strip() for v in vs)) for n, vs in settings.void.items()
        ]
        self._guarded = {i for _, i in self._key if settings.key} | (
            {self._unit} if self._unit is not None else set()
        )
        self._names = list(header)

    def _value(self, cells: Sequence[str], index: int, good: Callable[[float], bool], expected: str) -> float:
        value = self._number(cells[index])
        if not math.isfinite(value) or not good(value):
            raise NotUnderstoodError(f"expected {expected}")
        return value

    def read(self, line: int, cells: Sequence[str]) -> Row | BadCell:
        """Understand one row."""
        settings = self._settings
        index = self._time
        try:
            for index in range(len(cells)):
                if len(cells[index]) > settings.max_field_bytes:
                    raise NotUnderstoodError(
                        f"the field is longer than {settings.max_field_bytes:,} characters"
                    )
                if "\x00" in cells[index]:
                    raise NotUnderstoodError("the field holds a NUL byte")
            for index in self._guarded:
                if is_damaged_identifier(cells[index]):
                    raise NotUnderstoodError(
                        "a spreadsheet has rounded this identifier; export the column as text"
                    )
            if settings.key:
                for _, index in self._key:
                    if not cells[index]:
                        raise NotUnderstoodError("this column is part of the key and must not be empty")
            index = self._time
            time = read_time(cells[index], settings.dates, settings.zone)
            quantity, defects, opportunities = 1.0, None, None
            if self._quantity is not None:
                index = self._quantity
                quantity = self._value(cells, index, lambda v: v > 0, "a quantity above 0")
            if self._defects is not None:
                index = self._defects
                defects = self._value(
                    cells, index, lambda v: v >= 0 and v == int(v), "a whole number of defects, 0 or more"
                )
            if self._opportunities is not None:
                index = self._opportunities
                opportunities = self._value(
                    cells, index, lambda v: v > 0, "a number of opportunities above 0"
                )
        except NotUnderstoodError as error:
            sentence = str(error)
            return BadCell(
                self._names[index], cells[index][:200],
                f'Column "{self._names[index]}": {sentence}.',
            )  # fmt: skip
        unit = cells[self._unit] or None if self._unit is not None else None
        stored = {name: cells[i] for name, i in self._stored}
        voided = bool(self._void) and all(cells[i] in values for i, values in self._void)
        identity = digest([cells[i] for i in self._identity])
        content = digest(
            [
                time.isoformat(),
                unit or "",
                repr(quantity),
                repr(defects),
                repr(opportunities),
                "v" if voided else "",
            ]
            + [part for name in sorted(stored) for part in (name, stored[name])]
        )
        return Row(
            line, identity, content, {name: cells[i] for name, i in self._key}, time, unit,
            quantity, defects, opportunities, stored, voided,
        )  # fmt: skip
