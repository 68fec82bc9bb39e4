"""Delimited text of any kind, streamed: every value knows its file, line and column.

A `Layout` says how a file is written; it is never guessed, but a layout that does not fit is
recognised and the message says what would.
"""

from __future__ import annotations

import csv
import os
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import TextIO

from restore.errors import TableError
from restore.files.text import why_unreadable
from restore.findings import Finding, Place, did_you_mean

FIELD_LIMIT = 10_000_000
LONGEST_SHOWN = 60
NAMED_DELIMITERS = {"tab": "\t", "comma": ",", "semicolon": ";", "space": " ", "bar": "|"}


@dataclass(frozen=True)
class Layout:
    """How a delimited file is written.

    `delimiter`: one character, one of the names `tab`, `comma`, `semicolon`, `space`, `bar`, or
    `whitespace` (any run of it). `comment`: lines that start with it are passed over, "" for none;
    `trailing_comments`: it also ends a line. `header`: the first line names the columns.
    `decimal`: "." or ",". `columns`: our name -> the file's name, or its number counted from 1.
    """

    delimiter: str = ","
    comment: str = ""
    trailing_comments: bool = False
    header: bool = True
    decimal: str = "."
    encoding: str = "utf-8-sig"
    columns: Mapping[str, str | int] = field(default_factory=dict)

    def __post_init__(self) -> None:
        mark = NAMED_DELIMITERS.get(self.delimiter, self.delimiter)
        if mark != "whitespace" and (len(mark) != 1 or mark in "\r\n\"'"):
            raise TableError(
                f"delimiter = {self.delimiter!r}: must be one character, whitespace or one of "
                + ", ".join(NAMED_DELIMITERS)
            )
        object.__setattr__(self, "delimiter", mark)
        if self.decimal not in {".", ","}:
            raise TableError(f"decimal = {self.decimal!r}: must be '.' or ','")
        if self.decimal == mark:
            raise TableError(f"decimal and delimiter are both {mark!r}")


@dataclass
class Chunk:
    """Some rows of a file: text by column, as it stands in the file.

    `header`: the file's own column names, or their numbers where it has none; `columns`: one list
    of texts each; `lines`: the line each row begins on; `surplus`: row -> fields beyond the header.
    `short`: rows with fewer fields than the header, whose missing texts are empty.
    """

    file: str
    header: list[str]
    columns: list[list[str]]
    lines: list[int]
    surplus: dict[int, list[str]]
    short: dict[int, int]

    def __len__(self) -> int:
        return len(self.lines)

    def place(self, row: int, column: int | None = None) -> Place:
        """Where a value stands: `column` counts from 0 here, from 1 in the place."""
        return Place(self.file, self.lines[row], None if column is None else column + 1)


class _Lines:
    """Physical lines with their numbers; comment lines between records are passed over."""

    def __init__(self, stream: TextIO, layout: Layout) -> None:
        self.stream = stream
        self.comment = layout.comment
        self.trailing = layout.trailing_comments or (
            layout.delimiter == "whitespace" and bool(layout.comment)
        )
        self.quoted = layout.delimiter != "whitespace"
        self.quotes = 0
        self.number = 0
        self.record_line: int | None = None

    def __iter__(self) -> Iterator[str]:
        for line in self.stream:
            self.number += 1
            if self.record_line is None:
                if self.comment and line.lstrip().startswith(self.comment):
                    continue
                if not line.strip():
                    continue
                self.record_line = self.number
                self.quotes = 0
            yield self._without_comment(line) if self.trailing else line

    def _without_comment(self, line: str) -> str:
        """The line up to a comment mark that stands outside quotes."""
        at = line.find(self.comment)
        while at >= 0 and self.quoted and (self.quotes + line.count('"', 0, at)) % 2:
            at = line.find(self.comment, at + 1)
        if at >= 0:
            line = line[:at].rstrip() + "\n"
        self.quotes += line.count('"')
        return line


