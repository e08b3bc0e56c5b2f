"""One look for every figure and page: colours, sizes, fonts, and how numbers are written.

Nothing here holds state: `look()` is a context manager that sets matplotlib's parameters and puts the
caller's back, and figures are made without pyplot, so that drawing a report changes nothing else on a screen.
"""

from __future__ import annotations

import html
import io
import math
import re
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import matplotlib as mpl
from matplotlib.axes import Axes
from matplotlib.colors import LinearSegmentedColormap
from matplotlib.figure import Figure

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


def zero_line(ax: Axes) -> None:
    """The zero line that every signed axis shows."""
    ax.axhline(0.0, color=INK, linewidth=0.7, zorder=1.5)


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


# --- writing numbers ------------------------------------------------------------------------------------

COULD_NOT = "could not be estimated"
PROSE_DECIMALS = 3
MINUS = "\N{MINUS SIGN}"


def fixed_text(value: float, decimals: int) -> str:
    """`value` with that many decimals (negative: to tens, hundreds...), thousands apart, a true minus."""
    rounded = round(value, decimals)
    if rounded == 0.0:
        rounded = 0.0  # no "-0"
    return f"{rounded:,.{max(decimals, 0)}f}".replace("-", MINUS)


def decimals_for(half_width: float, digits: int = 2) -> int:
    """Decimals that show `digits` significant digits of a half-width; negative for tens, hundreds..."""
    if not math.isfinite(half_width) or half_width <= 0.0:
        return PROSE_DECIMALS
    place = math.floor(math.log10(half_width))
    if round(half_width, digits - 1 - place) >= 10.0 ** (place + 1):
        place += 1  # 0.0996 has two digits as 0.10, not as 0.100
    return digits - 1 - place


def number_text(value: float, digits: int = 3, *, max_decimals: int = PROSE_DECIMALS) -> str:
    """A lone number to `digits` significant digits, never more than `max_decimals` decimals.

    Integer digits are never rounded away: 90145 stays 90,145.
    """
    if math.isnan(value):
        return "not known"
    if math.isinf(value):
        return "infinite" if value > 0 else f"{MINUS}infinite"
    if value == 0.0:
        return "0"
    return fixed_text(value, min(max(decimals_for(abs(value), digits), 0), max_decimals))


def count_text(value: float) -> str:
    """A count: "90,145"."""
    return f"{round(value):,}"


def spaced_unit(unit: str) -> str:
    """The unit as it follows a number: a no-break space before it, nothing for pure numbers."""
    return f"\N{NO-BREAK SPACE}{unit}" if unit else ""


def interval_text(
    estimate: float, lower: float, upper: float, unit: str = "", *, max_decimals: int = PROSE_DECIMALS
) -> str:
    """Estimate with its interval: "12 % (9 to 15)".

    Two significant digits of the half-width decide the rounding of all three; decimals that are zero in all
    three are left out. `max_decimals` is the limit for prose; tables may ask for more.

    Parameters
    ----------
    estimate, lower, upper : same unit; an infinite end is "at least" or "at most", missing ends leave the
        estimate alone, a missing estimate says that it could not be had
    unit : written once, after the estimate
    """
    if math.isnan(estimate):
        return COULD_NOT
    mark = spaced_unit(unit)
    low_known, high_known = math.isfinite(lower), math.isfinite(upper)
    if not low_known and not high_known:
        return f"{number_text(estimate, max_decimals=max_decimals)}{mark}"
    one_sided = abs((upper if high_known else lower) - estimate)
    half_width = (upper - lower) / 2.0 if low_known and high_known else one_sided
    decimals = min(decimals_for(half_width), max_decimals)
    shown = [estimate, *([lower] if low_known else []), *([upper] if high_known else [])]
    while decimals > 0 and all(fixed_text(v, decimals).endswith("0") for v in shown):
        decimals -= 1
    middle = fixed_text(estimate, decimals)
    if not high_known:
        return f"{middle}{mark} (at least {fixed_text(lower, decimals)})"
    if not low_known:
        return f"{middle}{mark} (at most {fixed_text(upper, decimals)})"
    return f"{middle}{mark} ({fixed_text(lower, decimals)} to {fixed_text(upper, decimals)})"


def p_text(p_value: float) -> str:
    """A p-value to two digits, "< 0.001" below: "0.042", "0.30"."""
    if math.isnan(p_value):
        return COULD_NOT
    if p_value < 0.001:
        return "< 0.001"
    return f"{p_value:.{min(decimals_for(p_value), 4) if p_value < 0.995 else 2}f}"


def p_sentence(p_value: float) -> str:
    """A p-value with its letter: "p = 0.042", "p < 0.001"."""
    text = p_text(p_value)
    return f"p {text}" if text.startswith("<") else f"p = {text}"


def time_unit_for(seconds: float) -> tuple[float, str]:
    """Factor and unit for a time: ms below 1 s, s from there."""
    return (1e3, "ms") if math.isfinite(seconds) and abs(seconds) < 1.0 else (1.0, "s")


def time_text(seconds: float, lower_s: float = math.nan, upper_s: float = math.nan) -> str:
    """A time with its interval, in ms below 1 s: "13 ms (11 to 15)"."""
    factor, unit = time_unit_for(seconds)
    return interval_text(seconds * factor, lower_s * factor, upper_s * factor, unit)


def duration_text(seconds: float) -> str:
    """A stretch of time as people say it: "45 s", "29 min 42 s", "2 h 1 min"."""
    if seconds < 1.0:
        return time_text(seconds)
    if seconds < 120.0:
        return f"{number_text(seconds)}{spaced_unit('s')}"
    whole = round(seconds)
    hours, rest = divmod(whole, 3600)
    minutes, left = divmod(rest, 60)
    if hours:
        return f"{hours} h {minutes} min" if minutes else f"{hours} h"
    return f"{minutes} min {left} s" if left else f"{minutes} min"
