"""Figures for print: any view's columns as SVG, PDF and PNG at 300 dpi, at a journal's widths.

Drawn by HoloViews' matplotlib backend into a `Figure` of its own, so that nothing global is
touched and no browser is needed.  The font is the one that comes with matplotlib, so that a figure
is the same on every machine: embedded as TrueType in the PDF; drawn as outlines in the SVG, which
cannot carry a font and would otherwise look different wherever that font is missing.
"""

from __future__ import annotations

import io
import math
import re
from collections.abc import Iterator
from typing import Any, NamedTuple

import holoviews as hv
import matplotlib as mpl
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure as Sheet
from matplotlib.layout_engine import ConstrainedLayoutEngine
from matplotlib.lines import Line2D
from matplotlib.ticker import FuncFormatter, LogLocator, MaxNLocator, NullFormatter, ScalarFormatter
from matplotlib.transforms import offset_copy

from lozenge_dashboard.palette import LIGHT, MARKERS, UNION_MARKERS
from lozenge_dashboard.publish.ink import POINTS_PER_PIXEL, SYMBOLS, TEXT_SIZE, elements
from lozenge_dashboard.publish.wording import typeset
from lozenge_dashboard.records import RULE_NAMES
from lozenge_dashboard.views.catalogue import Figure
from lozenge_dashboard.views.marks import Layer, Limits, Marks
from lozenge_engine.geometry import region_letter
from lozenge_engine.notation import thousands

__all__ = ["DOUBLE", "DPI", "FORMATS", "SINGLE", "Column", "drawn", "printed"]

DPI = 300
FORMATS = ("svg", "pdf", "png")
MM = 1.0 / 25.4
LABEL_SIZE = 8.0
GROUND = "#ffffffb3"
"""Behind words: the paper, half transparent."""
FRONT = 1000.0
"""Order of the frame: nothing lies over it."""
PAD = 0.04
"""Around the figure, in inches."""
RC: Any = {
    "font.family": "DejaVu Sans",
    "font.size": TEXT_SIZE,
    "axes.labelsize": LABEL_SIZE,
    "xtick.labelsize": TEXT_SIZE,
    "ytick.labelsize": TEXT_SIZE,
    "pdf.fonttype": 42,
    "svg.fonttype": "path",
    "svg.hashsalt": "lozenge",
    "text.parse_math": False,
    "path.simplify": False,
}


class Column(NamedTuple):
    """A width of print.

    Attributes
    ----------
    name : str
        Suffix of the files; empty for the usual one.
    width, height, tallest : float
        Of a figure, and the most that one with equal scales may have, in inches.
    """

    name: str
    width: float
    height: float
    tallest: float


SINGLE = Column("", 86 * MM, 62 * MM, 90 * MM)
"""One column of a two-column page."""
DOUBLE = Column("double", 178 * MM, 90 * MM, 150 * MM)
"""The whole width of the page."""


def drawn(figure: Figure, data: Any, *, column: Column, letters: bool = False) -> Sheet:
    """Draw a view's columns.

    Parameters
    ----------
    figure : Figure
        Of the catalogue.
    data : NamedTuple
        What its `read` gave with the light theme.
    column : Column
        Width of print.
    letters : bool
        Whether a key of region letters is added where the view has none: hues are regions then.

    Returns
    -------
    matplotlib.figure.Figure
        With one set of axes.
    """
    with mpl.rc_context(RC):
        sheet = Sheet(
            figsize=_size(figure, data.limits, column),
            layout=ConstrainedLayoutEngine(w_pad=PAD, h_pad=PAD),
        )
        FigureCanvasAgg(sheet)
        axes = sheet.add_subplot()
        _lay(figure, data, sheet, axes)
        _dress(axes, figure, data)
        if letters:
            _name_regions(axes, data)
        _shift(axes, sheet, figure.axes.get("offset", (0.0, 0.0)))
        _fold_labels(axes, sheet)
        return sheet


