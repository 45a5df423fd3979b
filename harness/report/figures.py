"""Draws a figure as SVG text that fits a light and a dark page and is the same to the byte every time."""

from __future__ import annotations

import hashlib
import io
import math
import re
import warnings
from collections.abc import Sequence
from typing import Any, NamedTuple
from xml.sax.saxutils import escape

import matplotlib as mpl
import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator, FuncFormatter, NullLocator
from matplotlib.transforms import IdentityTransform
from numpy.typing import NDArray

from harness.report.evidence import FigureFacts
from harness.report.tables import on_one_line

INK = "#123456"  # stands for the page's text colour until the SVG is done
QUIET = "#654321"  # for lines that only help
# Okabe and Ito (2008), black as the page's ink, their yellow last: it is the weakest on white.
COLOURS = (INK, "#0072b2", "#d55e00", "#009e73", "#cc79a7", "#e69f00", "#56b4e9", "#f0e442")
MARKERS = ("o", "s", "^", "D", "v", "P", "X", "*")
DASHES: tuple[tuple[int, tuple[float, ...]], ...] = (
    (0, ()),
    (0, (5, 2)),
    (0, (1.5, 1.5)),
    (0, (6, 2, 1.5, 2)),
    (0, (9, 2)),
    (0, (3, 1, 1, 1, 1, 1)),
    (0, (2, 3)),
    (0, (7, 2, 2, 2, 2, 2)),
)
PAGE_COLOURS = {
    INK: "currentColor",
    QUIET: "var(--quiet, #777777)",
    **{colour: f"var(--series-{place}, {colour})" for place, colour in enumerate(COLOURS[1:], start=2)},
}
LEAST_SECONDS = 1e-6  # nothing shorter has a place on a logarithmic axis
SIZE = (7.8, 3.7)  # inches
FONT_SIZE = 9.0
LABEL_GAP = 12.0  # points between two labels
MAX_LABEL = 34  # characters
AXES = (0.1, 0.13, 0.56, 0.83)  # left, bottom, width, height as shares; labels stand to the right


class _Style(NamedTuple):
    colour: str
    marker: str
    dash: tuple[int, tuple[float, ...]]


class _Mark(NamedTuple):
    """A point as it is drawn: all numbers finite."""

    x: float
    y: float
    low: float
    high: float
    is_over: bool


class _Series(NamedTuple):
    label: str
    style: _Style
    marks: list[_Mark]


def draw(figure: FigureFacts) -> str:
    """Return a figure as an SVG element, to stand in a page as it is.

    Parameters
    ----------
    figure : FigureFacts

    Returns
    -------
    str
        One `svg` element with a title and a description for those who cannot see it, without scripts,
        styles or references to anything outside. Colours are `currentColor` and the custom properties
        `--series-2` to `--series-8` and `--quiet`, with a light page's as fallback.
    """
    salt = hashlib.sha256(figure.key.encode()).hexdigest()[:12]
    settings: Any = {"svg.hashsalt": salt, "svg.fonttype": "none", "font.size": FONT_SIZE}
    out = io.StringIO()
    with mpl.rc_context(settings), warnings.catch_warnings():
        warnings.filterwarnings("ignore", message="Glyph .* missing")  # the page's fonts draw the text
        canvas = Figure(figsize=SIZE, dpi=72)  # a pixel is a point
        axes = canvas.add_axes(AXES)
        _prepare(axes, figure)
        all_series = _series(figure)
        for series in all_series:
            _draw_series(axes, figure, series)
        _scale(axes, figure, all_series)
        _label_directly(axes, all_series)
        canvas.savefig(out, format="svg", transparent=True, metadata={"Date": None})
    return _fit_for_page(out.getvalue(), figure, salt)


def figure_file(figure: FigureFacts) -> str:
    """Return a figure as an SVG file of its own: with a white ground, and a font for its text.

    Parameters
    ----------
    figure : FigureFacts

    Returns
    -------
    str
    """
    opening, _, rest = draw(figure).partition(">")
    alone = 'xmlns="http://www.w3.org/2000/svg" font-family="sans-serif" color="#1a1a1a"'
    ground = '<rect width="100%" height="100%" fill="#ffffff" />'
    head, desc, body = rest.partition("</desc>")
    return f"{opening.replace('<svg', f'<svg {alone}', 1)}>{head}{desc}\n{ground}{body}\n"


