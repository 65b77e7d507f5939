"""How figures look: one palette, one size, and figures as SVG that can stand in a page.

Colours are told apart by lightness too, and never stand alone: line style, marker or hatch says the same
(common practice for print). The two hues for before and after are of the set by Okabe and Ito ("Color Universal
Design", 2008). Text stays text, so that it can be searched, read aloud and measured; its width is laid out for
DejaVu Sans, than which the fallbacks are not wider.
"""

from __future__ import annotations

import io
import re
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any, NamedTuple

import matplotlib as mpl
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from fieldnav_ros.model import OutcomeKind

WIDTH = 4.75
"""Inches: shown at 370 px on a phone its text is 10 px high, at 580 px 16 px."""
INK, SOFT, GRID = "#1d2328", "#5c656d", "#d5d9dc"
BEFORE, AFTER = "#e69f00", "#005a8f"


class Look(NamedTuple):
    """How an outcome is drawn: fill and hatch of a bar, marker of a point."""

    fill: str
    hatch: str
    marker: str
    edge: str


LOOKS: dict[OutcomeKind, Look] = {
    OutcomeKind.ARRIVED: Look("#bcd9ea", "", "o", "#005a8f"),
    OutcomeKind.TIMEOUT: Look("#f0c04a", "///", "v", "#8a5a00"),
    OutcomeKind.CONTACT: Look("#a33b12", "xxx", "x", "#a33b12"),
    OutcomeKind.OFF_FLOOR: Look("#3a3a3a", "...", "s", "#1d2328"),
    OutcomeKind.VOID: Look("#ffffff", "", "|", "#5c656d"),
}
WORDS: dict[OutcomeKind, str] = {
    OutcomeKind.ARRIVED: "arrived",
    OutcomeKind.TIMEOUT: "timeout",
    OutcomeKind.CONTACT: "contact",
    OutcomeKind.OFF_FLOOR: "off floor",
    OutcomeKind.VOID: "void",
}
_SETTINGS: Any = {
    "font.family": ["DejaVu Sans"],
    "font.size": 9.5,
    "axes.labelsize": 9.5,
    "axes.titlesize": 9.5,
    "legend.fontsize": 9.0,
    "xtick.labelsize": 9.0,
    "ytick.labelsize": 9.0,
    "axes.edgecolor": SOFT,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.7,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.axisbelow": True,
    "axes.unicode_minus": True,
    "text.color": INK,
    "xtick.color": SOFT,
    "ytick.color": SOFT,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "hatch.linewidth": 0.6,
    "hatch.color": "#ffffff",
    "legend.frameon": False,
    "legend.handlelength": 1.8,
    "legend.columnspacing": 1.2,
    "path.simplify": True,
}


@contextmanager
def styled(salt: str = "fieldnav", outlines: bool = False) -> Iterator[None]:
    """Draw and save under the page's settings, whatever the user's own are.

    ``salt`` makes SVG ids a figure's own; ``outlines`` turns text into shapes, for pictures outside the page.
    """
    with mpl.rc_context():
        mpl.rcdefaults()
        mpl.rcParams.update(_SETTINGS)
        mpl.rcParams["svg.hashsalt"] = salt
        mpl.rcParams["svg.fonttype"] = "path" if outlines else "none"
        yield


def new_figure(height: float, width: float = WIDTH) -> tuple[Figure, Axes]:
    """Return a figure with one pair of axes; sizes in inches. To be called within ``styled``."""
    figure = Figure(figsize=(width, height), layout="constrained")
    return figure, figure.add_subplot()


def key_above(figure: Figure, axes: Axes, columns: int = 3) -> None:
    """Put the legend above the axes, where it covers nothing."""
    handles, labels = axes.get_legend_handles_labels()
    if handles:
        figure.legend(handles, labels, loc="outside upper left", ncols=columns)


def fix_layout(figure: Figure) -> None:
    """Lay the figure out now and for good; left to savefig it would be drawn twice."""
    engine = figure.get_layout_engine()
    if engine is not None:
        engine.execute(figure)
        figure.set_layout_engine("none")


_NUMBERED = re.compile(r' id="[A-Za-z0-9.]+_\d+"')
_UNUSED = re.compile(r"<metadata>.*?</metadata>|<style type=.*?</style>|<!--.*?-->", re.DOTALL)
_SIZE = re.compile(r' (?:width|height|version|xmlns:xlink|xmlns)="[^"]*"')
_ATTRIBUTE = re.compile(r'="[^"]*"')
_TAIL = re.compile(r"(?<=\.\d\d)\d+")
_FONT = re.compile(r" font-family: [^;\"]*;")


def as_svg(figure: Figure, salt: str) -> str:
    """Return the figure as an ``<svg>`` element for the page: no size, date, or id that another figure may have.

    The same figure and salt give the same text. Lengths are cut to hundredths of a point; the page's style gives
    the font and round joins.
    """
    stream = io.StringIO()
    with styled(salt):
        fix_layout(figure)
        figure.savefig(stream, format="svg", metadata={"Date": None, "Creator": None}, transparent=True)
    text = stream.getvalue()
    text = _UNUSED.sub("", text[text.index("<svg") :])
    head, rest = text.split(">", 1)
    rest = _ATTRIBUTE.sub(lambda found: _FONT.sub("", _TAIL.sub("", found[0])), _NUMBERED.sub("", rest))
    return f"{_SIZE.sub('', head)}>{rest}".replace("xlink:href", "href")