def printed(
    figure: Figure, data: Any, *, column: Column, title: str, letters: bool = False
) -> Iterator[tuple[str, bytes]]:
    """Draw a view's columns in all formats.

    Parameters
    ----------
    figure : Figure
        Of the catalogue.
    data : NamedTuple
        What its `read` gave with the light theme.
    column : Column
        Width of print.
    title : str
        Written into the files' own records.
    letters : bool
        As in `drawn`.

    Yields
    ------
    format : str
        One of `FORMATS`.
    file : bytes
        The same bytes for the same columns.
    """
    sheet = drawn(figure, data, column=column, letters=letters)
    with mpl.rc_context(RC):
        for name in FORMATS:
            held = io.BytesIO()
            sheet.savefig(held, format=name, dpi=DPI, metadata=_records(name, title))
            yield name, _closed(held.getvalue()) if name == "svg" else held.getvalue()


def _records(name: str, title: str) -> dict[str, Any]:
    """What a file says of itself: its title, no time and no program."""
    if name == "pdf":
        return {"Title": title, "Creator": None, "Producer": None, "CreationDate": None}
    if name == "png":
        return {"Title": title, "Software": None}
    return {"Title": title, "Date": None, "Creator": None, "Format": None, "Type": None}


def _closed(svg: bytes) -> bytes:
    """Without the document type, which names an address that a reader might fetch."""
    return re.sub(rb"<!DOCTYPE[^>]*>\s*", b"", svg, count=1)


def _size(figure: Figure, limits: Limits, column: Column) -> tuple[float, float]:
    """Width and height: with equal scales the height follows from the limits."""
    if not figure.square:
        return column.width, column.height
    share = (limits.y_high - limits.y_low) / (limits.x_high - limits.x_low)
    margin = 0.45
    return column.width, min(column.tallest, (column.width - margin) * share + margin)


def _lay(figure: Figure, data: Any, sheet: Sheet, axes: Axes) -> None:
    """Let HoloViews draw the layers into the axes."""
    from holoviews.plotting.mpl import MPLRenderer

    align = figure.axes.get("align", "left")
    layers = [part for part in data if isinstance(part, Layer)]
    found = [each for layer in layers for each in elements(layer, align=align)]
    renderer = MPLRenderer.instance()
    overlay = hv.Overlay(found)
    shown = renderer.plotting_class(overlay)(
        overlay, fig=sheet, axis=axes, renderer=renderer, **_axes_options(figure, data)
    )
    shown.initialize_plot()


def _axes_options(figure: Figure, data: Any) -> dict[str, Any]:
    """Labels, ends and ticks of the axes as HoloViews' options."""
    limits: Limits = data.limits
    labels = getattr(data, "labels", ("", ""))
    labels = labels if any(labels) else (figure.axes["x"], figure.axes["y"])
    options: dict[str, Any] = {
        "xlabel": labels[0],
        "ylabel": labels[1],
        "xlim": (limits.x_low, limits.x_high),
        "ylim": (limits.y_low, limits.y_high),
        "logx": figure.axes.get("log", False),
        "logy": figure.axes.get("log", False),
        "show_legend": False,
        "show_title": False,
        "show_frame": True,
        "apply_ranges": False,
    }
    for name, ticks in (
        ("xticks", getattr(data, "x_ticks", ())),
        ("yticks", getattr(data, "ticks", ())),
    ):
        if ticks:
            options[name] = list(ticks)
    return options


