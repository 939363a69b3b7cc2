"""CSV drops as plants write them: read right, or refused with file, line, column and reason."""

from __future__ import annotations

import os
from datetime import UTC, datetime
from zoneinfo import ZoneInfo

import pytest
from hypothesis import given
from hypothesis import strategies as st

from connectors import open_source
from connectors.base import ColumnMap, DropSeen, SourceSettings, SourceUnreachableError
from connectors.tabular import NotUnderstoodError, number_reader, parse_fields, read_time

OSLO = ZoneInfo("Europe/Oslo")
NOW = datetime(2026, 6, 1, tzinfo=UTC)
HEAD = "serial,tested_at,result\n"


@pytest.fixture
def drop(tmp_path):
    (tmp_path / "drops").mkdir()

    def make(content, name="a.csv", **changes):
        file = tmp_path / "drops" / name
        file.write_bytes(content if isinstance(content, bytes) else content.encode())
        os.utime(file, (1_700_000_000, 1_700_000_000))
        settings = {
            "columns": ColumnMap("tested_at", "serial"), "zone": OSLO, "folder": tmp_path / "drops", "key": ("serial",),
            "stored": ("result",),
        } | changes  # fmt: skip
        return open_source(SourceSettings("s", "csv-drop", tmp_path, **settings))

    return make


def read(source, seen=None):
    rows, understood, aside, refused = 0, [], [], []
    for one in source.deliveries(seen or {}, NOW):
        if one.refusal:
            refused.append(one.refusal)
        for batch in one.batches:
            rows += batch.rows
            understood += batch.understood
            aside += batch.set_aside
    assert rows == len(understood) + len(aside)
    return understood, aside, refused


@pytest.mark.parametrize(
    ("text", "dates", "utc"),
    [
        ("2026-03-04T10:15:00", "iso", "2026-03-04T09:15:00"),
        ("2026-03-04 10:15", "iso", "2026-03-04T09:15:00"),
        ("2026-03-04t10:15:00.123456789Z", "iso", "2026-03-04T10:15:00.123456"),
        ("2026-03-04T10:15:00-04:00", "iso", "2026-03-04T14:15:00"),
        ("2026-03-04T10:15:00+0130", "iso", "2026-03-04T08:45:00"),
        ("2026-03-04T24:00:00Z", "iso", "2026-03-05T00:00:00"),
        ("2016-12-31T23:59:60Z", "iso", "2016-12-31T23:59:59"),
        ("2026-03-04", "iso", "2026-03-03T23:00:00"),
        # Europe/Oslo: the hour from 02:00 is skipped on 29 March and shown twice on 25 October 2026 (tz database)
        ("2026-03-29T02:30:00", "iso", "2026-03-29T01:30:00"),
        ("2026-10-25T02:30:00", "iso", "2026-10-25T00:30:00"),
        ("03.04.2025 14:05", "dmy", "2025-04-03T12:05:00"),
        ("03/04/2025 2:05 PM", "mdy", "2025-03-04T13:05:00"),
        ("2025/3/4", "ymd", "2025-03-03T23:00:00"),
        ("4.3.25", "dmy", "2025-03-03T23:00:00"),
        ("20250304 1405", "%Y%m%d %H%M", "2025-03-04T13:05:00"),
    ],
)
def test_times_are_read_as_declared(text, dates, utc):
    assert read_time(text, dates, OSLO).replace(tzinfo=None).isoformat() == utc


@pytest.mark.parametrize(
    ("text", "dates"),
    [("2026-13-01", "iso"), ("2026-03-04+01:00", "iso"), ("03.04.2025", "iso"), ("2025-04-03", "dmy"), ("31.02.2025", "dmy"),
     ("13/25/2025", "mdy"), ("10:15", "iso"), ("", "iso"), ("03/04.2025", "dmy"), ("03.04.2025 13:00 PM", "dmy"),
     ("45719.5", "iso"), ("٢٠٢٦-٠٣-٠٤", "iso"), ("2026-03-04T10:15:00+25:00", "iso")],
)  # fmt: skip
def test_times_that_are_not_plain_are_refused(text, dates):
    with pytest.raises(NotUnderstoodError, match="expected"):
        read_time(text, dates, OSLO)


@pytest.mark.parametrize(
    ("text", "decimal", "thousands", "value"),
    [("12", ".", None, 12.0), ("0,75", ",", None, 0.75), ("1.234,5", ",", ".", 1234.5), ("1\u202f234", ".", " ", 1234.0), ("-5", ".", None, -5.0)],
)  # fmt: skip
def test_numbers_are_read_as_declared(text, decimal, thousands, value):
    assert number_reader(decimal, thousands)(text) == value


