"""Delimited text to a raw table: encodings, gzip, delimiter, quotes, comments, lines as an editor counts.

Nothing here knows what a column means; every cell stays the text it was.
"""

from __future__ import annotations

import csv
import gzip
import zlib
from collections.abc import Iterator
from dataclasses import dataclass
from itertools import compress

import numpy as np

from kernelfit.errors import Fault, TableError
from kernelfit.recording.cells import Cells
from kernelfit.recording.raw_table import KNOWN_COLUMNS, RawTable
from kernelfit.recording.recording import SourceFile

DELIMITERS = {",": "commas", ";": "semicolons", "\t": "tabs", "|": "vertical bars"}
COMMENT = "#"
_HEADER_WITHIN = 20  # lines: where a header is looked for below a title

_LOOKED_AT = 1000  # bytes
_GZIP_MAGIC = b"\x1f\x8b"
# What people hand over in place of a text table, by its first bytes.
_FOREIGN = (
    (
        b"PK\x03\x04",
        "an Excel workbook or another zip archive",
        "Save the sheet as CSV (UTF-8), or unpack the archive.",
    ),
    (b"\xd0\xcf\x11\xe0", "an old Excel workbook", "Save the sheet as CSV (UTF-8)."),
    (b"\x89HDF", "an HDF5 file", "Export its spike times and positions as CSV tables."),
    (b"MATLAB 5", "a MATLAB file", "Export its spike times and positions as CSV tables."),
    (b"\x93NUMPY", "a NumPy file", "Load it with numpy and use Recording.from_arrays."),
    (b"PAR1", "a Parquet file", "Give its name the ending .parquet."),
    (b"%PDF", "a PDF document", "Export the table behind it as CSV."),
    (b"\x89PNG", "a picture", "Name the table instead."),
    (b"\xff\xd8\xff", "a picture", "Name the table instead."),
    (b"<", "a web page or an XML file", "Download or export the table itself, as CSV."),
    (b"{", "a JSON file", "Export its spike times and positions as CSV tables."),
    (b"[", "a JSON file", "Export its spike times and positions as CSV tables."),
    (b"BZh", "a bzip2 archive", "Unpack it, or pack it with gzip."),
    (b"\xfd7zXZ", "an xz archive", "Unpack it, or pack it with gzip."),
    (b"(\xb5/\xfd", "a zstandard archive", "Unpack it, or pack it with gzip."),
)


def _refused(source: SourceFile, problem: str, remedy: str, row: int | None = None) -> TableError:
    return TableError([Fault(source.name, problem, remedy, row=row)])


# --- bytes to lines --------------------------------------------------------------------------------------


def _unpacked(data: bytes, source: SourceFile, gzip_expected: bool) -> bytes:
    if not data.startswith(_GZIP_MAGIC):
        if gzip_expected and data:
            problem = "The name ends in .gz, but the file is not packed with gzip."
            raise _refused(source, problem, "Rename it to .csv, or pack it again.")
        return data
    try:
        return gzip.decompress(data)
    except (OSError, EOFError, zlib.error) as error:
        problem = f"The gzip file is damaged or cut short ({str(error).rstrip('.')})."
        raise _refused(source, problem, "Copy or pack it again.") from None


def _decoded(data: bytes, source: SourceFile) -> str:
    beginning = data[:_LOOKED_AT].removeprefix(b"\xef\xbb\xbf").lstrip()
    for magic, kind, remedy in _FOREIGN:
        if beginning.startswith(magic):
            raise _refused(source, f"This is {kind}, not a text table.", remedy)
    encoding = "UTF-8-SIG"  # with or without a byte-order mark
    if data.startswith((b"\xff\xfe\x00\x00", b"\x00\x00\xfe\xff")):
        encoding = "UTF-32"
    elif data.startswith((b"\xff\xfe", b"\xfe\xff")):
        encoding = "UTF-16"  # what some spreadsheets call "Unicode text"
    elif b"\x00" in data:
        problem = "The file holds zero bytes: binary data, or UTF-16 without its mark."
        raise _refused(source, problem, "Save it as CSV in UTF-8.", _line_of(data, data.index(b"\x00")))
    try:
        return data.decode(encoding)
    except UnicodeDecodeError as error:
        bad = error.object[error.start]
        problem = f"The text is not {encoding.removesuffix('-SIG')} (byte 0x{bad:02x})."
        row = _line_of(error.object, error.start) if encoding == "UTF-8-SIG" else None
        raise _refused(source, problem, "Save the file as CSV in UTF-8.", row) from None


