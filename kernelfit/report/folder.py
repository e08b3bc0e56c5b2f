"""A results folder that is written whole or not at all.

Everything is written into a hidden sibling of the folder and moved into place in one step at the end. If
anything goes wrong before, an interruption included, the sibling is removed and the place is as it was.

What may be replaced: a results folder lists its own files in `contents.csv`. With `overwrite` a folder is
replaced only if every file in it stands in that list; a folder that holds anything else, or has no list, is
refused, because replacing it would delete what somebody else put there.
"""

from __future__ import annotations

import csv
import os
import secrets
import shutil
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType

from kernelfit.errors import OutputError
from kernelfit.report.page import Definition

CONTENTS_FILE = "contents.csv"
_HEADER = ("file", "what")
_DROPPINGS = frozenset({".DS_Store", "Thumbs.db", "desktop.ini"})  # left by file browsers, nobody's work
_SHOWN = 3


@dataclass(frozen=True, slots=True)
class FileEntry:
    """One file of a results folder: its name relative to the folder (with "/"), and what it holds."""

    name: str
    what: str


def files_list(files: tuple[FileEntry, ...]) -> Definition:
    """The files for a page; a figure's drawing and picture, which hold the same, share a row."""
    names = {entry.name for entry in files}
    rows = []
    for entry in files:
        stem, _, ending = entry.name.rpartition(".")
        if ending == "png" and f"{stem}.svg" in names:
            continue
        both = ending == "svg" and f"{stem}.png" in names
        rows.append((f"{stem}.svg, .png" if both else entry.name, entry.what))
    return Definition(tuple(rows), "Files in this folder (PNG: 300 dots per inch)", ("file", "what it holds"))


def check_folder(path: str | os.PathLike[str], *, overwrite: bool = False) -> None:
    """Refuse now what could not be written later. Call it before a long computation.

    Raises
    ------
    OutputError : `path` is a file, a folder that is not empty and may not be replaced, or a place where nothing can
        be written
    """
    target = Path(path).resolve()
    try:
        nearest = next((p for p in target.parents if p.exists()), None)
        if nearest is not None and not nearest.is_dir():
            raise OutputError(f"{path}: {nearest} is a file. Give another folder for the results.")
        if nearest is not None and (target.is_dir() or not target.exists()):
            probe = nearest / _sibling(target, "part").name
            probe.mkdir()
            probe.rmdir()
    except OSError as error:
        raise OutputError(f"{path}: cannot write there: {error.strerror}. Give another folder.") from error
    if not target.exists():
        return
    if not target.is_dir():
        raise OutputError(f"{path}: this is a file. Give another name to the folder for the results.")
    found = _files_in(target)
    if not found:
        return
    if not overwrite:
        raise OutputError(
            f"{path}: the folder is not empty. Give a new folder, or allow overwriting (--overwrite, or "
            "overwrite=True) to replace earlier results."
        )
    foreign = sorted(found - _listed_in(target))
    if foreign:
        rest = f" and {len(foreign) - _SHOWN} more" if len(foreign) > _SHOWN else ""
        shown = ", ".join(foreign[:_SHOWN]) + rest
        raise OutputError(
            f"{path}: overwriting would delete what is not part of earlier results ({shown}). "
            "Move it elsewhere or give another folder."
        )


def _sibling(folder: Path, kind: str) -> Path:
    """A hidden name beside the folder that nobody has."""
    return folder.with_name(f".{folder.name}.{kind}-{secrets.token_hex(4)}")


def _files_in(folder: Path) -> set[str]:
    """Every file, and every folder without files, as a name relative to `folder`."""
    names = set()
    for place, inner, files in os.walk(folder):
        here = Path(place)
        names |= {(here / f).relative_to(folder).as_posix() for f in files if f not in _DROPPINGS}
        names |= {(here / d).relative_to(folder).as_posix() for d in inner if (here / d).is_symlink()}
        if here != folder and not inner and not files:
            names.add(here.relative_to(folder).as_posix())
    return names


