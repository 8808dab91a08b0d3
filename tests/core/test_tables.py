"""Reading lists: what comes out of good files, and what is said about bad ones."""

from __future__ import annotations

import csv
import datetime
import hashlib
import io
import json
import os
import unicodedata
import zipfile
from collections.abc import Callable
from decimal import Decimal
from pathlib import Path
from typing import Any

import numpy as np
import openpyxl
import polars as pl
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

import core.cells
import core.csvtext
from core.errors import SheetError
from core.frame import Table, clean, frame_of
from core.tables import ENCODINGS, inline_table, read_table

CREW = "badge,name,dept\n001,Zo\u00eb,deck\n002,\u0141ukasz,engine\n"


@pytest.fixture
def read(tmp_path: Path) -> Callable[..., Table]:
    """Write bytes (or text as UTF-8) to crew.csv and read them."""

    def write_and_read(content: bytes | str, **options: Any) -> Table:
        path = tmp_path / "crew.csv"
        path.write_bytes(content.encode() if isinstance(content, str) else content)
        return read_table(path, **options)

    return write_and_read


def rows_of(table: Table) -> list[list[str]]:
    return [list(row) for row in table.data.rows()]


def faults_of(call: Callable[..., Table], *arguments: object, **options: object) -> list[str]:
    with pytest.raises(SheetError) as caught:
        call(*arguments, **options)
    return [str(fault) for fault in caught.value.faults]


def table_or_none(path: Path) -> Table | None:
    """Read a file that may be at fault; any other error is the test's failure."""
    try:
        return read_table(path)
    except SheetError:
        return None


# --- CSV that is good ---------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("content", "options", "columns", "rows", "lines"),
    [
        ("a,b\n1,2\n", {}, ["a", "b"], [["1", "2"]], [2]),
        ("a,b\n1,2", {}, ["a", "b"], [["1", "2"]], [2]),
        ("a,b\r\n1,2\r\n3,4\r\n", {}, ["a", "b"], [["1", "2"], ["3", "4"]], [2, 3]),
        ("a,b\n1,2\r\n3,4\r\n5,\r\n", {}, ["a", "b"], [["1", "2"], ["3", "4"], ["5", ""]], [2, 3, 4]),
        ("a\n007\n 8 \n", {}, ["a"], [["007"], ["8"]], [2, 3]),
        ("a;b\n1,5;2\n", {"separator": ";"}, ["a", "b"], [["1,5", "2"]], [2]),
        ("a\tb\n1\t2\n\t3\n", {"separator": "\t"}, ["a", "b"], [["1", "2"], ["", "3"]], [2, 3]),
        ("\ufeffa,b\n1,2\n", {}, ["a", "b"], [["1", "2"]], [2]),
        ('"a","b"\n"x, y","say ""hi"""\n', {}, ["a", "b"], [["x, y", 'say "hi"']], [2]),
        ('a,b\n"x\ny",1\nz,2\n', {}, ["a", "b"], [["x\ny", "1"], ["z", "2"]], [2, 4]),
        ('a,b\r\n"x\r\ny","1"\r\nz,"2"\r\n', {}, ["a", "b"], [["x\ny", "1"], ["z", "2"]], [2, 4]),
        ('"a\nb",c\n1,2\n', {}, ["a\nb", "c"], [["1", "2"]], [3]),
        ('a,b\n"",""""\n', {}, ["a", "b"], [["", '"']], [2]),
        ("a,b\n1,2\n\n3,4\n\n\n", {}, ["a", "b"], [["1", "2"], ["3", "4"]], [2, 4]),
        ("\n  \na,b\n \t\n1,2\n", {}, ["a", "b"], [["1", "2"]], [5]),
        ("a\n1\n\n2\n\r\n", {}, ["a"], [["1"], ["2"]], [2, 4]),
        ("a,b\n1,2\n,\n3,4\n , \n", {}, ["a", "b"], [["1", "2"], ["3", "4"]], [2, 4]),
        ('a\n""\n1\n', {}, ["a"], [["1"]], [3]),
        ("a,b\n1,2\n   ", {}, ["a", "b"], [["1", "2"]], [2]),
        (" a , b \n 1 ,\u00a02\u3000\n", {}, ["a", "b"], [["1", "2"]], [2]),
        ("a,b\n\u00a0x,y\n", {}, ["a", "b"], [["x", "y"]], [2]),
        ("a,b\nx\t,y\n", {}, ["a", "b"], [["x", "y"]], [2]),
        ("a\nx \r\ny, z \r\n", {"separator": ";"}, ["a"], [["x"], ["y, z"]], [2, 3]),
        ("na\u0308me,b\nZoe\u0308,\u212b\n", {}, ["n\u00e4me", "b"], [["Zo\u00eb", "\u00c5"]], [2]),
        ("a,b\nnull,NA\n#1,nan\n", {}, ["a", "b"], [["null", "NA"], ["#1", "nan"]], [2, 3]),
        ("a,b\n1,'2\n", {}, ["a", "b"], [["1", "'2"]], [2]),
    ],
)
def test_good_files(
    read: Callable[..., Table],
    content: str,
    options: dict[str, str],
    columns: list[str],
    rows: list[list[str]],
    lines: list[int],
) -> None:
    table = read(content, **options)
    assert list(table.columns) == columns
    assert rows_of(table) == rows
    assert table.lines.tolist() == lines
    assert table.lines.dtype == np.int64
    assert table.sha256 == hashlib.sha256(content.encode()).hexdigest()
    assert table.name == "crew.csv"


