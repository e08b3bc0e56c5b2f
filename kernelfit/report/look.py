"""One look for every figure and page: colours, sizes, fonts, and how numbers are written.

Nothing here holds state: `look()` is a context manager that sets matplotlib's parameters and puts the
caller's back, and figures are made without pyplot, so that drawing a report changes nothing else on a screen.
"""

from __future__ import annotations

import html
import io
import re
import unicodedata
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import matplotlib as mpl
from matplotlib.axes import Axes
from matplotlib.axis import Axis
from matplotlib.colors import LinearSegmentedColormap
from matplotlib.figure import Figure
from matplotlib.font_manager import FontProperties, findfont, get_font
from matplotlib.ticker import ScalarFormatter

from kernelfit.report.numbers import (
    COULD_NOT,
    count_text,
    distance_label,
    duration_text,
    fixed_text,
    interval_text,
    number_text,
    p_sentence,
    p_text,
    spaced_unit,
    time_text,
)

__all__ = [
    "AMOUNTS",
    "BAND_ALPHA",
    "COULD_NOT",
    "DATA",
    "FURTHER",
    "GRID",
    "INK",
    "LOWERING",
    "NULL",
    "NUMBERED",
    "ONE_COLUMN_MM",
    "RAISING",
    "SIGNED",
    "TWO_COLUMNS_MM",
    "count_text",
    "distance_label",
    "duration_text",
    "fixed_text",
    "inline_svg",
    "interval_text",
    "log_ticks",
    "look",
    "new_figure",
    "number_text",
    "p_sentence",
    "p_text",
    "save_figure",
    "spaced_unit",
    "thousands",
    "time_text",
    "unit_label",
    "zero_line",
]

# Safe for the common colour-vision types, and never the only carrier of a meaning: line style, shape or a
# label says the same.
INK = "#1b2a33"
GRID = "#d5dbde"
RAISING = "#0b6e75"  # estimates, and effects that raise the rate
LOWERING = "#b5532a"
DATA = "#7a868c"
NULL = "#9aa5ab"  # null hypotheses and references, always dashed
FURTHER = ("#6a4c7d", "#7f8c2b")  # further conditions
BAND_ALPHA = 0.18

AMOUNTS = LinearSegmentedColormap.from_list("kernelfit amounts", ["#eef4f4", "#8fbdc0", "#0b6e75", "#06363a"])
SIGNED = LinearSegmentedColormap.from_list("kernelfit signed", [RAISING, "#ffffff", LOWERING])

ONE_COLUMN_MM = 89.0
TWO_COLUMNS_MM = 183.0
MM_PER_INCH = 25.4
PNG_DPI = 300

_PARAMETERS: dict[Any, Any] = {  # matplotlib types its keys as one long list of literals
    # Arial, Helvetica and Liberation Sans share their widths, so a figure laid out with one reads well in
    # another; DejaVu Sans comes with matplotlib and is always there.
    "font.family": "sans-serif",
    "font.sans-serif": ["Arial", "Helvetica", "Liberation Sans", "DejaVu Sans"],
    "font.size": 7.5,
    "axes.titlesize": 8.5,
    "axes.titleweight": "bold",
    "axes.titlelocation": "left",
    "axes.titlepad": 6.0,
    "axes.labelsize": 7.5,
    "axes.labelcolor": INK,
    "axes.edgecolor": DATA,
    "axes.linewidth": 0.6,
    "axes.grid": True,
    "axes.grid.axis": "y",
    "axes.axisbelow": True,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.unicode_minus": True,
    "grid.color": GRID,
    "grid.linewidth": 0.5,
    "text.color": INK,
    "xtick.color": DATA,
    "ytick.color": DATA,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "xtick.labelsize": 7.0,
    "ytick.labelsize": 7.0,
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "xtick.major.size": 2.5,
    "ytick.major.size": 2.5,
    "xtick.minor.size": 1.5,
    "ytick.minor.size": 1.5,
    "lines.linewidth": 1.3,
    "lines.markersize": 3.5,
    "patch.linewidth": 0.0,
    "legend.frameon": False,
    "legend.fontsize": 7.0,
    "legend.handlelength": 1.8,
    "figure.facecolor": "white",
    "savefig.facecolor": "white",
    "savefig.dpi": PNG_DPI,
    "text.parse_math": False,  # a unit may be called "$1"
    "svg.fonttype": "none",  # text stays text: it can be searched, read aloud and edited
    "path.simplify": True,
}


@contextmanager
def look(hash_salt: str = "kernelfit") -> Iterator[None]:
    """Draw in the project's look; the caller's matplotlib parameters come back at the end.

    Parameters
    ----------
    hash_salt : enters the names of clip paths in SVG; fixed, so that the same figure is the same file
    """
    with mpl.rc_context():
        mpl.rcdefaults()  # a user's own matplotlibrc must not change a figure of the report
        mpl.rcParams.update({**_PARAMETERS, "svg.hashsalt": hash_salt})
        yield


def new_figure(width_mm: float, height_mm: float) -> Figure:
    """An empty figure of that size whose parts keep out of each other's way. Call it inside `look()`."""
    return Figure(figsize=(width_mm / MM_PER_INCH, height_mm / MM_PER_INCH), layout="constrained")