def _listed_in(folder: Path) -> set[str]:
    """The files that the folder's own list names; none if there is no such list."""
    try:
        with open(folder / CONTENTS_FILE, encoding="utf-8", newline="") as handle:
            rows = list(csv.reader(handle))
    except (OSError, UnicodeDecodeError, csv.Error):
        return set()
    if not rows or tuple(rows[0]) != _HEADER:
        return set()
    return {row[0] for row in rows[1:] if row}


class ResultsFolder:
    """Context manager around the writing of one results folder.

    Inside the `with` block `file(name, what)` gives the path to write each file to; at the end of the block
    the folder appears at its place as a whole. An exception inside leaves nothing.

    Parameters
    ----------
    path : where the folder shall be; parents are made
    overwrite : replace earlier results there (see the module's text for what counts as that)

    Raises
    ------
    OutputError : on entering or leaving, where the place cannot be used
    """

    def __init__(self, path: str | os.PathLike[str], *, overwrite: bool = False) -> None:
        self.path = Path(path).resolve()
        self._asked = os.fspath(path)
        self._overwrite = overwrite
        self._entries: dict[str, FileEntry] = {}
        self._work = _sibling(self.path, "part")
        self._made_parents: list[Path] = []

    def __enter__(self) -> ResultsFolder:
        check_folder(self._asked, overwrite=self._overwrite)
        try:
            self._make_parents()
            self._work.mkdir()
        except OSError as error:
            self._remove_made()
            raise self._failed(error) from error
        return self

    def file(self, name: str, what: str) -> Path:
        """Path to write one file to. `name` is relative and may hold folders ("figures/kernel.svg").

        Parameters
        ----------
        name : relative name with "/"
        what : what the file holds, for the list of files
        """
        place = self._work / name
        if not place.resolve().is_relative_to(self._work.resolve()):
            raise OutputError(f"{name}: outside the results folder. Give a name inside it.")
        place.parent.mkdir(parents=True, exist_ok=True)
        self._entries[name] = FileEntry(name, what)
        return place

    def write_text(self, name: str, text: str, what: str) -> None:
        """Write one text file as UTF-8 with plain line ends."""
        self.file(name, what).write_text(text, encoding="utf-8", newline="\n")

    @property
    def entries(self) -> tuple[FileEntry, ...]:
        """The files asked for so far, in that order, and the list of files itself."""
        own = FileEntry(CONTENTS_FILE, "this list of files")
        return (*(e for e in self._entries.values() if e.name != CONTENTS_FILE), own)

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        try:
            if error is None:
                self._write_contents()
                self._move_into_place()
        except OSError as failure:
            raise self._failed(failure) from failure
        finally:
            if self._work.exists():
                shutil.rmtree(self._work, ignore_errors=True)
                self._remove_made()
        if isinstance(error, OSError):
            raise self._failed(error) from error

    def _failed(self, error: OSError) -> OutputError:
        place = self._asked if error.filename is None else f"{self._asked} ({error.filename})"
        return OutputError(f"{place}: cannot write there: {error.strerror}. Give another folder or free space.")

    def _write_contents(self) -> None:
        with open(self._work / CONTENTS_FILE, "w", encoding="utf-8", newline="") as handle:
            writer = csv.writer(handle, lineterminator="\n")
            writer.writerow(_HEADER)
            writer.writerows((e.name, e.what) for e in self.entries)

    def _move_into_place(self) -> None:
        check_folder(self._asked, overwrite=self._overwrite)  # somebody may have written there meanwhile
        if not self.path.exists():
            os.replace(self._work, self.path)
            return
        # A folder that exists cannot be replaced in one step: the old one steps aside first.
        aside = _sibling(self.path, "old")
        os.replace(self.path, aside)
        try:
            os.replace(self._work, self.path)
        except BaseException:
            os.replace(aside, self.path)
            raise
        shutil.rmtree(aside, ignore_errors=True)

    def _make_parents(self) -> None:
        missing = []
        parent = self.path.parent
        while not parent.exists():
            missing.append(parent)
            parent = parent.parent
        for folder in reversed(missing):
            folder.mkdir()
            self._made_parents.append(folder)

    def _remove_made(self) -> None:
        for folder in reversed(self._made_parents):
            try:
                folder.rmdir()
            except OSError:
                return  # somebody else put something there; it and what holds it stay
