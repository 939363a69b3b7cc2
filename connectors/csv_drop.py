"""CSV drops: files that another system leaves in a folder, read strictly and never changed."""

from __future__ import annotations

import codecs
import fnmatch
import hashlib
import os
import stat
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, replace
from datetime import datetime
from pathlib import Path
from typing import BinaryIO

from connectors.base import (
    Batch,
    Delivery,
    DropSeen,
    Preview,
    Row,
    SetAside,
    SourceSettings,
    SourceUnreachableError,
)
from connectors.rows import RowReader
from connectors.tabular import NotUnderstoodError, nearest, normal_name, parse_fields, shown

__all__ = ["CsvDrop"]

BATCH_ROWS = 5_000
_MAX_QUOTED_LINES = 200
_CHUNK = 1 << 18
_BOMS = ((codecs.BOM_UTF8, "utf-8"), (codecs.BOM_UTF16_LE, "utf-16-le"), (codecs.BOM_UTF16_BE, "utf-16-be"))
_DISGUISES = (
    (b"PK\x03\x04", "a workbook or zip archive, not CSV; export it as CSV"),
    (b"\xd0\xcf\x11\xe0", "an old workbook, not CSV; export it as CSV"),
    (b"\x1f\x8b", "gzip-compressed; compressed drops are not yet read"),
    (b"%PDF", "a PDF document, not CSV"),
)
_TEMPORARY = (".tmp", ".part", ".partial", ".crdownload", "~")


@dataclass(frozen=True, slots=True)
class _Found:
    path: Path
    name: str
    size: int
    modified_us: int
    problem: str | None


class _RefusedError(Exception):
    """A file that cannot be read as a whole; the text is the reason."""

    def __init__(self, reason: str, column: str | None = None, value: str | None = None) -> None:
        super().__init__(reason)
        self.column = column
        self.value = value