@pytest.mark.parametrize("encoding", ENCODINGS)
def test_every_encoding_reads_its_own(read: Callable[..., Table], encoding: str) -> None:
    text = "badge,name\r\n001,Anna\r\n002,\u00d6mer\r\n"
    if encoding in ("cp1251", "cp1253", "koi8-r", "big5", "euc-kr", "shift-jis"):
        text = text.replace("\u00d6", "O")
    content = text.encode(encoding)
    table = read(content, encoding=encoding)
    assert rows_of(table) == [line.split(",") for line in text.split("\r\n")[1:-1]]
    assert table.sha256 == hashlib.sha256(content).hexdigest()
    assert len(table.blocks) == 1


@pytest.mark.parametrize("encoding", ["UTF8", "utf-8-sig", "utf_8", "U8"])
def test_other_names_of_utf8(read: Callable[..., Table], encoding: str) -> None:
    assert read("\ufeff" + CREW, encoding=encoding).text("name") == ["Zo\u00eb", "\u0141ukasz"]


def test_other_names_of_other_encodings(read: Callable[..., Table]) -> None:
    content = "a,b\n\u20ac,2\n".encode("cp1252")
    assert read(content, encoding="windows-1252").text("a") == ["\u20ac"]
    assert read("a,b\n\u00e9,2\n".encode("latin-1"), encoding="ISO-8859-1").text("a") == ["\u00e9"]


@pytest.mark.parametrize("ending", ["\n", "\r\n"])
@pytest.mark.parametrize("mark", ["", "\ufeff"])
@pytest.mark.parametrize("count", [998, 999, 1000, 2500])
def test_blocks_are_of_1000_lines(read: Callable[..., Table], count: int, mark: str, ending: str) -> None:
    lines = ["a,b", *(f'{n},"x{ending}y"' if n % 7 == 0 else f"{n},x" for n in range(count))]
    content = (mark + "".join(line + ending for line in lines)).encode()
    physical = content.splitlines(keepends=True)
    expected = [b"".join(physical[at : at + 1000]) for at in range(0, len(physical), 1000)]
    blocks = read(content).blocks
    assert blocks == tuple(hashlib.sha256(block).hexdigest() for block in expected)
    changed = bytearray(content)
    changed[len(b"".join(physical[:1])) - 1 - len(ending)] = ord("c")
    other = read(bytes(changed)).blocks
    assert [at for at, pair in enumerate(zip(blocks, other, strict=True)) if pair[0] != pair[1]] == [0]


def test_blocks_of_other_encodings_are_of_the_bytes(read: Callable[..., Table]) -> None:
    content = ("a,b\n" + "\u00e9,1\n" * 1500).encode("cp1252")
    cut = len("a,b\n") + 999 * len("e,1\n")
    expected = (content[:cut], content[cut:])
    assert read(content, encoding="cp1252").blocks == tuple(hashlib.sha256(part).hexdigest() for part in expected)


def test_the_name_is_as_the_user_wrote_it(tmp_path: Path) -> None:
    (tmp_path / "crew.csv").write_text(CREW, encoding="utf-8")
    assert read_table(tmp_path / "crew.csv", name="lists/crew.csv").name == "lists/crew.csv"
    assert faults_of(read_table, tmp_path / "x.csv", name="lists/x.csv")[0].startswith("lists/x.csv: ")


# --- CSV that is bad ----------------------------------------------------------------------------------------

