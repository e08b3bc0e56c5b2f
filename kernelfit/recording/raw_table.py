"""One table as it came in: named columns of cells, and the row number of each in the user's own counting."""

from __future__ import annotations

import hashlib
import os
from dataclasses import dataclass
from pathlib import Path
from typing import TypeAlias

import numpy as np
import pandas as pd

from kernelfit._typing import IntArray
from kernelfit._validation import described
from kernelfit.errors import ArgumentError, Fault, TableError, shortened
from kernelfit.recording.cells import Cells, is_missing
from kernelfit.recording.recording import SourceFile

TIME_UNITS = ("s", "ms", "us", "samples")
LENGTH_UNITS = ("um", "mm")
_PARQUET_MARK, _SMALLEST_PARQUET = b"PAR1", 12
ROWS_FROM_0 = " (rows counted from 0)"  # after the name of a table that has no lines to count

# Every column name that means something, by the role of the table.
KNOWN_COLUMNS: dict[str, tuple[str, ...]] = {
    "spikes": ("unit", *(f"time_{u}" for u in TIME_UNITS)),
    "sites": ("unit", *(f"{axis}_{u}" for axis in "xyz" for u in LENGTH_UNITS), "group", "source_only"),
    "windows": (*(f"{end}_{u}" for u in TIME_UNITS for end in ("start", "stop")), "condition", "trial"),
    "exclusions": tuple(f"{end}_{u}" for u in TIME_UNITS for end in ("start", "stop")),
    "exclude_pairs": ("unit_a", "unit_b"),
}

TableSource: TypeAlias = "str | os.PathLike[str] | pd.DataFrame"


@dataclass(frozen=True, slots=True, eq=False)
class RawTable:
    """Cells of one table, unchecked.

    Parameters
    ----------
    source : role, name and SHA-256 of the table
    names : column names, surrounding blanks trimmed, in order
    cells : one column each, all of the same length
    rows : row numbers: lines of the file (the first is 1; comments and blank lines count); in memory from 0
    in_memory : True for DataFrames and Parquet, which have no lines
    faults : rows that could not be taken apart; they are not in `cells`
    notes : what was skipped in reading and deserves a word
    hint : a sentence on why columns may be missing, or ""
    """

    source: SourceFile
    names: tuple[str, ...]
    cells: tuple[Cells, ...]
    rows: IntArray
    in_memory: bool = False
    faults: tuple[Fault, ...] = ()
    notes: tuple[str, ...] = ()
    hint: str = ""

    @property
    def n_rows(self) -> int:
        """Rows of data."""
        return len(self.rows)

    def column(self, name: str) -> Cells:
        """The cells of the first column of that name."""
        return self.cells[self.names.index(name)]

    def fault(
        self,
        problem: str,
        remedy: str,
        *,
        at: int | None = None,
        column: str | None = None,
        value: str | None = None,
    ) -> Fault:
        """A fault of this table; `at` is the place of the row among the cells, from 0."""
        if at is None:
            return Fault(self.source.name, problem, remedy, column=column, value=value)
        # A DataFrame has no lines: say how its rows are counted, since a file's first row of data is line 2.
        table = self.source.name + ROWS_FROM_0 if self.in_memory else self.source.name
        return Fault(table, problem, remedy, row=int(self.rows[at]), column=column, value=value)

    def row_name(self, at: int) -> str:
        """ "row 17", for pointing at another row within a message."""
        return f"row {self.rows[at]}"


# --- from memory -----------------------------------------------------------------------------------------


def table_from_frame(frame: pd.DataFrame, role: str, *, name: str = "", sha256: str = "") -> RawTable:
    """A DataFrame as a raw table. Named index levels count as columns where no column has their name.

    Parameters
    ----------
    frame : left as it is
    role : a key of `KNOWN_COLUMNS`
    name, sha256 : of the file it was read from; empty: "<role> table", and the hash of the known columns
        written as CSV (UTF-8, shortest decimals that give the same doubles, line feed after each row)
    """
    known = KNOWN_COLUMNS[role]
    names = [str(n).strip() for n in frame.columns]
    ignored: Cells = [None] * len(frame)
    cells = [_cells_of(frame.iloc[:, k]) if n in known else ignored for k, n in enumerate(names)]
    for level, label in enumerate(frame.index.names):
        if label in known and label not in names:
            names.append(str(label))
            cells.append(_cells_of(pd.Series(frame.index.get_level_values(level))))
    source = SourceFile(role, name or f"{role} table", sha256 or _canonical_hash(known, names, cells))
    return RawTable(source, tuple(names), tuple(cells), np.arange(len(frame)), in_memory=True)


def _cells_of(series: pd.Series) -> Cells:
    """Integers and floats as arrays, everything else as objects, to be judged cell by cell."""
    dtype = series.dtype
    if pd.api.types.is_numeric_dtype(dtype) and not pd.api.types.is_bool_dtype(dtype):
        if pd.api.types.is_integer_dtype(dtype) and not series.hasnans:
            unsigned = pd.api.types.is_unsigned_integer_dtype(dtype)
            return series.to_numpy(dtype=np.uint64 if unsigned else np.int64)
        if pd.api.types.is_float_dtype(dtype):
            return series.to_numpy(dtype=np.float64, na_value=np.nan)
    return list(series.to_list())