class DelimitedReader:
    """A delimited file opened for reading in chunks; use as a context manager.

    Raises TableError, in one line, for a file that is missing, unreadable, empty, wrongly encoded,
    or whose header is at fault.
    """

    def __init__(self, path: str | os.PathLike[str], layout: Layout | None = None) -> None:
        self.path = Path(path)
        self.file = os.fspath(path)
        self.layout = layout or Layout()
        self.header: list[str] = []
        self.known: frozenset[str] = frozenset()

    def __enter__(self) -> DelimitedReader:
        self._stream = self._open()
        try:
            self._lines = _Lines(self._stream, self.layout)
            self._records = self._split(self._lines)
            self._first = self._next_record()
            self._read_header()
        except BaseException:
            self._stream.close()
            raise
        return self

    def __exit__(self, *_: object) -> None:
        self._stream.close()

    def _open(self) -> TextIO:
        try:
            with self.path.open("rb") as raw:
                start = raw.read(4096)
            encoding = self.layout.encoding
            if start[:2] in (b"\xff\xfe", b"\xfe\xff") and encoding == "utf-8-sig":
                encoding = "utf-16"
            elif b"\x00" in start:
                line = start.count(b"\n", 0, start.index(b"\x00")) + 1
                raise TableError(f"{self.file}:{line}: holds zero bytes: not a text table")
            self.encoding = encoding
            return self.path.open(encoding=encoding, newline="")
        except LookupError:
            raise TableError(
                f"{self.file}: encoding {self.layout.encoding!r} is not known; for example utf-8, latin-1"
            ) from None
        except OSError as exc:
            raise TableError(f"{self.file}: {why_unreadable(exc)}") from None

    def _split(self, lines: _Lines) -> Iterator[list[str]]:
        if self.layout.delimiter == "whitespace":
            return (line.split() for line in lines)
        csv.field_size_limit(FIELD_LIMIT)
        return csv.reader(lines, delimiter=self.layout.delimiter, strict=True)

    def _next_record(self) -> tuple[int, list[str]] | None:
        self._lines.record_line = None
        try:
            record = next(self._records)
        except StopIteration:
            return None
        except csv.Error as exc:
            line = self._lines.record_line or self._lines.number
            reason = "a quote that opens here is never closed"
            if "end of data" not in str(exc):
                reason = f"{exc}; a quote inside a quoted text is written twice"
            raise TableError(f"{self.file}:{line}: {reason}") from None
        except UnicodeDecodeError as exc:
            line, byte = self._undecodable(exc)
            raise TableError(
                f"{self.file}:{line}: byte 0x{byte:02x} is not {self.encoding.removesuffix('-sig')} text;"
                " save the file as UTF-8 or state its encoding"
            ) from None
        return self._lines.record_line or self._lines.number, record

    def _undecodable(self, found: UnicodeDecodeError) -> tuple[int, int]:
        """The line and the byte that cannot be decoded; text is decoded far ahead of the rows."""
        with self.path.open("rb") as raw:
            for line, data in enumerate(raw, start=1):
                try:
                    data.decode(self.encoding)
                except UnicodeDecodeError as exc:
                    return line, data[exc.start]
        return self._lines.number + 1, found.object[found.start]

    def _read_header(self) -> None:
        if self._first is None:
            raise TableError(f"{self.file}: is empty; a table needs at least a header line")
        line, record = self._first
        self.header_line = line
        if not self.layout.header:
            self.header = [str(i + 1) for i in range(len(record))]
            return
        self.header = [name.strip() for name in record]
        self._first = None
        seen: dict[str, int] = {}
        for i, name in enumerate(self.header):
            if name in seen and name:
                raise TableError(
                    f"{self.file}:{line}:{i + 1}: column {name!r} stands twice (also column"
                    f" {seen[name] + 1}); each name may stand once"
                )
            seen.setdefault(name, i)

    def bytes_read(self) -> int:
        """How far into the file the reading has come, for a progress bar."""
        return self._stream.buffer.tell() if hasattr(self._stream, "buffer") else 0

    def expect(self, known: Iterable[str]) -> None:
        """Say which columns have a meaning; raises TableError if the column map names another."""
        self.known = frozenset(known)
        for name in self.layout.columns:
            if name not in self.known:
                hint = did_you_mean(name, self.known) or "known: " + ", ".join(sorted(self.known))
                raise TableError(f"{self.file}: column map: {name!r} is not a column that is read; {hint}")

    def column(self, ours: str, required: bool = True) -> int | None:
        """The place (from 0) of one of our columns, through the layout's column map.

        Raises TableError if it is required and missing, or mapped to a column that is not there.
        """
        theirs = self.layout.columns.get(ours, ours)
        place = f"{self.file}:{self.header_line}"
        if isinstance(theirs, int):
            if not 1 <= theirs <= len(self.header):
                raise TableError(
                    f"{place}: column {theirs} was named for {ours}, but the table has"
                    f" {len(self.header)} columns"
                )
            return theirs - 1
        if self.layout.header and theirs in self.header:
            return self.header.index(theirs)
        if not required and ours not in self.layout.columns:
            return None
        raise TableError(f"{place}: {self._missing(ours, theirs)}")

    def _missing(self, ours: str, theirs: str) -> str:
        if not self.layout.header:
            return f"no column is named for {ours}; a table without a header is mapped by number"
        if len(self.header) == 1:
            for mark, name in (
                (";", "semicolon"),
                ("\t", "tab"),
                ("|", "bar"),
                (",", "comma"),
                (" ", "whitespace"),
            ):
                if mark in self.header[0]:
                    shown = self.header[0][:LONGEST_SHOWN]
                    shown += "..." if shown != self.header[0] else ""
                    return (
                        f"the header is one column, {shown!r}: the table looks {name}-delimited;"
                        f" state delimiter = {name!r} (an option of the command, or a key of the manifest"
                        " or scenario)"
                    )
        wanted = f"column {theirs!r}" + (f" (for {ours})" if theirs != ours else "")
        # a column that has a meaning of its own is no misspelling of another
        hint = did_you_mean(theirs, [name for name in self.header if name and name not in self.known])
        if not hint.startswith("did"):
            hint = "the header is " + ", ".join(self.header)
        return f"{wanted} is missing; {hint}"

    def chunks(self, size: int = 50_000) -> Iterator[Chunk]:
        """The rows in chunks of at most `size`; a table without rows gives one empty chunk."""
        width = len(self.header)
        given = False
        record = self._first or self._next_record()
        while record is not None or not given:
            chunk = Chunk(self.file, self.header, [], [], {}, {})
            rows: list[list[str]] = []
            while record is not None and len(rows) < size:
                line, fields = record
                if len(fields) != width:
                    if len(fields) > width:
                        chunk.surplus[len(rows)] = fields[width:]
                        fields = fields[:width]
                    else:
                        chunk.short[len(rows)] = len(fields)
                        fields = fields + [""] * (width - len(fields))
                rows.append(fields)
                chunk.lines.append(line)
                record = self._next_record()
            chunk.columns = [list(column) for column in zip(*rows, strict=True)]
            if not rows:
                chunk.columns = [[] for _ in range(width)]
            given = True
            yield chunk

    def length_fault(self, chunk: Chunk, row: int) -> Finding | None:
        """The fault of a row with more or fewer fields than the header, if it is one."""
        width = len(self.header)
        if row in chunk.surplus:
            found = width + len(chunk.surplus[row])
            remedy = "quote texts that hold the delimiter"
            if self.layout.delimiter == "," and self.layout.decimal == ".":
                remedy += "; decimal commas need another delimiter"
        elif row in chunk.short:
            found, remedy = chunk.short[row], "a missing value still needs its delimiter"
        else:
            return None
        what = f"the row has {found} fields where the header has {width}"
        return Finding("error", "row length", chunk.place(row), what, remedy=remedy)