def _line_of(data: bytes, at: int) -> int:
    """Line that holds this byte, from 1; LF, CRLF or CR."""
    before = data[:at]
    return before.count(b"\n") + before.count(b"\r") - before.count(b"\r\n") + 1


def _is_skipped(line: str) -> bool:
    text = line.lstrip()
    return not text or text[0] == COMMENT


# --- lines to columns ------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, eq=False)
class _Body:
    """Names and cells of the columns, the line each row starts on (from 1), and rows not taken apart."""

    names: tuple[str, ...]
    columns: tuple[Cells, ...]
    lines: list[int]
    faults: tuple[Fault, ...] = ()


def _split(lines: list[str], kept: list[bool], delimiter: str, source: SourceFile) -> _Body:
    """Take all lines apart: at once where every row is one line, row by row where there is doubt."""
    numbers = [k for k, keep in enumerate(kept, start=1) if keep]
    wanted = list(compress(lines, kept))
    quoted = [line for line in wanted if '"' in line]
    if not quoted and (body := _split_plain(wanted, numbers, delimiter)) is not None:
        return body
    # An odd number of quotes in a line means a cell that runs over its end, or a stray quote.
    if not any(line.count('"') % 2 for line in quoted):
        try:
            records = list(csv.reader(wanted, delimiter=delimiter, skipinitialspace=True, strict=True))
        except csv.Error:
            records = []
        if len(records) == len(wanted):
            return _body(records, numbers, [], delimiter, source)
    return _split_slowly(lines, delimiter, source)


def _split_plain(wanted: list[str], numbers: list[int], delimiter: str) -> _Body | None:
    """Without quotes and with as many delimiters in each line, one split does: no list for each row."""
    n = wanted[0].count(delimiter)
    if any(line.count(delimiter) != n for line in wanted):
        return None
    cells = delimiter.join(wanted).split(delimiter)
    names = tuple(c.strip() for c in cells[: n + 1])
    columns: tuple[Cells, ...] = tuple(list[object](cells[n + 1 + k :: n + 1]) for k in range(n + 1))
    return _Body(names, columns, numbers[1:])


def _body(
    records: list[list[str]], numbers: list[int], faults: list[Fault], delimiter: str, source: SourceFile
) -> _Body:
    """Columns of the rows with as many cells as the header, and a fault for each of the others."""
    if not records:
        raise TableError(faults)
    names = tuple(n.strip() for n in records[0])
    rows, lines = records[1:], numbers[1:]
    full = [len(row) == len(names) for row in rows]
    for row, line in ((r, k) for r, k, is_full in zip(rows, lines, full, strict=True) if not is_full):
        remedy = f"Write one cell for each column, separated by {DELIMITERS[delimiter]}."
        if delimiter == "," and len(row) > len(names):
            remedy += " If the comma is the decimal mark, separate by semicolons and load with decimal=','."
        problem = f"The row has {len(row)} cell{'s' * (len(row) != 1)}, the header {len(names)}."
        faults.append(Fault(source.name, problem, remedy, row=line))
    sound = list(compress(rows, full))
    columns: tuple[Cells, ...] = tuple(map(list, zip(*sound, strict=True))) if sound else tuple([] for _ in names)
    return _Body(names, columns, list(compress(lines, full)), tuple(faults))


class _Lines:
    """Feeds lines to the csv reader; skips comments and blanks, but never inside a quoted cell."""

    def __init__(self, lines: list[str]) -> None:
        self._lines = lines
        self._next = 0
        self.between_records = True
        self.record_line = 0

    def __iter__(self) -> Iterator[str]:
        return self

    def __next__(self) -> str:
        while self._next < len(self._lines):
            line = self._lines[self._next]
            self._next += 1
            if self.between_records:
                if _is_skipped(line):
                    continue
                self.between_records, self.record_line = False, self._next
            return line + "\n"
        raise StopIteration


def _split_slowly(lines: list[str], delimiter: str, source: SourceFile) -> _Body:
    records: list[list[str]] = []
    numbers: list[int] = []
    faults: list[Fault] = []
    feed = _Lines(lines)
    reader = csv.reader(feed, delimiter=delimiter, skipinitialspace=True, strict=True)
    while True:
        feed.between_records = True
        try:
            record = next(reader)
        except StopIteration:
            return _body(records, numbers, faults, delimiter, source)
        except csv.Error as error:
            remedy = 'Close the quote; a quote inside a quoted cell is written twice ("").'
            if "end of data" in str(error):
                problem = "A quote is opened here and never closed."
            elif "limit" in str(error):
                problem, remedy = (
                    "A cell is longer than 131072 characters.",
                    "Shorten it; a quote may be unclosed.",
                )
            else:
                problem = f"The quotes in this row do not match ({error})."
            faults.append(Fault(source.name, problem, remedy, row=feed.record_line))
        else:
            records.append(record)
            numbers.append(feed.record_line)