BAD: list[tuple[str, bytes | str, dict[str, str], list[str]]] = [
    ("empty", b"", {}, ["crew.csv: this file is empty."]),
    ("only a byte order mark", "\ufeff", {}, ["this file is empty."]),
    ("only blank lines", "\n \n\r\n", {}, ["this file is empty."]),
    ("header only", "a,b\n", {}, ["there are no lines below the header."]),
    ("header only, no line end", "a,b", {}, ["there are no lines below the header."]),
    ("header and blank lines", "a,b\n\n \n", {}, ["there are no lines below the header."]),
    ("header and blank cells", "a,b\n,\n , \n", {}, ["there are no lines with text below the header."]),
    ("short line", "a,b,c\n1,2,3\n1,2\n", {}, ["line 3: this line has 2 cells and the header has 3."]),
    ("long line", "a,b\n1,2\n1,2,3\n", {}, ["line 3: this line has 3 cells and the header has 2."]),
    (
        "one short, one long",
        "a,b,c\n1,2\n1,2,3,4\n",
        {},
        ["line 2: this line has 2 cells", "line 3: this line has 4 cells"],
    ),
    ("one cell", "a,b\n1,2\nx\n", {}, ["line 3: this line has 1 cell and the header has 2."]),
    ("too long, unended", "a,b\n1,2\n1,2,3", {}, ["line 3: this line has 3 cells"]),
    (
        "ragged below a quoted line break",
        'a,b\n"x\n\ny",2\n\n1\n',
        {},
        ["line 6: this line has 1 cell and the header has 2."],
    ),
    ("ragged and one column", "a\n1,2\n", {}, ["line 2: this line has 2 cells and the header has 1."]),
    (
        "blank column name",
        "a,,c, \n1,2,3,4\n",
        {},
        ["line 1: column 2 has no name.", "line 1: column 4 has no name."],
    ),
    (
        "repeated column name",
        "a,b, a ,b\n1,2,3,4\n",
        {},
        ["columns 1 and 3 have the same name. Found: a.", "columns 2 and 4 have the same name. Found: b."],
    ),
    (
        "column names equal in NFC",
        "\u00e9,e\u0301\n1,2\n",
        {},
        ["columns 1 and 2 have the same name. Found: \u00e9."],
    ),
    (
        "semicolons",
        "a;b;c\n1;2;3\n",
        {},
        [
            "line 1: the header is one cell and holds a semicolon; if that is what separates",
        ],
    ),
    ("semicolons and decimal commas", "a;b\n1,5;2\n", {}, ['say separator = ";"']),
    ("tabs", "a\tb\n1\t2\n", {}, ["the header is one cell and holds a tab", 'separator = "\\t"']),
    ("commas", "a,b\n1,2\n", {"separator": ";"}, ["holds a comma", 'separator = ","']),
    (
        "unknown separator",
        "a|b\n1|2\n",
        {"separator": "|"},
        ["separator: this separator is not known. Found: '|'.", "comma"],
    ),
    ("separator of two signs", CREW, {"separator": ", "}, ["this separator is not known. Found: ', '."]),
    ("no separator", CREW, {"separator": ""}, ["this separator is not known. Found: ''."]),
    (
        "unknown encoding",
        CREW,
        {"encoding": "utf8-bom"},
        ["encoding: this encoding is not known. Found: utf8-bom. Allowed: utf-8, utf-16"],
    ),
    ("misspelt encoding", CREW, {"encoding": "cp125"}, ["Did you mean 'cp125"]),
    ("encoding that is no text", CREW, {"encoding": "rot13"}, ["this encoding is not known. Found: rot13."]),
    ("encoding with NUL", CREW, {"encoding": "utf\0"}, ["this encoding is not known."]),
    (
        "cp1252 read as utf-8",
        "a,b\n1,2\nZo\u00eb,x\n".encode("cp1252"),
        {},
        ['line 3: these bytes are not utf-8; name the encoding of the file, such as encoding = "cp1252". Found: EB.'],
    ),
    ("cut in the middle of a character", "a,b\n1,\u00eb".encode()[:-1], {}, ["line 2: these bytes are not utf-8"]),
    ("surrogates in utf-8", b"a,b\n\xed\xa0\x80,1\n", {}, ["line 2: these bytes are not utf-8"]),
    ("overlong utf-8", b"a,b\n\xc0\x80,1\n", {}, ["line 2: these bytes are not utf-8"]),
    ("undefined in cp1252", b"a,b\n\x81,1\n", {"encoding": "cp1252"}, ["line 2: these bytes are not cp1252", "81"]),
    (
        "utf-16 read as utf-8",
        CREW.encode("utf-16"),
        {},
        ['this file is not utf-8; if it is a CSV file, say encoding = "utf-16".'],
    ),
    ("utf-16-le without mark", CREW.encode("utf-16-le"), {}, ['say encoding = "utf-16-le"']),
    ("utf-16-be without mark", CREW.encode("utf-16-be"), {}, ['say encoding = "utf-16-be"']),
    (
        "utf-16 without mark",
        CREW.encode("utf-16-le"),
        {"encoding": "utf-16"},
        ["encoding: a utf-16 file starts with a byte order mark", "Allowed: utf-16-le, utf-16-be."],
    ),
    ("utf-16 cut short", CREW.encode("utf-16")[:-1], {"encoding": "utf-16"}, ["line 3: these bytes are not utf-16"]),
    (
        "NUL",
        "a,b\n1,2\nx,y\0z\n",
        {},
        ["line 3, column b: there is a control character in this cell. Found: U+0000, NUL."],
    ),
    ("escape, first column", "a,b\n\x1b[0m,2\n", {}, ["line 2, column a: ", "U+001B"]),
    ("delete", "a,b\n1,\x7f\n", {}, ["line 2, column b: ", "U+007F"]),
    ("C1 control", "a,b\n1,x\u0085\n", {}, ["line 2, column b: ", "U+0085"]),
    ("mark in the middle", "a,b\n\ufeff1,2\n", {}, ["line 2, column a: ", "U+FEFF, a byte order mark"]),
    ("control in the header", "a,b\x01c\n1,2\n", {}, ["line 1, column 2: ", "U+0001"]),
    (
        "control below a quoted line break",
        'a,b\n"x, y\n","\n\x02"\n',
        {},
        ["line 4, column b: ", "U+0002"],
    ),
    ("control in a quoted cell", 'a,b\n"x,\x03",1\n', {}, ["line 2, column a: ", "U+0003"]),
    ("control beside tabs", "a,b\nx\ty,\x04\n", {}, ["line 2, column b: ", "U+0004"]),
    ("control among tab separators", "a\tb\nx\t\x04\n", {"separator": "\t"}, ["line 2, column b: ", "U+0004"]),
    ("lone return", "a,b\n1\r,2\n", {}, ["line 2, column a: ", "U+000D, a carriage return without a line feed"]),
    ("return twice", "a,b\r\r\n1,2\r\n", {}, ["line 1, column b: ", "U+000D"]),
    ("return at the end", "a,b\n1,2\r", {}, ["line 2, column b: ", "U+000D"]),
    ("returns only", "a,b\r1,2\r3,4\r", {}, ["the lines of this file end with carriage returns only"]),
    (
        "latin-1 that is cp1252",
        "a,b\n\u20ac,1\n".encode("cp1252"),
        {"encoding": "latin-1"},
        ["U+0080", 'encoding = "cp1252"'],
    ),
    (
        "quote in a cell",
        'a,b\n5" pipe,1\nx,2\n6" pipe,3\n',
        {},
        [
            "line 2: there is a quotation mark within a cell that does not begin with one; put the whole cell in",
            "line 4: there is a quotation mark within a cell",
        ],
    ),
    ("quote after a space", 'a,b\n1, "x"\n', {}, ["line 2: there is a quotation mark within a cell"]),
    (
        "text after a quote",
        'a,b\n"x" y,1\n',
        {},
        ["line 2: text follows the quotation mark that closes the cell opened on line 2"],
    ),
    (
        "text after a quote, lines below",
        'a,b\n1,"x\nq,"y"\n',
        {},
        ["line 3: text follows the quotation mark that closes the cell opened on line 2"],
    ),
    (
        "unclosed quote",
        'a,b\n1,2\n3,"x\n5,6\n',
        {},
        ["line 3: the quotation mark that opens a cell here is never closed."],
    ),
    ("unclosed quote in the header", 'a,"b\n1,2\n', {}, ["line 1: the quotation mark that opens a cell here"]),
    ("lone quote at the end", 'a,b\n1,"', {}, ["line 2: the quotation mark that opens a cell here is never closed."]),
    ("two quotes in a cell", 'a,b\n1,x""y\n', {}, ["line 2: there is a quotation mark within a cell"]),
    (
        "several kinds at once",
        "a,a\n1,\x01\n1\n1,2,3\n",
        {},
        ["same name", "line 2, column a: there is a control", "line 3: this line has 1", "line 4: this line has 3"],
    ),
    (
        "a worksheet of a CSV file",
        CREW,
        {"worksheet": "Crew"},
        ["worksheet: only .xlsx files have worksheets. Found: Crew."],
    ),
    ("PNG", b"\x89PNG\r\n\x1a\n" + bytes(range(256)), {}, ["this is no CSV file: it looks like a PNG picture."]),
    ("ZIP", b"PK\x03\x04" + bytes(99), {}, ["looks like a ZIP archive or an office file"]),
    ("PDF", b"%PDF-1.7\n", {}, ["looks like a PDF document"]),
    ("binary", bytes(range(1, 32)) * 9, {}, ["this is no CSV file: it holds binary data."]),
    ("zeros", bytes(100), {}, ["this file is not utf-8"]),
]