@pytest.mark.parametrize(
    "text", ["", "1_000", "nan", "inf", "1e5", "5-", "(5)", "12 Stk", "1,5", "٣", "0x1F", "1.2.3"]
)
def test_numbers_that_are_not_plain_are_refused(text):
    with pytest.raises(NotUnderstoodError):
        number_reader()(text)


def test_fields_follow_rfc_4180():
    """RFC 4180 section 2: quoted fields, doubled quotation marks, line breaks inside."""
    assert parse_fields('a,"b ""c"", d",,"e\nf"', ",") == ["a", 'b "c", d', "", "e\nf"]
    assert parse_fields('5" pipe,x', ",") == ['5" pipe', "x"]
    assert parse_fields('a,"open', ",") is None
    with pytest.raises(NotUnderstoodError, match="follows a closing quotation mark"):
        parse_fields('"a"b,c', ",")


@pytest.mark.parametrize(
    ("body", "line", "column", "reason"),
    [
        ("S1,soon,OK\n", 2, "tested_at", "expected a time such as"),
        ("S1,2026-01-05\n", 2, None, "The row has 2 fields; the header has 3."),
        ("S1,2026-01-05,OK,x\n", 2, None, "The row has 4 fields; the header has 3."),
        (",2026-01-05,OK\n", 2, "serial", "part of the key and must not be empty"),
        ('"4,71E+11",2026-01-05,OK\n', 2, "serial", "a spreadsheet has rounded this identifier"),
        ("S1,2026-01-05,OK\x00\n", 2, "result", "holds a NUL byte"),
        ("serial,tested_at,result\n", 2, None, "The header line is repeated here"),
        ("S1,2026-01-05,M\xfcde\n".encode("latin-1").decode("latin-1"), None, None, None),
    ],
)
def test_a_row_that_cannot_be_understood_says_why(drop, body, line, column, reason):
    understood, aside, _ = read(drop(HEAD + body))
    if reason is None:
        assert len(understood) == 1
        return
    assert (aside[0].file, aside[0].line, aside[0].column) == ("drops/a.csv", line, column)
    assert reason in aside[0].reason


@pytest.mark.parametrize(
    ("content", "reason"),
    [
        (b"", "The file is empty"),
        (b"\n\n", "holds no header line"),
        (b"PK\x03\x04xxxx", "a workbook or zip archive"),
        (b"\x1f\x8bxxxx", "gzip-compressed"),
        (b"<html><table>", "an HTML page"),
        (b"serial,testd_at,result\n", 'Column "tested_at" is not in the header; the nearest is "testd_at".'),
        (b"serial,tested_at,serial,result\n", 'Column "serial" stands 2 times'),
        (b"serial\ttested_at\tresult\n", r'delimiter = "\t"'),
    ],
)
def test_a_file_that_cannot_be_read_is_refused_with_its_reason(drop, content, reason):
    _, _, refused = read(drop(content))
    assert refused[0].line is None
    assert reason in refused[0].reason


@pytest.mark.parametrize(
    "content",
    [
        "serial;tested_at;result\r\nS1;2026-01-05;OK\r\n",
        "\ufeffserial,tested_at,result\nS1,2026-01-05,OK",
        "Serial , TESTED_AT,result,\nS1,2026-01-05,OK,\n",
        "extra,result,tested_at,serial\nx,OK,2026-01-05,S1\n",
        "serial,tested_at,result\rS1,2026-01-05,OK\r",
        "serial,tested_at,result\n\n\nS1,2026-01-05,OK\n\n",
    ],
    ids=[
        "semicolons",
        "byte order mark",
        "spaces and case",
        "other order",
        "carriage returns",
        "blank lines",
    ],
)
def test_harmless_departures_are_read(drop, content):
    understood, aside, refused = read(drop(content))
    assert ([r.unit for r in understood], aside, refused) == (["S1"], [], [])


def test_encodings_are_declared_or_refused_with_advice(drop):
    body = HEAD.encode() + "S1,2026-01-05,Mängel\n".encode("cp1252")
    _, aside, _ = read(drop(body))
    assert 'encoding = "cp1252"' in aside[0].reason
    assert read(drop(body, encoding="cp1252"))[0][0].cells["result"] == "Mängel"
    wide = codecs_utf16(HEAD + "S1,2026-01-05,Mängel\n")
    assert read(drop(wide))[0][0].cells["result"] == "Mängel"


