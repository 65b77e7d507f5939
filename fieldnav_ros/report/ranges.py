"""Diagrams over the parameters' ranges: what is in service, and what the search proposed."""

from __future__ import annotations

import itertools
from collections.abc import Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator, FuncFormatter, MaxNLocator, NullFormatter, NullLocator

from fieldnav_ros.parameters import TABLE, Parameter
from fieldnav_ros.report.facts import Generation, NamedValues
from fieldnav_ros.report.style import AFTER, BEFORE, GRID, INK, SOFT, key_above, new_figure, styled
from fieldnav_ros.report.values import bound, figures, title_of, unit_of


def whole_ticks(axes: Axes, which: str = "x", most: int = 6) -> None:
    """Put ticks at whole numbers only."""
    getattr(axes, f"{which}axis").set_major_locator(MaxNLocator(most, integer=True, min_n_ticks=1))


def champion(before: NamedValues, other: NamedValues, accepted: bool) -> Figure:
    """Where the values of two sets lie in the range of each parameter, on the parameter's own scale."""
    with styled():
        figure, axes = new_figure(3.5)
        rows = np.arange(len(TABLE))
        first, second = (
            np.array([row.to_unit(getattr(item.values, row.name)) for row in TABLE]) for item in (before, other)
        )
        axes.hlines(rows, 0, 1, color=GRID, linewidth=5)
        axes.hlines(rows, np.minimum(first, second), np.maximum(first, second), color=SOFT, linewidth=1.2)
        axes.plot(first, rows, "D", color=BEFORE, markerfacecolor="white", markersize=7, label="before", clip_on=False)
        face, label = (AFTER, "after") if accepted else ("white", "challenger, not accepted")
        axes.plot(second, rows, "o", color=AFTER, markerfacecolor=face, markersize=6, label=label, clip_on=False)
        axes.set_yticks(rows, [title_of(row) for row in TABLE])
        axes.set_ylim(len(TABLE) - 0.4, -0.6)
        axes.set_xlim(0, 1)
        axes.set_xticks([0, 0.5, 1], ["lowest", "middle", "highest"])
        axes.get_xticklabels()[2].set_horizontalalignment("right")
        axes.set_xlabel("place in the parameter's range, on its own scale")
        axes.tick_params(length=0)
        axes.spines[:].set_visible(False)
        key_above(figure, axes)
    return figure


def sessions(named: Sequence[tuple[str, NamedValues]]) -> Figure:
    """Where the sets in service of several sessions lie in the ranges; ``named`` gives letter and set."""
    with styled():
        figure, axes = new_figure(3.9)
        rows = np.arange(len(TABLE))
        axes.hlines(rows, 0, 1, color=GRID, linewidth=5)
        markers, colours = "oDs^vPX*", (AFTER, BEFORE, INK, "#a33b12", "#4f9d8f")
        spread = np.linspace(-0.24, 0.24, len(named)) if len(named) > 1 else np.zeros(1)
        for index, (letter, item) in enumerate(named):
            places = [row.to_unit(getattr(item.values, row.name)) for row in TABLE]
            axes.plot(
                places,
                rows + spread[index],
                markers[index % len(markers)],
                color=colours[index % len(colours)],
                markeredgecolor=INK,
                markeredgewidth=0.6,
                markersize=6,
                label=letter,
                clip_on=False,
            )
        axes.set_yticks(rows, [title_of(row) for row in TABLE])
        axes.set_ylim(len(TABLE) - 0.4, -0.6)
        axes.set_xlim(0, 1)
        axes.set_xticks([0, 0.5, 1], ["lowest", "middle", "highest"])
        axes.get_xticklabels()[2].set_horizontalalignment("right")
        axes.set_xlabel("place in the parameter's range, on its own scale")
        axes.tick_params(length=0)
        axes.spines[:].set_visible(False)
        key_above(figure, axes, 6)
    return figure


def narrowing(generations: Sequence[Generation], row: Parameter, before: NamedValues, other: NamedValues) -> Figure:
    """What the search proposed for one parameter, generation by generation."""
    with styled():
        figure = Figure(figsize=(3.1, 1.75))
        axes = figure.add_axes((0.15, 0.25, 0.83, 0.62))  # the same for all nine, so that they line up
        numbers = [item.number for item in generations]
        values = [np.array([getattr(chosen, row.name) for chosen in item.sets]) for item in generations]
        wide = min(7.0, 100.0 / max(len(numbers), 1))
        low, first, mean, third, high = (
            np.array([f(v) for v in values])
            for f in (np.min, lambda v: np.percentile(v, 25), np.mean, lambda v: np.percentile(v, 75), np.max)
        )
        axes.vlines(numbers, low, high, color=SOFT, linewidth=0.8)
        axes.vlines(numbers, first, third, color="#8fb8d3", linewidth=wide)
        axes.plot(numbers, mean, ".", color=INK, markersize=max(3.0, wide - 1.0))
        axes.axhline(getattr(before.values, row.name), color=BEFORE, linewidth=1.6, linestyle=(0, (5, 2)))
        if other.id != before.id:
            axes.axhline(getattr(other.values, row.name), color=AFTER, linewidth=1.6)
        for last, item in itertools.pairwise(generations):
            if item.grade != last.grade:
                axes.axvline(item.number - 0.5, color=INK, linewidth=0.9, linestyle=(0, (1, 2)))
        if row.scale == "log":
            axes.set_yscale("log")
        axes.yaxis.set_minor_locator(NullLocator())
        axes.yaxis.set_minor_formatter(NullFormatter())
        marks = [row.low, row.from_unit(0.5), row.high]
        axes.yaxis.set_major_locator(FixedLocator(marks))
        axes.yaxis.set_major_formatter(FuncFormatter(lambda at, _: bound("", float(figures(at, 2))).text))
        axes.set_ylim(row.low, row.high)
        axes.set_xlim(0.4, max(numbers) + 0.6)
        axes.set_xlabel("generation")
        axes.set_title(f"{title_of(row)}, {unit_of(row)}", loc="left")
        whole_ticks(axes, most=5)
    return figure