def _dress(axes: Axes, figure: Figure, data: Any) -> None:
    """Thin axes in the page's ink, with ticks that are far enough apart."""
    axes.set_aspect("equal" if figure.square else "auto")
    worded = getattr(data, "x_ticks", ()), getattr(data, "ticks", ())
    for axis, words in zip((axes.xaxis, axes.yaxis), worded, strict=True):
        if words:
            continue
        if figure.axes.get("log", False):
            axis.set_major_locator(LogLocator(numticks=8))
            axis.set_major_formatter(FuncFormatter(_power))
            axis.set_minor_formatter(NullFormatter())
        else:
            axis.set_major_locator(MaxNLocator(nbins=6, steps=[1, 2, 2.5, 5, 10]))
            axis.set_major_formatter(_Grouped())
    for spine in axes.spines.values():
        spine.set(linewidth=0.6, edgecolor=LIGHT.muted, zorder=FRONT)
    axes.tick_params(width=0.6, length=2.5, color=LIGHT.muted, labelcolor=LIGHT.ink, pad=2.0)
    axes.tick_params(which="minor", width=0.4, length=1.5, color=LIGHT.muted)
    for axis in (axes.xaxis, axes.yaxis):
        axis.label.set(color=LIGHT.ink, size=LABEL_SIZE)
    axes.xaxis.labelpad = axes.yaxis.labelpad = 2.0


def _name_regions(axes: Axes, data: Any) -> None:
    """A key of region letters where the view itself has none beside its marks."""
    said = " ".join(
        [text.get_text() for text in axes.texts]
        + [words for _, words in (*getattr(data, "ticks", ()), *getattr(data, "x_ticks", ()))]
    )
    pairs = {
        (marker, colour)
        for layer in data
        if isinstance(layer, Marks)
        for marker, colour in zip(layer.marker, layer.colour, strict=True)
    }
    hues = zip(MARKERS, LIGHT.regions, strict=True)
    keys = [(*pair, region_letter(i)) for i, pair in enumerate(hues) if pair in pairs]
    if not keys or any(re.search(rf"\b{letter}\b", said) for *_, letter in keys):
        return
    rules = (
        (UNION_MARKERS[rule], LIGHT.ink, f"union {words}") for rule, words in RULE_NAMES.items()
    )
    keys += [key for key in rules if key[:2] in pairs]
    handles = [
        Line2D([], [], linestyle="", markersize=4.0, markeredgewidth=0.5, color=colour,
               marker=SYMBOLS[marker], label=label)
        for marker, colour, label in keys
    ]  # fmt: skip
    axes.legend(handles=handles, frameon=False, handletextpad=0.2, fontsize=TEXT_SIZE)


def _fold_labels(axes: Axes, sheet: Sheet) -> None:
    """Set an axis label that is longer than its axis in two lines."""
    sheet.draw_without_rendering()
    room = axes.get_window_extent()
    for label, most in ((axes.xaxis.label, room.width), (axes.yaxis.label, room.height)):
        extent = label.get_window_extent()
        if max(extent.width, extent.height) > most:
            words = label.get_text()
            blanks = [i for i, letter in enumerate(words) if letter == " "]
            middle = min(blanks, key=lambda i: abs(i - len(words) / 2), default=0)
            if middle:
                label.set_text(f"{words[:middle]}\n{words[middle + 1 :]}")


class _Grouped(ScalarFormatter):
    """Ticks with thousands in groups of three digits."""

    def __call__(self, x: float, pos: int | None = None) -> str:
        if abs(x) >= 1000 and float(x).is_integer():
            return thousands(round(x)).replace("-", "−")
        return super().__call__(x, pos)


def _power(value: float, _place: object = None) -> str:
    """A power of ten: in digits near one, with an exponent further away."""
    exponent = round(math.log10(value))
    if -2 <= exponent <= 3:
        return f"{10.0**exponent:g}"
    return typeset(f"1e{exponent:+d}").removeprefix("1×")


def _shift(axes: Axes, sheet: Sheet, offset: tuple[float, float]) -> None:
    """Move the words by the view's offset, from the page's pixels."""
    x, y = (POINTS_PER_PIXEL * part for part in offset)
    moved = offset_copy(axes.transData, fig=sheet, x=x, y=y, units="points")
    for text in axes.texts:
        text.set_transform(moved)
        # A mark behind words must not make them unreadable.
        text.set_bbox({"boxstyle": "square,pad=0.1", "facecolor": GROUND, "linewidth": 0.0})