def parse_number(text: str, decimal: str = ".") -> float:
    """The number that a text says; "" and NaN say "no value" and give NaN.

    Raises ValueError for anything else, digit groups included.
    """
    text = text.strip()
    if not text:
        return float("nan")
    if decimal == ",":
        if "." in text:
            raise ValueError(text)
        text = text.replace(",", ".")
    if "_" in text or not text.isascii():
        text = text.replace("\u2212", "-")
        if "_" in text or not text.isascii():
            raise ValueError(text)
    return float(text)


def parse_numbers(
    chunk: Chunk, column: int | None, name: str, decimal: str = "."
) -> tuple[list[float], list[Finding]]:
    """The numbers of a column, NaN where there is none, and a finding for each that is not one."""
    nan = float("nan")
    if column is None:
        return [nan] * len(chunk), []
    texts = chunk.columns[column]
    numbers: list[float] = []
    faults = []
    for row, text in enumerate(texts):
        try:
            numbers.append(parse_number(text, decimal))
        except ValueError:
            numbers.append(nan)
            what = f"{name} = {text!r} is not a number"
            remedy = "leave it empty if there is no value"
            if decimal == "." and text.strip().replace(",", "").replace("-", "").isdigit():
                remedy = "numbers have a decimal point; state decimal = ',' if commas are meant"
            place = chunk.place(row, column)
            faults.append(Finding("error", "not a number", place, what, remedy=remedy))
    return numbers, faults