NUMBERED = "unit no."
_ID_CHARACTERS = 18  # of a unit id that fit a panel's title


def unit_label(unit: str, row: int) -> str:
    """A unit's id as a panel's title can show it: cut in the middle, or "unit no. 6" where no font can draw it.

    Parameters
    ----------
    unit : id
    row : place in the table of units, from 0
    """
    if not _drawable(unit):
        return f"{NUMBERED} {row + 1}"
    if len(unit) > _ID_CHARACTERS:
        unit = f"{unit[: _ID_CHARACTERS // 2]}…{unit[-(_ID_CHARACTERS // 2 - 1) :]}"
    return f"unit {unit}"


def _drawable(text: str) -> bool:
    """True where the figures' font has every character, in the order in which they are drawn."""
    if any(unicodedata.bidirectional(c) in {"R", "AL"} for c in text):
        return False  # matplotlib neither joins letters nor turns their order
    font = get_font(findfont(FontProperties(family=_PARAMETERS["font.sans-serif"])))
    return {ord(c) for c in text} <= set(font.get_charmap())


def zero_line(ax: Axes) -> None:
    """The zero line that every signed axis shows."""
    ax.axhline(0.0, color=INK, linewidth=0.7, zorder=1.5)


class _Apart(ScalarFormatter):
    """Tick labels as matplotlib writes them, whole numbers from 1,000 with their thousands apart."""

    def __call__(self, x: float, pos: int | None = None) -> str:
        text = super().__call__(x, pos)
        return fixed_text(x, 0) if abs(x) >= 1000.0 and x == round(x) else text


def thousands(*axes: Axis) -> None:
    """Thousands apart on axes of large numbers, as prose has them: "1,500"."""
    for axis in axes:
        axis.set_major_formatter(_Apart(useOffset=False))


_LOG_STEPS = ((1.0, 3.0), (1.0, 2.0, 5.0), (1.0, 1.5, 2.0, 3.0, 5.0, 7.0), (1.0, 1.1, 1.2, 1.5, 2.0, 5.0, 8.0, 9.0))


def log_ticks(bottom: float, top: float) -> list[float]:
    """At least three round numbers on a log axis, from the coarsest steps that give them."""
    shown: list[float] = []
    for steps in _LOG_STEPS:
        shown = [s * 10.0**k for k in range(-3, 5) for s in steps if bottom <= s * 10.0**k <= top]
        if len(shown) >= 3:
            break
    return shown


# --- writing figures ------------------------------------------------------------------------------------


def save_figure(figure: Figure, folder: Path, name: str) -> tuple[Path, Path]:
    """Write `name`.svg and `name`.png into `folder` (which exists). The same figure gives the same bytes.

    Returns
    -------
    The two paths, SVG first.
    """
    svg, png = folder / f"{name}.svg", folder / f"{name}.png"
    svg.write_text(_svg_document(figure, name), encoding="utf-8", newline="\n")
    with look():
        figure.savefig(png, format="png", dpi=PNG_DPI, metadata={"Software": None})
    return svg, png


def _svg_document(figure: Figure, name: str) -> str:
    buffer = io.StringIO()
    with look(hash_salt=name):
        figure.savefig(buffer, format="svg", dpi=PNG_DPI, metadata={"Date": None, "Creator": "kernelfit"})
    # Trailing blanks of matplotlib's writer only make files differ where nothing differs.
    return re.sub(r"[ \t]+\n", "\n", buffer.getvalue())


def inline_svg(figure: Figure, name: str, alt: str) -> str:
    """The figure as an `<svg>` element that can stand in a page beside others.

    Parameters
    ----------
    figure : the figure
    name : makes the ids of this figure differ from those of others on the page; letters, digits, hyphens
    alt : what a reader who cannot see the figure should know

    Returns
    -------
    Markup without XML prologue, metadata, name spaces or any address.
    """
    text = _svg_document(figure, name)
    text = text[text.index("<svg") :]
    text = re.sub(r"<metadata>.*?</metadata>", "", text, flags=re.DOTALL)
    text = re.sub(r'\s+xmlns(:\w+)?="[^"]*"', "", text)
    text = text.replace("xlink:href=", "href=")
    used = set(re.findall(r'href="#([^"]+)"', text)) | set(re.findall(r"url\(#([^)]+)\)", text))

    def own_id(match: re.Match[str]) -> str:
        return f' id="{name}-{match[1]}"' if match[1] in used else ""

    text = re.sub(r'\s+id="([^"]+)"', own_id, text)
    text = re.sub(r'href="#([^"]+)"', rf'href="#{name}-\1"', text)
    text = re.sub(r"url\(#([^)]+)\)", rf"url(#{name}-\1)", text)
    label = html.escape(alt, quote=True)
    # The styles inside use the page's own rules otherwise; "svg" in a page must not inherit them.
    text = re.sub(r"<style[^>]*>.*?</style>", "", text, flags=re.DOTALL)
    return text.replace(
        "<svg ", f'<svg role="img" aria-label="{label}" stroke-linejoin="round" stroke-linecap="butt" ', 1
    )