def _header_fields(header: str, delimiter: str) -> list[str]:
    try:
        fields = next(csv.reader([header], delimiter=delimiter, skipinitialspace=True))
    except (csv.Error, StopIteration):
        return []
    return [f.strip() for f in fields]


def _sniffed(header: str, known: tuple[str, ...]) -> str:
    """The delimiter that finds most of the known column names in the header, then most columns."""

    def score(delimiter: str) -> tuple[int, int]:
        fields = _header_fields(header, delimiter)
        return len(set(fields) & set(known)), len(fields)

    return max(DELIMITERS, key=score)  # the first of equals


def parse_delimited(data: bytes, source: SourceFile, *, gzip_expected: bool = False) -> RawTable:
    """A delimited text file as a raw table.

    UTF-8 with or without a byte-order mark, and UTF-16 with one; LF, CRLF or CR; commas, semicolons, tabs
    or vertical bars, found from the header; lines that start with ``#`` and blank lines skipped; quotes as
    in RFC 4180.

    Parameters
    ----------
    data : the file as it is on disk, gzip or not
    source : role, name and hash
    gzip_expected : True where the name ends in .gz

    Raises
    ------
    TableError : damaged gzip, not text, not UTF-8, or nothing in it
    """
    known = KNOWN_COLUMNS[source.role]
    text = _decoded(_unpacked(data, source, gzip_expected), source)
    lines = text.replace("\r\n", "\n").replace("\r", "\n").split("\n")
    kept = [line[:1].isalnum() or not _is_skipped(line) for line in lines]
    if True not in kept:
        state = "empty" if not any(map(str.strip, lines)) else "nothing but comments"
        raise _refused(source, f"The file is {state}.", f"It needs a header with the columns of a {source.role} table.")
    first = kept.index(True)
    delimiter = _sniffed(lines[first], known)
    body = _split(lines, kept, delimiter, source)
    return RawTable(
        source,
        body.names,
        body.columns,
        np.array(body.lines, dtype=np.int64),
        faults=body.faults,
        notes=_comment_notes(lines, kept, first, len(body.names), delimiter),
        hint=_header_hint(lines, first, body.names, known),
    )


def _comment_notes(lines: list[str], kept: list[bool], first: int, n_fields: int, delimiter: str) -> tuple[str, ...]:
    """Say so when a skipped comment looks like a row: an id that starts with # would vanish unseen."""
    if n_fields < 2:
        return ()

    def like_a_row(line: str) -> bool:
        fields = line.strip().lstrip(COMMENT).split(delimiter)
        return len(fields) == n_fields and any(f.strip()[:1].isdigit() for f in fields[1:])

    n = sum(not keep and like_a_row(line) for line, keep in zip(lines[first:], kept[first:], strict=True))
    return (f"{n} commented line{'s' * (n != 1)} (#) that look{'s' * (n == 1)} like rows skipped",) if n else ()


def _header_hint(lines: list[str], first: int, names: tuple[str, ...], known: tuple[str, ...]) -> str:
    """Why the columns may be missing although the file seems to hold them, or ""."""
    if set(names) & set(known):
        return ""
    for number, line in enumerate(lines[:first], start=1):
        text = line.lstrip().lstrip(COMMENT)
        if any(set(_header_fields(text, d)) & set(known) for d in DELIMITERS):
            return f"Line {number} holds column names behind a comment sign; remove the {COMMENT} there."
    for number, line in enumerate(lines[first + 1 : first + 1 + _HEADER_WITHIN], start=first + 2):
        if any(len(set(_header_fields(line, d)) & set(known)) > 1 for d in DELIMITERS):
            return f"Line {number} seems to be the header: delete what is above, or put {COMMENT} before it."
    if len(names) == 1 and set(names[0].replace(":", " ").split()) & set(known):
        return "Separate the columns by commas, semicolons or tabs, not by blanks."
    if any(n.lstrip("+-")[:1].isdigit() for n in names):
        return f"Line {first + 1} looks like data: put a header with the column names above it."
    return ""
