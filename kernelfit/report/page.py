"""A page as data, and the one place that turns it into HTML.

A page is sections; a section opens with one plain sentence and holds blocks: text, cautions, tables,
pictures, lists. What a block says is built and tested elsewhere; the template only sets it. Everything a user
handed in (unit ids, file names, labels) is escaped here: the template engine escapes all it is given except
the pictures that `look.inline_svg` made.
"""

from __future__ import annotations

import re
from dataclasses import dataclass, replace
from typing import ClassVar, TypeAlias

import jinja2
from markupsafe import Markup, escape
from matplotlib.figure import Figure

from kernelfit.report.look import inline_svg
from kernelfit.report.numbers import tied

PRINTED_ROWS = 60  # a printed table of a thousand units helps nobody; its file holds them all
SCROLLED_ROWS = 24  # longer tables scroll in a box of their own on the screen


@dataclass(frozen=True, slots=True)
class Text:
    """A paragraph. `kind`: "plain", or "caution" (marked; stands beside the number it concerns)."""

    text: str
    kind: str = "plain"
    block: ClassVar[str] = "text"


@dataclass(frozen=True, slots=True)
class Listing:
    """A list of short items under an optional introducing sentence."""

    items: tuple[str, ...]
    intro: str = ""
    block: ClassVar[str] = "listing"


@dataclass(frozen=True, slots=True)
class Definition:
    """Terms with what they are: settings, facts of a recording, files."""

    rows: tuple[tuple[str, str], ...]
    caption: str
    headings: tuple[str, str] = ("what", "value")
    block: ClassVar[str] = "definition"


@dataclass(frozen=True, slots=True)
class Quote:
    """Text meant to be copied, such as a methods paragraph; shown in a box, selected by one click."""

    text: str
    label: str
    block: ClassVar[str] = "quote"


@dataclass(frozen=True, slots=True)
class Cell:
    """One cell: what is shown, and the number or text it sorts by (None: by what is shown)."""

    text: str
    sort: float | str | None = None


@dataclass(frozen=True, slots=True)
class Column:
    """Heading of a column; figures stand to the right, and only columns of text that `wraps` break lines."""

    title: str
    numeric: bool = True
    wraps: bool = False

    @property
    def style(self) -> str:
        """Classes of its cells."""
        return " ".join(w for w, wanted in (("number", self.numeric), ("wraps", self.wraps)) if wanted)


@dataclass(frozen=True, slots=True)
class Table:
    """A table that can be sorted by a click on a heading. The first column names the row.

    `file` is the results file that holds the same numbers in full, named under the caption.
    """

    caption: str
    columns: tuple[Column, ...]
    rows: tuple[tuple[Cell, ...], ...]
    file: str = ""
    block: ClassVar[str] = "table"
    printed_rows: ClassVar[int] = PRINTED_ROWS

    @property
    def scrolls(self) -> bool:
        """True where the table gets a box of its own on the screen."""
        return len(self.rows) > SCROLLED_ROWS


def without_empty_notes(table: Table) -> Table:
    """The table without its last column, the notes, where no row has one."""
    if any(row[-1].text for row in table.rows):
        return table
    return replace(table, columns=table.columns[:-1], rows=tuple(row[:-1] for row in table.rows))


@dataclass(frozen=True, slots=True)
class Picture:
    """A figure with its caption.

    Parameters
    ----------
    name : letters, digits and hyphens; the figure's file is figures/<name>.svg
    svg : made by `look.inline_svg`
    caption : what a point, a line and a band are, the level, n units, n spikes, seconds
    wide : True for figures two columns wide
    files : names of the files that hold it and its numbers, relative to the page
    """

    name: str
    svg: Markup
    caption: str
    wide: bool = False
    files: tuple[str, ...] = ()
    block: ClassVar[str] = "picture"


def picture(
    figure: Figure, name: str, *, alt: str, caption: str, wide: bool = False, files: tuple[str, ...] = ()
) -> Picture:
    """A figure as a block of a page. `alt` says in words what the figure shows."""
    svg = Markup(inline_svg(figure, name, alt))  # our own markup; `alt` was escaped there
    return Picture(name=name, svg=svg, caption=caption, wide=wide, files=files)


Block: TypeAlias = Text | Listing | Definition | Quote | Table | Picture


@dataclass(frozen=True, slots=True)
class Section:
    """One section of a page.

    Parameters
    ----------
    key : letters, digits and hyphens; the section's address within the page
    title : short; it also stands in the contents
    lead : one plain sentence for a reader who stops there
    blocks : the text column, in order
    beside : what is one column wide, beside the text on wide screens
    below : blocks over the full width
    """

    key: str
    title: str
    lead: str
    blocks: tuple[Block, ...] = ()
    beside: tuple[Block, ...] = ()
    below: tuple[Block, ...] = ()


@dataclass(frozen=True, slots=True)
class Notice:
    """A marked line at the top of the page. `severity`: "error", "warning" or "info", shown as a word too."""

    severity: str
    text: str

    @property
    def word(self) -> str:
        """How the severity is written."""
        return {"error": "Error", "warning": "Warning"}.get(self.severity, "Note")


@dataclass(frozen=True, slots=True)
class Page:
    """A whole page: what it is about, what must be read first, the sections, and where it came from."""

    title: str
    subtitle: str
    sections: tuple[Section, ...]
    notices: tuple[Notice, ...] = ()
    footer: str = ""


# Names of options must not break at their hyphens: "--stop-" on one line and "s" on the next is another option.
_OPTION = re.compile(r"(?<![\w-])--[a-z][a-z-]*[a-z]")


def prose(text: str) -> Markup:
    """Text escaped for a page, numbers tied to their units, options kept on one line."""
    return Markup(_OPTION.sub(r'<span class="option">\g<0></span>', str(escape(tied(text)))))


def _tied_value(value: object) -> object:
    return tied(value) if isinstance(value, str) and not isinstance(value, Markup) else value


def render_page(page: Page) -> str:
    """The page as one self-contained HTML document: styles, scripts and pictures inside, no network."""
    environment = jinja2.Environment(
        loader=jinja2.PackageLoader("kernelfit.report", "templates"),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        finalize=_tied_value,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
    )
    environment.filters["prose"] = prose
    return environment.get_template("page.html.j2").render(page=page)