def _series(figure: FigureFacts) -> list[_Series]:
    """Return what can be drawn of each curve; a time over the limit stands at the longest time seen."""
    styles = [_Style(*style) for style in zip(COLOURS, MARKERS, DASHES, strict=True)]
    drawn = []
    for curve, style in zip(figure.curves, styles, strict=False):
        marks = []
        for point in curve.points:
            y = point.floor if math.isinf(point.y) else point.y
            low, high = (y if math.isinf(end) else end for end in (point.low, point.high))
            if figure.kind == "time":
                y, low, high = (max(end, LEAST_SECONDS) for end in (y, low, high))
            if math.isfinite(y):
                marks.append(_Mark(point.x, y, low, high, math.isinf(point.y)))
        if marks:
            drawn.append(_Series(curve.label, style, marks))
    return drawn


# --- drawing ----------------------------------------------------------------------------------------------


def _prepare(axes: Axes, figure: FigureFacts) -> None:
    axes.set_xlabel(figure.x_title, color=INK)
    axes.set_ylabel(figure.y_title, color=INK)
    axes.tick_params(colors=INK, which="both")
    axes.spines[["top", "right"]].set_visible(False)
    axes.spines[["left", "bottom"]].set_color(INK)
    axes.grid(axis="y", color=QUIET, linewidth=0.5, alpha=0.35)
    axes.set_xscale("log")
    if figure.kind == "time":
        axes.set_yscale("log")
    if figure.target is not None:
        axes.axhline(figure.target, color=INK, linewidth=1.2, linestyle=(0, (4, 3)), zorder=1.5)


def _draw_series(axes: Axes, figure: FigureFacts, series: _Series) -> None:
    style = series.style
    x, y, low, high = (np.array([mark[part] for mark in series.marks]) for part in range(4))
    if figure.kind == "measure":
        axes.fill_between(x, low, high, color=style.colour, alpha=0.14, linewidth=0)
    else:
        axes.vlines(x, low, high, color=style.colour, linewidth=1.0)
    axes.plot(x, y, color=style.colour, linestyle=style.dash, linewidth=1.4)
    is_over = np.array([mark.is_over for mark in series.marks])
    axes.plot(
        x[~is_over], y[~is_over], linestyle="none", marker=style.marker, color=style.colour, markersize=4.5
    )
    axes.plot(
        x[is_over],
        y[is_over],
        linestyle="none",
        marker="^",
        color=style.colour,
        markersize=8,
        fillstyle="none",
    )


def _scale(axes: Axes, figure: FigureFacts, all_series: Sequence[_Series]) -> None:
    places = sorted({mark.x for series in all_series for mark in series.marks})
    axes.xaxis.set_major_locator(FixedLocator(_apart(places)))
    axes.xaxis.set_minor_locator(NullLocator())
    axes.xaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:,.0f}"))
    if len(places) == 1:
        axes.set_xlim(places[0] / 2, places[0] * 2)
    if figure.kind == "time":
        axes.yaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:,.10g}"))
        axes.yaxis.set_minor_locator(NullLocator())
    elif figure.is_proportion:
        axes.set_ylim(-0.03, 1.03)
    else:
        axes.set_ylim(bottom=0)
    axes.autoscale_view()
    axes.set_autoscale_on(False)  # labels are placed by these limits


def _apart(places: Sequence[float], least_ratio: float = 1.6) -> list[float]:
    """Return the places that are far enough apart on a logarithmic axis to carry a number each."""
    kept: list[float] = []
    for place in reversed(places):
        if not kept or kept[-1] / place >= least_ratio:
            kept.append(place)
    return kept[::-1]