class CsvDrop:
    """The ``csv-drop`` kind; see :class:`connectors.base.Connector` for the contract."""

    def __init__(self, settings: SourceSettings) -> None:
        self.settings = settings

    # -- which files ------------------------------------------------------------------------------------------

    def _files(self) -> list[_Found]:
        folder = self.settings.folder
        assert folder is not None
        try:
            root = folder.resolve(strict=True)
            entries = sorted(os.scandir(folder), key=lambda e: e.name)
        except OSError as error:
            raise SourceUnreachableError(
                f'Folder "{folder}" of source "{self.settings.name}" cannot be read: {error.strerror or error}.'
            ) from error
        found = []
        for entry in entries:
            if entry.name.startswith(".") or entry.name.endswith(_TEMPORARY):
                continue
            if not fnmatch.fnmatch(entry.name, self.settings.pattern):
                continue
            try:
                link = entry.is_symlink()
                info = entry.stat()
            except OSError:
                continue  # vanished between listing and looking
            if stat.S_ISDIR(info.st_mode):
                continue
            problem = None
            if link and not Path(entry.path).resolve().is_relative_to(root):
                problem = "The file is a link that leaves the drop folder."
            elif not stat.S_ISREG(info.st_mode):
                problem = "This is not a regular file but a pipe, socket or device."
            elif info.st_size > self.settings.max_file_bytes:
                problem = (
                    f"The file has {info.st_size:,} bytes; at most {self.settings.max_file_bytes:,} are read."
                )
            path = Path(entry.path)
            found.append(
                _Found(path, self._shown_name(path), info.st_size, info.st_mtime_ns // 1000, problem)
            )
        return sorted(found, key=lambda f: (f.modified_us, f.name))

    def _shown_name(self, path: Path) -> str:
        try:
            name = path.relative_to(self.settings.base).as_posix()
        except ValueError:
            name = path.as_posix()
        return name.encode("utf-8", "backslashreplace").decode()

    def _settled(self, file: _Found, now: datetime) -> bool:
        """Old enough at ``now``; a time beyond ``now`` is a skewed clock or a stated moment, and counts."""
        age = now.timestamp() - file.modified_us / 1e6
        return abs(age) >= self.settings.settle_seconds

    def deliveries(self, seen: Mapping[str, DropSeen], now: datetime) -> Iterator[Delivery]:
        """Yield new or changed files, oldest first."""
        for file in self._files():
            before = seen.get(file.name)
            if (
                before
                and before.complete
                and (before.size, before.modified_us) == (file.size, file.modified_us)
            ):
                continue
            if file.problem:
                yield self._refused(file, "", file.problem)
                continue
            if not self._settled(file, now):
                continue
            try:
                print_ = _fingerprint(file.path)
                settled = _same(file)
            except OSError as error:
                yield self._refused(file, "", f"The file cannot be opened: {error.strerror or error}.")
                continue
            if not settled:
                continue
            if before and before.complete and before.fingerprint == print_:
                yield Delivery(file.name, file.size, file.modified_us, print_, iter(()))
                continue
            try:
                table = _Table(file.path, self.settings, file.name)
            except _RefusedError as refusal:
                yield self._refused(file, print_, str(refusal), refusal.column, refusal.value)
                continue
            yield Delivery(file.name, file.size, file.modified_us, print_, table.batches())

    def _refused(
        self, file: _Found, fingerprint: str, reason: str, column: str | None = None, value: str | None = None
    ) -> Delivery:
        aside = SetAside(file.name, None, column, value, reason)
        return Delivery(file.name, file.size, file.modified_us, fingerprint, iter(()), aside)

    def preview(self, now: datetime, limit: int = 5) -> Preview:
        """First rows of the newest settled file."""
        files = [f for f in self._files() if f.problem is None and self._settled(f, now)]
        if not files:
            return Preview(0, None, (), (), ())
        newest = files[-1]
        try:
            table = _Table(newest.path, self.settings, newest.name)
        except _RefusedError as refusal:
            aside = SetAside(newest.name, None, refusal.column, refusal.value, str(refusal))
            return Preview(len(files), newest.name, (), (), (aside,))
        except OSError as error:
            aside = SetAside(
                newest.name, None, None, None, f"The file cannot be opened: {error.strerror or error}."
            )
            return Preview(len(files), newest.name, (), (), (aside,))
        batch = next(table.batches(limit), Batch(0, (), ()))
        return Preview(
            len(files),
            newest.name,
            tuple(table.header),
            tuple(batch.understood[:limit]),
            tuple(batch.set_aside[:limit]),
        )


def _fingerprint(path: Path) -> str:
    value = hashlib.sha256()
    with path.open("rb") as file:
        while chunk := file.read(_CHUNK):
            value.update(chunk)
    return value.hexdigest()


def _same(file: _Found) -> bool:
    info = file.path.stat()
    return (info.st_size, info.st_mtime_ns // 1000) == (file.size, file.modified_us)


class _Table:
    """One file: its header found and checked at once, its rows read as they are asked for."""

    def __init__(self, path: Path, settings: SourceSettings, name: str) -> None:
        self._path = path
        self._name = name
        self._settings = settings
        with path.open("rb") as file:
            head = file.read(4096)
        if not head:
            raise _RefusedError("The file is empty; at least a header line was expected.")
        self._encoding, self._skip = self._find_encoding(head)
        lines = self._lines()
        number, first = 0, ""
        for number, text in lines:  # noqa: B007 - the header's line number is kept
            if isinstance(text, NotUnderstoodError):
                raise _RefusedError(f"The header cannot be read: {text}.")
            if text.strip():
                first = text
                break
        if not first:
            raise _RefusedError("The file holds no header line.")
        self._header_line = number
        self._delimiter = settings.delimiter or _find_delimiter(first, settings)
        try:
            fields = parse_fields(first, self._delimiter)
        except NotUnderstoodError as error:
            raise _RefusedError(f"The header cannot be read: {error}.") from error
        if fields is None:
            raise _RefusedError("A quotation mark in the header is not closed.")
        self.header = [f.strip() for f in fields]
        self._header_fields = self.header
        _check_header(self.header, settings)
        self._reader = RowReader(replace(settings), self.header)

    def _find_encoding(self, head: bytes) -> tuple[str, int]:
        for magic, what in _DISGUISES:
            if head.startswith(magic):
                raise _RefusedError(f"The file is {what}.")
        if head.lstrip()[:9].lower().startswith((b"<!doctype", b"<html", b"<table")):
            raise _RefusedError("The file is an HTML page, not CSV; export it as CSV.")
        for bom, encoding in _BOMS:
            if head.startswith(bom):
                return encoding, len(bom)
        return self._settings.encoding or "utf-8", 0

    def _lines(self) -> Iterator[tuple[int, str | NotUnderstoodError]]:
        """Physical lines with their numbers; a line that cannot be decoded or is too long comes as an error."""
        wide = self._encoding.startswith("utf-16")
        limit = self._settings.max_row_bytes
        number = 0
        with self._path.open("rb") as file:
            file.seek(self._skip)
            for raw, too_long in _split(file, wide=wide, limit=limit, little=self._encoding.endswith("le")):
                number += 1
                if too_long:
                    yield number, NotUnderstoodError(f"the line is longer than {limit:,} bytes")
                    continue
                try:
                    text = raw.decode(self._encoding)
                except UnicodeDecodeError as error:
                    bad = raw[error.start : error.start + 1].hex()
                    yield (
                        number,
                        NotUnderstoodError(
                            f"byte 0x{bad} is not {self._encoding}; name the file's encoding in the source, for"
                            ' example encoding = "cp1252"'
                        ),
                    )
                    continue
                yield number, text.rstrip("\r\n")

    def batches(self, limit: int = BATCH_ROWS) -> Iterator[Batch]:
        """Rows in runs of at most ``limit``."""
        understood: list[Row] = []
        aside: list[SetAside] = []
        rows = 0
        for outcome in self._outcomes():
            rows += 1
            if isinstance(outcome, Row):
                understood.append(outcome)
            else:
                aside.append(outcome)
            if rows >= limit:
                yield Batch(rows, understood, aside)
                understood, aside, rows = [], [], 0
        if rows:
            yield Batch(rows, understood, aside)

    def _aside(self, line: int, reason: str, column: str | None = None, value: str | None = None) -> SetAside:
        return SetAside(self._name, line, column, None if value is None else shown(value), reason)

    def _outcomes(self) -> Iterator[Row | SetAside]:
        lines = self._lines()
        width = len(self.header)
        waiting: list[tuple[int, str | NotUnderstoodError]] = []

        def following() -> tuple[int, str | NotUnderstoodError] | None:
            return waiting.pop(0) if waiting else next(lines, None)

        while (item := following()) is not None:
            number, text = item
            if number <= self._header_line:
                continue
            if isinstance(text, NotUnderstoodError):
                yield self._aside(number, f"This line cannot be read: {text}.")
                continue
            if not text.strip():
                continue
            try:
                fields = parse_fields(text, self._delimiter)
            except NotUnderstoodError as error:
                yield self._aside(number, f"This line cannot be split: {error}.", None, text)
                continue
            if fields is None:
                joined = self._close_quote(text, following, waiting)
                if joined is None:
                    yield self._aside(
                        number, "A quotation mark opened on this line is not closed.", None, text
                    )
                    continue
                fields = joined
            if len(fields) == width + 1 and not fields[-1].strip():
                fields.pop()
            if len(fields) != width:
                yield self._aside(
                    number, f"The row has {len(fields)} fields; the header has {width}.", None, text
                )
                continue
            cells = [f.strip() for f in fields]
            if cells == self._header_fields:
                yield self._aside(number, "The header line is repeated here; it is no record.", None, text)
                continue
            made = self._reader.read(number, cells)
            if isinstance(made, Row):
                yield made
            else:
                yield self._aside(number, made.reason, made.column, made.value)

    def _close_quote(
        self,
        text: str,
        following: Callable[[], tuple[int, str | NotUnderstoodError] | None],
        waiting: list[tuple[int, str | NotUnderstoodError]],
    ) -> list[str] | None:
        """Join lines until the quoted field closes; give them back unread if it never does."""
        taken: list[tuple[int, str | NotUnderstoodError]] = []
        joined = text
        while len(taken) < _MAX_QUOTED_LINES and len(joined) <= self._settings.max_row_bytes:
            item = following()
            if item is None:
                break
            taken.append(item)
            if isinstance(item[1], NotUnderstoodError):
                break
            joined += "\n" + item[1]
            try:
                fields = parse_fields(joined, self._delimiter)
            except NotUnderstoodError:
                break
            if fields is not None:
                if len(fields) != len(self.header):
                    break
                return fields
        waiting[:0] = taken
        return None


def _split(file: BinaryIO, *, wide: bool, limit: int, little: bool) -> Iterator[tuple[bytes, bool]]:
    """Cut a binary file into lines at LF (CR alone only where a file has no LF), bounded in length."""
    mark = (b"\n\x00" if little else b"\x00\n") if wide else b"\n"
    rest, dropping = b"", False
    while chunk := file.read(_CHUNK):
        rest += chunk
        if not wide and b"\n" not in rest and rest.count(b"\r") > 1:
            rest = rest.replace(b"\r", b"\n")
        start = 0
        while True:
            at = rest.find(mark, start)
            while wide and at >= 0 and at % 2:
                at = rest.find(mark, at + 1)
            if at < 0:
                break
            stop = at + len(mark)
            yield rest[start:stop], dropping or at - start > limit
            dropping = False
            start = stop
        rest = rest[start:]
        if len(rest) > limit:
            rest, dropping = (rest[len(rest) // 2 * 2 :] if wide else b""), True
    if (rest and rest != b"\x1a") or dropping:
        yield rest.rstrip(b"\x1a"), dropping


def _find_delimiter(header: str, settings: SourceSettings) -> str:
    """Comma or semicolon, whichever lets every needed column be found; anything else is to be declared."""
    needed = needed_columns(settings)
    fits = []
    for sign in (",", ";"):
        try:
            fields = parse_fields(header, sign)
        except NotUnderstoodError:
            continue
        names = {normal_name(f) for f in fields or ()}
        if all(normal_name(n) in names for n in needed):
            fits.append(sign)
    if len(fits) == 1:
        return fits[0]
    if len(fits) > 1:  # one column only, and no sign in it: either reads the same
        return ","
    counts = {sign: header.count(sign) for sign in (",", ";", "\t", "|")}
    best = max(counts, key=lambda s: counts[s])
    if best in {"\t", "|"} and counts[best]:
        name = r"\t" if best == "\t" else best
        raise _RefusedError(
            f'The header seems to be split by "{name}"; say so in the source: delimiter = "{name}".'
        )
    return best if counts[best] else ","


def needed_columns(settings: SourceSettings) -> list[str]:
    """Every column without which rows cannot be understood."""
    c = settings.columns
    own = [c.time, c.unit, c.quantity, c.defects, c.opportunities, *c.attributes, *c.private]
    return list(dict.fromkeys(n for n in [*own, *settings.key, *settings.void, *settings.stored] if n))


def _check_header(header: list[str], settings: SourceSettings) -> None:
    names = [normal_name(h) for h in header]
    for column in needed_columns(settings):
        count = names.count(normal_name(column))
        if count == 0:
            raise _RefusedError(f'Column "{column}" is not in the header; {nearest(column, header)}.', column)
        if count > 1:
            raise _RefusedError(
                f'Column "{column}" stands {count} times in the header; one was expected.', column
            )