@pytest.mark.parametrize(("content", "options", "parts"), [bad[1:] for bad in BAD], ids=[bad[0] for bad in BAD])
def test_bad_files(read: Callable[..., Table], content: bytes | str, options: dict[str, str], parts: list[str]) -> None:
    faults = faults_of(read, content, **options)
    assert all(fault.startswith("crew.csv") for fault in faults)
    for part in parts:
        assert sum(part in fault for fault in faults) == 1, faults
    assert all(any(part in fault for part in parts) for fault in faults), faults


@pytest.mark.parametrize(
    ("content", "more"),
    [
        ("a,b\n" + "1\n" * 50, 30),
        ("a,b\n" + "1,some text\x01\n" * 50, 30),
        ("a,b\n" + '1,x"\n' * 50, 30),
        (",".join("a" * 50) + "\n" + ",".join("1" * 50) + "\n", 29),
        ("a,b\n" + "1,some text\x01\n" * 15 + "1\n" * 15, 10),
    ],
)
def test_faults_are_capped_at_twenty(read: Callable[..., Table], content: str, more: int) -> None:
    faults = faults_of(read, content)
    assert len(faults) == 21
    assert faults[-1] == f"crew.csv: and {more} more faults in this file."


def test_paths_that_are_no_list(tmp_path: Path) -> None:
    (tmp_path / "folder.csv").mkdir()
    (tmp_path / "crew.csv").write_text(CREW, encoding="utf-8")
    (tmp_path / "loop.csv").symlink_to("loop.csv")
    os.mkfifo(tmp_path / "pipe.csv")
    for name, part in [
        ("folder.csv", "folder.csv: this is a folder, not a file."),
        ("crews.csv", "crews.csv: there is no such file. Did you mean 'crew.csv'?"),
        ("no/such.csv", "there is no such file."),
        ("crew.csv/x.csv", "this file cannot be read: Not a directory."),
        ("loop.csv", "this file cannot be read: "),
        ("pipe.csv", "this is not a regular file."),
        ("a\0b.csv", "this file cannot be read: embedded null"),
        ("n" * 300 + ".csv", "this file cannot be read: File name too long."),
        ("crew.xls", "files of this type (.xls) are not read; save it as .xlsx or .csv."),
        ("crew.ods", "files of this type (.ods) are not read"),
    ]:
        (fault,) = faults_of(read_table, tmp_path / name)
        assert part in fault