def _canonical_hash(known: tuple[str, ...], names: list[str], cells: list[Cells]) -> str:
    present = [n for n in known if n in names]
    columns = [_canonical_cells(cells[names.index(n)]) for n in present]
    lines = [",".join(present), *map(",".join, zip(*columns, strict=True)), ""]
    return hashlib.sha256("\n".join(lines).encode("utf-8", errors="surrogatepass")).hexdigest()


def _canonical_cells(cells: Cells) -> list[str]:
    if isinstance(cells, np.ndarray):
        return list(map(repr, cells.tolist()))
    return ["" if is_missing(c) else _quoted(c if isinstance(c, str) else str(c)) for c in cells]


def _quoted(text: str) -> str:
    return '"' + text.replace('"', '""') + '"' if any(c in text for c in ',"\n\r') else text


# --- from disk -------------------------------------------------------------------------------------------


def read_file(path: Path, role: str, name: str) -> bytes:
    """The bytes of a file.

    Raises
    ------
    TableError : it is not there, is a folder, or cannot be read
    """

    def refused(problem: str, remedy: str) -> TableError:
        return TableError([Fault(name, problem, remedy)])

    try:
        return path.read_bytes()
    except FileNotFoundError:
        raise refused(f"There is no file {str(path)!r}.", _missing_file_remedy(path, role)) from None
    except IsADirectoryError:
        raise refused(f"{str(path)!r} is a folder, not a table.", f"Name the file with the {role} in it.") from None
    except (OSError, ValueError) as error:  # ValueError: a zero byte in the name
        reason = error.strerror if isinstance(error, OSError) and error.strerror else str(error)
        raise refused(f"The file cannot be read: {reason}.", "Check its permissions and the disk.") from None


def _missing_file_remedy(path: Path, role: str) -> str:
    from difflib import get_close_matches

    try:
        there = sorted(p.name for p in path.parent.iterdir() if p.is_file())
    except (OSError, ValueError):
        return f"There is no folder {str(path.parent)!r} either: check the path of the {role} table."
    close = get_close_matches(path.name, there, n=1, cutoff=0.6)
    return f"Did you mean {close[0]!r} in the same folder?" if close else f"Check the path of the {role} table."


def load_table(given: TableSource, role: str, name: str) -> RawTable:
    """One table from a path or a DataFrame, unchecked.

    Parameters
    ----------
    given : path of a delimited text file (gzip welcome) or of a Parquet file, or a DataFrame
    role : a key of `KNOWN_COLUMNS`
    name : what messages call it

    Raises
    ------
    TableError : the file cannot be read as a table at all
    ArgumentError : `given` is neither a path nor a DataFrame
    """
    from kernelfit.recording.delimited import parse_delimited  # builds on this module

    if isinstance(given, pd.DataFrame):
        return table_from_frame(given, role, name=name)
    if not isinstance(given, (str, os.PathLike)):
        raise ArgumentError(
            f"{role}: {described(given)} is neither a path nor a DataFrame. Give one of these, or build the recording "
            "from arrays: kf.Recording.from_arrays(...)."
        )
    if given == "":
        raise ArgumentError(f"{role}: the path is empty. Give the path of the file with the {role} in it.")
    if isinstance(given, str) and given.count("\n") > 1:
        raise ArgumentError(
            f"{role}: {described(given)} looks like a table itself. Give the path of a file, or a DataFrame: "
            "pandas.read_csv(io.StringIO(text), dtype={'unit': str})."
        )
    path = Path(given)
    data = read_file(path, role, name)
    source = SourceFile(role, name, hashlib.sha256(data).hexdigest())
    if path.suffix.lower() in (".parquet", ".pq"):
        return _parse_parquet(data, source)
    return parse_delimited(data, source, gzip_expected=path.suffix.lower() == ".gz")


def _parse_parquet(data: bytes, source: SourceFile) -> RawTable:
    try:
        import pyarrow as pa
        from pyarrow import parquet
    except ImportError:
        remedy = "Install it with: pip install 'kernelfit[parquet]', or save the table as CSV."
        raise TableError([Fault(source.name, "Reading Parquet needs the library pyarrow.", remedy)]) from None
    if not data:
        raise TableError([Fault(source.name, "The file is empty.", f"It needs the columns of a {source.role} table.")])
    if len(data) < _SMALLEST_PARQUET or not (data.startswith(_PARQUET_MARK) and data.endswith(_PARQUET_MARK)):
        problem = "This is not a Parquet file, or it was cut short: the mark at its two ends is missing."
        raise TableError([Fault(source.name, problem, "Write the file again, or save it as CSV.")])
    try:
        table = parquet.read_table(pa.BufferReader(data))
        table.validate(full=True)  # damage inside the values would show only later
        frame = table.to_pandas()
    except (pa.ArrowException, OSError, ValueError, TypeError, KeyError, OverflowError) as error:
        reason = (str(error).splitlines() or ["no reason given"])[0].rpartition("'<Buffer>': ")[2].rstrip(".")
        problem = f"The Parquet file is damaged ({shortened(reason)})."
        raise TableError([Fault(source.name, problem, "Write the file again, or save it as CSV.")]) from None
    return table_from_frame(frame, source.role, name=source.name, sha256=source.sha256)
