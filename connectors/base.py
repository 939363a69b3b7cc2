"""The contract that every kind of source keeps."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from datetime import datetime
from pathlib import Path
from typing import Protocol
from zoneinfo import ZoneInfo

__all__ = [
    "Batch",
    "ColumnMap",
    "Connector",
    "ConnectorError",
    "Delivery",
    "DropSeen",
    "Preview",
    "Row",
    "SetAside",
    "SourceSettings",
    "SourceUnreachableError",
]


class ConnectorError(Exception):
    """Base of every error that leaves this package; its text is one sentence for a person."""


class SourceUnreachableError(ConnectorError):
    """The folder, database or export cannot be reached at all; the next pass tries again."""


@dataclass(frozen=True, slots=True)
class ColumnMap:
    """Which column of the source holds what; names as written in the configuration."""

    time: str
    unit: str | None = None
    quantity: str | None = None
    defects: str | None = None
    opportunities: str | None = None
    attributes: tuple[str, ...] = ()
    private: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class SourceSettings:
    """Everything a connector may know about its source; made by ``watcher.config``."""

    name: str
    kind: str
    base: Path
    """Folder of the configuration; file names in outputs are relative to it."""
    columns: ColumnMap
    zone: ZoneInfo
    """Zone in which times without an offset are read."""
    folder: Path | None = None
    pattern: str = "*.csv"
    key: tuple[str, ...] = ()
    """Identity of a record; empty means the whole row."""
    void: Mapping[str, tuple[str, ...]] = field(default_factory=dict)
    """Column -> values; a row that matches all of them takes its record back."""
    stored: tuple[str, ...] = ()
    """Every further column whose text is kept (key, void, attributes, private, stream filters ...)."""
    encoding: str | None = None
    delimiter: str | None = None
    decimal: str = "."
    thousands: str | None = None
    dates: str = "iso"
    """``iso``, ``dmy``, ``mdy``, ``ymd`` or an explicit strptime format."""
    settle_seconds: float = 10.0
    failing_unit: str | None = None
    max_file_bytes: int = 2 << 30
    max_row_bytes: int = 1 << 20
    max_field_bytes: int = 64 << 10


@dataclass(frozen=True, slots=True)
class Row:
    """One record as understood.

    ``identity`` and ``content`` are stable 32-character hashes: of the key cells (trimmed text), and of
    everything understood. Two rows of one identity are the same record; equal content makes the later one
    a repeat, other content a change. ``time`` is aware. ``quantity`` is 1 and ``defects`` None where the
    source declares no such column. ``cells`` holds the trimmed text of every stored column.
    """

    line: int
    """Physical line in the file where the row starts; the header is line 1."""
    identity: str
    content: str
    key: Mapping[str, str]
    time: datetime
    unit: str | None
    quantity: float
    defects: float | None
    opportunities: float | None
    cells: Mapping[str, str]
    voided: bool


@dataclass(frozen=True, slots=True)
class SetAside:
    """A row (or, with ``line`` None, a whole file) that could not be understood, with its reason."""

    file: str
    line: int | None
    column: str | None
    value: str | None
    reason: str
    """One sentence: what was found wrong and what was expected."""


@dataclass(frozen=True, slots=True)
class Batch:
    """A run of rows read together; ``rows`` counts every data row met, whatever became of it."""

    rows: int
    understood: Sequence[Row]
    set_aside: Sequence[SetAside]


@dataclass(frozen=True, slots=True)
class DropSeen:
    """What the store remembers of a delivered file."""

    file: str
    size: int
    modified_us: int
    fingerprint: str
    complete: bool


@dataclass(frozen=True, slots=True)
class Delivery:
    """One file (or query result) to be taken in.

    ``batches`` may be walked once; it raises nothing for bad rows. ``refusal`` is set when the file as a
    whole cannot be read, and ``batches`` is then empty. ``modified_us`` and ``file`` give its place in the
    order of delivery: of two rows of one identity the one delivered later counts.
    """

    file: str
    size: int
    modified_us: int
    fingerprint: str
    batches: Iterator[Batch]
    refusal: SetAside | None = None


@dataclass(frozen=True, slots=True)
class Preview:
    """What ``check`` shows of a source: its newest file, columns found and the first rows as understood."""

    files: int
    file: str | None
    columns: tuple[str, ...]
    understood: tuple[Row, ...]
    set_aside: tuple[SetAside, ...]


class Connector(Protocol):
    """A way to collect records; reads only, never writes to or deletes from its source."""

    settings: SourceSettings

    def deliveries(self, seen: Mapping[str, DropSeen], now: datetime) -> Iterator[Delivery]:
        """Yield what is new or changed since ``seen``, oldest first (modified, then name).

        A delivery whose size, modification time and fingerprint are unchanged and complete is not yielded.
        Files not yet settled at ``now`` are left for the next pass. Raises ``SourceUnreachableError`` only.
        """
        ...

    def preview(self, now: datetime, limit: int = 5) -> Preview:
        """Read the newest settled file's first rows without side effects."""
        ...