def _label_directly(axes: Axes, all_series: Sequence[_Series]) -> None:
    """Write each learner's label to the right of its last point, apart from the others."""
    if not all_series:
        return
    ends = axes.transData.transform(np.array([series.marks[-1][:2] for series in all_series]))
    box = axes.get_window_extent()
    left = box.x1 + 12.0
    heights = spread(ends[:, 1], LABEL_GAP, box.y0, box.y1)
    for series, end, height in zip(all_series, ends, heights, strict=True):
        style = series.style
        free: Any = {"transform": IdentityTransform(), "clip_on": False, "color": style.colour}
        axes.plot([end[0] + 5.0, left + 4.0], [end[1], height], linewidth=0.6, linestyle=(0, (1, 2)), **free)
        axes.plot([left + 9.0], [height], marker=style.marker, markersize=4.5, **free)
        axes.annotate(
            _shortened(series.label),
            xy=(left + 16.0, height),
            xycoords="figure pixels",
            va="center",
            color=INK,
            parse_math=False,
            annotation_clip=False,
        )


def spread(heights: NDArray[np.float64], gap: float, low: float, high: float) -> NDArray[np.float64]:
    """Move heights as little as need be so that neighbours are a gap apart, within limits.

    Parameters
    ----------
    heights : float array, shape (n,)
    gap, low, high : float
        Where n gaps do not fit between the limits, the gap shrinks.

    Returns
    -------
    float array, shape (n,)
        In the same order, as far apart as asked. The least squares solution: heights less their rank's
        share of the gaps, made non-decreasing (pool adjacent violators).

    Examples
    --------
    >>> spread(np.array([5.0, 5.0, 20.0]), 4.0, 0.0, 30.0).tolist()
    [3.0, 7.0, 20.0]
    """
    from scipy.optimize import isotonic_regression

    n = len(heights)
    gap = min(gap, (high - low) / max(n - 1, 1))
    order = np.argsort(heights, kind="stable")
    steps = gap * np.arange(n)
    level = np.asarray(isotonic_regression(heights[order] - steps).x)
    moved = np.clip(level, low, max(low, high - steps[-1])) + steps
    out = np.empty(n)
    out[order] = moved
    return out


def _shortened(label: str) -> str:
    label = on_one_line(label)
    if len(label) <= MAX_LABEL:
        return label
    head = (MAX_LABEL - 1) * 2 // 3
    return f"{label[:head]}…{label[-(MAX_LABEL - 1 - head) :]}"


# --- from matplotlib's SVG to the page's ------------------------------------------------------------------


def _fit_for_page(svg: str, figure: FigureFacts, salt: str) -> str:
    """Make a file of its own into an element of a page.

    The page's policy allows no style attributes, so they become presentation attributes; identifiers
    that nothing refers to would repeat from figure to figure and go; fonts and ink are the page's.
    """
    svg = svg[svg.index("<svg") :]
    svg = re.sub(r"<metadata>.*?</metadata>|<style.*?</style>", "", svg, flags=re.DOTALL)
    svg = re.sub(r"<[^>]+>", lambda tag: _fit_tag(tag[0]), svg)
    svg = re.sub(r"\n\s*", "\n", svg).replace("<defs>\n</defs>\n", "")
    view = re.search(r'viewBox="[^"]*"', svg)
    assert view is not None
    opening = (
        f'<svg {view[0]} role="img" aria-labelledby="title-{salt} description-{salt}">\n'
        f'<title id="title-{salt}">{escape(on_one_line(figure.title))}</title>\n'
        f'<desc id="description-{salt}">{escape(on_one_line(figure.description))}</desc>\n'
    )
    return opening + svg[svg.index(">") + 1 :].lstrip("\n")


def _fit_tag(tag: str) -> str:
    tag = re.sub(r'(?<=<g) id="[^"]*"| transform="rotate\(-0 [^"]*"', "", tag)
    tag = re.sub(r' style="([^"]*)"', lambda match: _as_attributes(match[1]), tag)
    tag = re.sub(r"\d+\.\d{3,}", lambda number: f"{float(number[0]):.2f}", tag)
    tag = tag.replace("xlink:href", "href")
    for colour, name in PAGE_COLOURS.items():
        tag = tag.replace(colour, name)
    return tag


def _as_attributes(style: str) -> str:
    attributes = []
    for declaration in style.split(";"):
        name, colon, value = declaration.partition(":")
        name, value = name.strip(), value.strip()
        if name == "font":  # "9px 'DejaVu Sans', ...": only the size is kept
            name, value = "font-size", value.split("px")[0].split()[-1]
        if colon and name != "font-family":
            attributes.append(f' {name}="{value}"')
    return "".join(attributes)