def test_a_file_that_may_not_be_read(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "crew.csv"
    path.write_text(CREW, encoding="utf-8")

    def refuse(*_: object, **__: object) -> None:
        raise PermissionError(13, "Permission denied")

    # By rights alone it could not be tested as root.
    monkeypatch.setattr(Path, "open", refuse)
    assert faults_of(read_table, path) == ["crew.csv: this file may not be read: permission was denied."]


# --- against the csv module ---------------------------------------------------------------------------------

CELL = st.text(
    st.one_of(
        st.sampled_from(list(' \t,;"\n\u00a0\u3000ae\u0301\u0308\u00e9')),
        st.characters(exclude_categories=["Cc", "Cs"], exclude_characters="\ufeff"),
    ),
    max_size=6,
)


@st.composite
def grids(draw: st.DrawFn) -> list[list[str]]:
    width = draw(st.integers(1, 4))
    return draw(st.lists(st.lists(CELL, min_size=width, max_size=width), min_size=1, max_size=12))


@settings(max_examples=400, deadline=None)
@given(
    grids(),
    st.sampled_from([",", ";", "\t"]),
    st.sampled_from(["\n", "\r\n"]),
    st.sampled_from([csv.QUOTE_MINIMAL, csv.QUOTE_ALL]),
    st.sampled_from(["utf-8", "utf-8-sig", "utf-16"]),
    st.booleans(),
    st.sampled_from([8, 64, 1 << 18]),
)
@example([["x", " y"], ["", ""], ["z", "1"]], ",", "\n", csv.QUOTE_MINIMAL, "utf-8", True, 8)
def test_reads_what_csv_writes(
    tmp_path_factory: pytest.TempPathFactory,
    grid: list[list[str]],
    separator: str,
    ending: str,
    quoting: int,
    encoding: str,
    ended: bool,
    piece: int,
) -> None:
    names = [f"c{at}" for at in range(len(grid[0]))]
    out = io.StringIO(newline="")
    writer = csv.writer(out, delimiter=separator, lineterminator=ending, quoting=quoting)  # type: ignore[arg-type]
    starts, line = [], 1
    for row in [names, *grid]:
        starts.append(line)
        before = out.getvalue().count("\n")
        writer.writerow(row)
        line += out.getvalue().count("\n") - before
    text = out.getvalue() if ended else out.getvalue().removesuffix(ending)
    expected = [([clean(cell) for cell in row], start) for row, start in zip(grid, starts[1:], strict=True)]
    expected = [(row, start) for row, start in expected if any(row)]
    path = tmp_path_factory.getbasetemp() / f"grid-{os.getpid()}.csv"
    path.write_bytes(text.encode(encoding))
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(core.csvtext, "_PIECE", piece)
        if not expected:
            assert "below the header" in faults_of(read_table, path, encoding=encoding, separator=separator)[0]
            return
        table = read_table(path, encoding=encoding, separator=separator)
    assert rows_of(table) == [row for row, _ in expected]
    assert table.lines.tolist() == [start for _, start in expected]


@settings(max_examples=600, deadline=None)
@given(
    st.text(st.sampled_from(list('a,",;\t\n\r \x00\x01\u00e9\u0301')), max_size=40).map(str.encode)
    | st.binary(max_size=60),
    st.sampled_from([8, 1 << 18]),
)
def test_any_bytes_are_a_table_or_faults(tmp_path_factory: pytest.TempPathFactory, content: bytes, piece: int) -> None:
    path = tmp_path_factory.getbasetemp() / f"any-{os.getpid()}.csv"
    path.write_bytes(content)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(core.csvtext, "_PIECE", piece)
        table = table_or_none(path)
    if table is None:
        return
    text = content.decode("utf-8-sig").replace("\r\n", "\n")
    rows = [[clean(cell) for cell in row] for row in csv.reader(io.StringIO(text, newline=""), strict=True)]
    kept = [row for row in rows if any(row)]
    assert [list(table.columns), *rows_of(table)] == kept


def test_loose_characters_are_all_that_composing_may_change() -> None:
    signs = [chr(code) for code in range(0x110000) if unicodedata.category(chr(code)) not in ("Cs", "Cn")]
    loose = pl.Series(signs).str.contains(core.cells.LOOSE).to_list()
    # The second character of whatever composes: in the decompositions that are no exclusions.
    parts = [unicodedata.normalize("NFD", sign)[1:] for sign in signs if unicodedata.is_normalized("NFC", sign)]
    seconds = set("".join(parts))
    for sign, is_loose in zip(signs, loose, strict=True):
        changes = not unicodedata.is_normalized("NFC", sign) or unicodedata.combining(sign) or sign in seconds
        assert is_loose or not changes, hex(ord(sign))
    assert not any(loose[: signs.index("\u0300")])


@pytest.mark.parametrize(
    "content", ["\uac00", "\u1100\u1161", "\u0418\u0306", "\u4e00", "\uf900", "\u2126", "\u30ab\u3099"]
)
def test_cells_are_composed(read: Callable[..., Table], content: str) -> None:
    assert read(f"a,b\n{content},\u3000 {content}\u2003\n").text("b") == [unicodedata.normalize("NFC", content)]


def test_large_files_with_quoted_line_breaks(read: Callable[..., Table]) -> None:
    grid = [[str(n), f'x "{n}"\n, y' if n % 3 else "plain", "\u00e9 " * (n % 5)] for n in range(60_000)]
    out = io.StringIO(newline="")
    csv.writer(out, lineterminator="\r\n").writerows([["a", "b", "c"], *grid])
    table = read(out.getvalue())
    assert rows_of(table) == [[cell.strip() for cell in row] for row in grid]
    assert table.lines.tolist()[:4] == [2, 3, 5, 7]
    assert frame_of(table, "a").size == 60_000


@pytest.mark.parametrize("separator", [",", "\t"])
def test_large_regular_files(read: Callable[..., Table], separator: str) -> None:
    grid = [[str(n), "" if n % 3 else "deck 1", "x" * (n % 50)] for n in range(60_000)]
    content = "".join(separator.join(row) + "\n" for row in [["a", "b", "c"], *grid])
    table = read(content, separator=separator)
    assert rows_of(table) == grid
    assert table.lines.tolist() == list(range(2, 60_002))
    # The number of separators is right in each of these, but not where they are.
    for line, change, count in [(30_000, "", 2), (59_999, "", 2), (30_000, "\n1", 3)]:
        lines = content.splitlines()
        lines[line] += separator
        lines[line + 1] = lines[line + 1].replace(separator, change, 1)
        faults = faults_of(read, "\n".join(lines), separator=separator)
        assert f"line {line + 1}: this line has 4 cells and the header has 3." in faults[0]
        assert len(faults) == count


@pytest.mark.parametrize("quoted", ["", '"'])
def test_lines_longer_than_a_piece(read: Callable[..., Table], quoted: str) -> None:
    long = "x" * 600_000
    for end in ("\n", ""):
        table = read(f"a,b\n{quoted}{long}{quoted},1\n2,{quoted}{long} {quoted}{end}")
        assert rows_of(table) == [[long, "1"], ["2", long]]
        assert "U+0001" in faults_of(read, f"a,b\n1,{quoted}{long}\x01{quoted}{end}")[0]


# --- rows in the sheet --------------------------------------------------------------------------------------


def test_inline_table() -> None:
    table = inline_table(
        "frame",
        [
            {"id ": " a ", "n": 7, "x": Decimal("1.50"), "e": ""},
            {"n": -7, "e": "Zoe\u0308", "id": "b\nc", "x": "007"},
        ],
    )
    assert table.columns == ("id", "n", "x", "e")
    assert rows_of(table) == [["a", "7", "1.50", ""], ["b\nc", "-7", "007", "Zo\u00eb"]]
    assert table.lines.tolist() == [1, 2]
    assert table.place(1, "n") == "row 2, column n"
    cells = [list(table.columns), *rows_of(table)]
    text = json.dumps(cells, ensure_ascii=False, separators=(",", ":"))
    assert table.sha256 == hashlib.sha256(text.encode()).hexdigest()
    assert table.blocks == (table.sha256,)


def test_inline_blocks() -> None:
    assert len(inline_table("frame", [{"id": n} for n in range(999)]).blocks) == 1
    assert len(inline_table("frame", [{"id": n} for n in range(1000)]).blocks) == 2


@pytest.mark.parametrize(
    ("rows", "parts"),
    [
        ([], ["frame: the list has no rows."]),
        ([{}], ["frame: the list has no columns."]),
        ([{"id": True}], ["frame, row 1, column id: this value cannot be a cell. Found: True.", "Allowed: text"]),
        ([{"id": None}], ["this value cannot be a cell. Found: None."]),
        ([{"id": [1]}], ["this value cannot be a cell. Found: [1]."]),
        ([{"id": {"a": 1}}], ["this value cannot be a cell."]),
        ([{"id": 1.5}], ["this value cannot be a cell. Found: 1.5."]),
        ([{"id": datetime.date(2026, 3, 1)}], ["this value cannot be a cell. Found: 2026-03-01.", "quotation marks"]),
        ([{"id": Decimal("NaN")}], ["this number is not written in full. Found: NaN."]),
        ([{"id": Decimal("inf")}], ["this number is not written in full. Found: Infinity."]),
        ([{"id": Decimal("1e400")}], ["this number is not written in full. Found: 1E+400."]),
        ([{"id": Decimal("1e-999999")}], ["this number is not written in full."]),
        ([{"id": 10**5000}], ["this number is too large."]),
        ([{"id": "a\0"}], ["row 1, column id: there is a control character in this cell. Found: U+0000, NUL."]),
        ([{"i\x01": "a"}], ["row 1: there is a control character", "U+0001"]),
        ([{" ": "a"}], ["row 1: column 1 has no name."]),
        ([{"id": "a", "id ": "b"}], ["row 1: columns 1 and 2 have the same name. Found: id."]),
        (
            [{"id": "a", "grade": 1}, {"id": "b", "grdae": 2}],
            [
                "row 2: the first row has no such column. Found: grdae. Allowed: id, grade. Did you mean 'grade'?",
                "row 2: column grade of the first row is missing here",
            ],
        ),
        ([{"id": "a"}, {"id": "b", "id ": "c"}], ["row 2: two columns of this row have the same name."]),
        ([{"id": "a"}, {"id": None}, {"id": False}], ["row 2, column id", "row 3, column id"]),
    ],
)
def test_bad_rows(rows: list[dict[str, object]], parts: list[str]) -> None:
    faults = faults_of(inline_table, "frame", rows)
    for part in parts:
        assert any(part in fault for fault in faults), faults


# --- worksheets ---------------------------------------------------------------------------------------------


def book(path: Path, sheets: dict[str, list[list[object]]], merge: str = "") -> Path:
    workbook = openpyxl.Workbook()
    workbook.remove(workbook.worksheets[0])
    for title, rows in sheets.items():
        sheet = workbook.create_sheet(title)
        for row in rows:
            sheet.append(row)
        if merge:
            sheet.merge_cells(merge)
    workbook.save(path)
    return path


def test_worksheet_cells_are_text(tmp_path: Path) -> None:
    rows: list[list[object]] = [
        [],
        [" badge ", "n", "when", "flag", "note"],
        ["007", 5, datetime.date(2026, 3, 1), True, " x "],
        [8, 5.25, datetime.datetime(2026, 3, 1, 8, 30), False, "Zoe\u0308"],
        [],
        ["009", -1000000, datetime.time(8, 30), None, "a\nb"],
        [None, " ", None],
    ]
    path = book(tmp_path / "crew.XLSX", {"Crew": rows, "Other": [["a"], ["1"]]})
    table = read_table(path)
    assert table.columns == ("badge", "n", "when", "flag", "note")
    assert rows_of(table) == [
        ["007", "5", "2026-03-01", "true", "x"],
        ["8", "5.25", "2026-03-01 08:30:00", "false", "Zo\u00eb"],
        ["009", "-1000000", "08:30:00", "", "a\nb"],
    ]
    assert table.lines.tolist() == [3, 4, 6]
    assert table.place(2, "n") == "row 6, column n"
    assert table.sha256 == hashlib.sha256(path.read_bytes()).hexdigest()
    assert rows_of(read_table(path, worksheet="Other")) == [["1"]]


def test_worksheet_blocks_tell_the_rows(tmp_path: Path) -> None:
    rows: list[list[object]] = [["id"]]
    rows += [[n] for n in range(2500)]
    before = read_table(book(tmp_path / "a.xlsx", {"S": rows})).blocks
    rows[1700] = ["x"]
    after = read_table(book(tmp_path / "b.xlsx", {"S": rows})).blocks
    assert [a == b for a, b in zip(before, after, strict=True)] == [True, False, True]


@pytest.mark.parametrize(
    ("rows", "merge", "parts"),
    [
        ([], "", ["this worksheet is empty."]),
        ([[" ", None]], "", ["this worksheet is empty."]),
        ([["a", "b"]], "", ["there are no rows below the header."]),
        ([["a", None], [1, 2]], "", ["row 1: column 2 has no name."]),
        ([["a", "b", "a "], [1, 2, 3]], "", ["row 1: columns 1 and 3 have the same name. Found: a."]),
        ([["a", "b"], [1, 2]], "A1:B1", ["cells A1:B1: these cells are merged", "column 2 has no name"]),
        ([["a", "b"], ["x", 1], [None, 2]], "A2:A3", ["cells A2:A3: these cells are merged; give each row its own"]),
        ([["a", "b"], ["#N/A", 1], ["#DIV/0!", 1]], "", ["cell A2: this cell shows an error", "cell A3: this cell"]),
        ([["a", "b"], [12345678901234567, 1]], "", ["cell A2: this number has more digits than a spreadsheet keeps"]),
        ([["a", "b"], ["x", "y\ufeff"]], "", ["row 2, column b: there is a control character", "U+FEFF"]),
    ],
)
def test_bad_worksheets(tmp_path: Path, rows: list[list[object]], merge: str, parts: list[str]) -> None:
    faults = faults_of(read_table, book(tmp_path / "crew.xlsx", {"Crew": rows}, merge))
    assert all(fault.startswith("crew.xlsx") for fault in faults)
    for part in parts:
        assert any(part in fault for fault in faults), faults


def test_unknown_worksheet(tmp_path: Path) -> None:
    path = book(tmp_path / "crew.xlsx", {"Crew": [["a"], [1]], "Ships & more": [["a"], [1]]})
    (fault,) = faults_of(read_table, path, worksheet="Crww")
    assert "worksheet: this file has no such worksheet. Found: Crww. Allowed: Crew, Ships & more." in fault
    assert "Did you mean 'Crew'?" in fault
    assert rows_of(read_table(path, worksheet="Ships & more")) == [["1"]]


@pytest.mark.parametrize("content", [b"", b"a,b\n1,2\n", b"PK\x03\x04" + bytes(50), b"PK\x05\x06" + bytes(18)])
def test_files_that_are_no_workbook(tmp_path: Path, content: bytes) -> None:
    path = tmp_path / "crew.xlsx"
    path.write_bytes(content)
    assert faults_of(read_table, path) == [
        "crew.xlsx: this file is no XLSX workbook, or it is damaged or locked by a password."
    ]


def test_damaged_workbooks(tmp_path: Path) -> None:
    good = book(tmp_path / "good.xlsx", {"Crew": [["a", "b"], ["x", 1], ["y", 2]]}).read_bytes()
    path = tmp_path / "crew.xlsx"
    for cut in range(10, len(good), len(good) // 40):
        path.write_bytes(good[:cut])
        faults_of(read_table, path)
    with zipfile.ZipFile(io.BytesIO(good)) as parts:
        names = parts.namelist()
        for left_out in names:
            with zipfile.ZipFile(path, "w") as other:
                for name in names:
                    content = parts.read(name)
                    other.writestr(name, content[: len(content) // 2] if name == left_out else content)
            table = table_or_none(path)
            assert table is None or table.columns == ("a", "b")