def codecs_utf16(text):
    return b"\xff\xfe" + text.encode("utf-16-le")


def test_one_stray_quotation_mark_does_not_swallow_the_file(drop):
    rows = "".join(f"S{i},2026-01-05,OK\n" for i in range(500))
    understood, aside, _ = read(drop(HEAD + 'S-bad,2026-01-05,"open\n' + rows))
    assert (len(understood), [a.line for a in aside]) == (500, [2])


def test_a_line_break_inside_quotes_keeps_the_physical_line_numbers(drop):
    understood, _, _ = read(drop(HEAD + 'S1,2026-01-05,"a\nb"\nS2,2026-01-05,OK\n'))
    assert [(r.unit, r.line) for r in understood] == [("S1", 2), ("S2", 4)]


def test_lots_carry_quantity_and_defects(drop):
    columns = ColumnMap("t", None, "n", "bad")
    text = "t,n,bad\n2026-01-05,500,2\n2026-01-06,0,0\n2026-01-07,5,1.5\n2026-01-08,5,-1\n"
    understood, aside, _ = read(drop(text, columns=columns, key=(), stored=()))
    assert [(r.quantity, r.defects) for r in understood] == [(500.0, 2.0)]
    assert [a.column for a in aside] == ["n", "bad", "bad"]


def test_a_void_row_is_marked(drop):
    understood, _, _ = read(drop(HEAD + "S1,2026-01-05,VOID\nS2,2026-01-05,OK\n", void={"result": ("VOID",)}))
    assert [r.voided for r in understood] == [True, False]


def test_a_file_still_growing_waits_and_a_settled_one_does_not(drop, tmp_path):
    source = drop(HEAD + "S1,2026-01-05,OK\n")
    file = tmp_path / "drops" / "a.csv"
    os.utime(file, (NOW.timestamp() - 3, NOW.timestamp() - 3))
    assert list(source.deliveries({}, NOW)) == []
    os.utime(file, (NOW.timestamp() - 10, NOW.timestamp() - 10))
    assert len(list(source.deliveries({}, NOW))) == 1
    os.utime(file, (NOW.timestamp() + 9e6, NOW.timestamp() + 9e6))
    assert len(list(source.deliveries({}, NOW))) == 1


def test_a_file_known_to_be_complete_is_not_read_again(drop, tmp_path):
    source = drop(HEAD)
    info = (tmp_path / "drops" / "a.csv").stat()
    known = DropSeen("drops/a.csv", info.st_size, info.st_mtime_ns // 1000, "x", complete=True)
    assert list(source.deliveries({"drops/a.csv": known}, NOW)) == []


def test_files_outside_the_folder_and_devices_are_refused_and_temporary_ones_left(drop, tmp_path):
    source = drop(HEAD)
    (tmp_path / "secret.csv").write_text(HEAD)
    (tmp_path / "drops" / "link.csv").symlink_to(tmp_path / "secret.csv")
    os.mkfifo(tmp_path / "drops" / "pipe.csv")
    (tmp_path / "drops" / ".hidden.csv").write_text(HEAD)
    found = {d.file: d.refusal.reason if d.refusal else None for d in source.deliveries({}, NOW)}
    assert found["drops/link.csv"] == "The file is a link that leaves the drop folder."
    assert "pipe, socket or device" in found["drops/pipe.csv"]
    assert set(found) == {"drops/a.csv", "drops/link.csv", "drops/pipe.csv"}


def test_a_missing_folder_is_said_in_a_sentence(tmp_path):
    settings = SourceSettings("s", "csv-drop", tmp_path, ColumnMap("t"), OSLO, folder=tmp_path / "gone")
    with pytest.raises(SourceUnreachableError, match='of source "s" cannot be read'):
        list(open_source(settings).deliveries({}, NOW))


@given(st.binary(max_size=400))
def test_whatever_the_bytes_every_row_is_understood_or_set_aside(tmp_path_factory, content):
    folder = tmp_path_factory.mktemp("drop")
    (folder / "a.csv").write_bytes(HEAD.encode() + content)
    os.utime(folder / "a.csv", (1, 1))
    settings = SourceSettings(
        "s", "csv-drop", folder, ColumnMap("tested_at", "serial"), OSLO, folder=folder, stored=("result",)
    )
    read(open_source(settings))
