"""Figures: what is drawn is what the ledger says, with names and units on every axis."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from matplotlib.figure import Figure
from numpy.testing import assert_allclose
from report.by_sql import Truth
from report.conftest import Zoo
from report.ledgers import parcel_yard

from fieldnav_ros.guide import MODELS
from fieldnav_ros.parameters import DEFAULTS, TABLE
from fieldnav_ros.report import charts, floor, ranges
from fieldnav_ros.report.facts import Facts, NamedValues
from fieldnav_ros.report.record import read_record
from fieldnav_ros.report.scenes import Ground, failure_scene
from fieldnav_ros.report.style import AFTER, BEFORE, LOOKS
from fieldnav_ros.world.layouts import draw_many


def facts_of(zoo: Zoo, name: str) -> Facts:
    return read_record(zoo[name]).facts


def labelled(figure: Figure, name: str) -> list[tuple[np.ndarray, np.ndarray]]:
    lines = [line for axes in figure.axes for line in axes.lines if line.get_label() == name]
    return [(np.asarray(line.get_xdata()), np.asarray(line.get_ydata())) for line in lines]


def test_evidence_is_drawn_as_it_stands_in_the_record(zoo: Zoo) -> None:
    figure = charts.evidence(facts_of(zoo, "cut_in_verdict").rounds)
    truth = Truth(zoo["cut_in_verdict"])
    expected = [pair["log_evidence"] for pair in truth.payloads("pair_compared")]
    alpha = truth.payloads("challenger_named")[0]["alpha"]
    truth.close()
    ((_, height),) = labelled(figure, "evidence (e-value)")
    assert_allclose(height, np.array([0.0, *expected]) / math.log(10.0))
    ((_, threshold),) = labelled(figure, "threshold for accept")
    assert_allclose(threshold, -math.log10(alpha))


def test_differences_are_drawn_as_they_stand_in_the_record(zoo: Zoo) -> None:
    figure = charts.differences(facts_of(zoo, "kept").rounds)
    truth = Truth(zoo["kept"])
    expected = [pair["champion_cost"] - pair["challenger_cost"] for pair in truth.payloads("pair_compared")]
    truth.close()
    points: dict[float, float] = {}
    for name in ("challenger better", "champion better"):
        ((x, y),) = labelled(figure, name)
        points |= dict(zip(x, y))
    assert_allclose([points[index + 1] for index in range(len(expected))], expected, atol=1e-12)
    ((_, mean),) = labelled(figure, "mean so far")
    assert mean[-1] == pytest.approx(sum(expected) / len(expected))


def test_costs_are_drawn_as_they_stand_in_the_record(zoo: Zoo) -> None:
    figure = charts.costs(facts_of(zoo, "troubled"))
    truth = Truth(zoo["troubled"])
    expected = {
        kind: truth.rows("SELECT nth, cost FROM counted WHERE kind = ?", kind) for kind in ("arrived", "contact")
    }
    control = [item["control"] for item in truth.payloads("generation_closed")]
    truth.close()
    for kind, points in expected.items():
        ((x, y),) = labelled(figure, kind)
        assert_allclose(sorted(zip(x, y)), sorted(points))
    assert_allclose(labelled(figure, "control, mean")[0][1], control)


def test_outcome_bars_add_up_to_all(zoo: Zoo) -> None:
    figure = charts.outcomes(facts_of(zoo, "accepted"))
    (axes,) = figure.axes
    widths = np.array([[bar.get_width() for bar in group] for group in axes.containers])
    assert_allclose(widths.sum(axis=0), 100.0)


def test_time_bars_add_up_to_the_floor_time_used(zoo: Zoo) -> None:
    found = facts_of(zoo, "troubled")
    (axes,) = charts.time_use(found).axes
    truth = Truth(zoo["troubled"])
    expected = truth.facts()["used.all"]
    truth.close()
    used = [bar for bar in axes.patches if bar.get_y() > 0.5]  # type: ignore[attr-defined]  # bars are rectangles
    assert sum(bar.get_width() for bar in used) == pytest.approx(expected)  # type: ignore[attr-defined]  # as above


def all_figures(zoo: Zoo) -> dict[str, Figure]:
    found = facts_of(zoo, "accepted")
    assert found.before is not None
    assert found.after is not None
    yard = parcel_yard()
    layout = draw_many(yard, "moving", 1, seed=2)[0]
    scene = failure_scene(found, Ground.of(found), {})
    return {
        "champion": ranges.champion(found.before, found.after, accepted=True),
        "differences": charts.differences(found.rounds),
        "evidence": charts.evidence(found.rounds),
        "outcomes": charts.outcomes(found),
        "costs": charts.costs(found),
        "narrowing": ranges.narrowing(found.generations, TABLE[0], found.before, found.after),
        "time": charts.time_use(found),
        "failures": floor.failures(yard, scene.items),
        "field": floor.field(yard, layout, DEFAULTS, MODELS[0]),
        "sessions": ranges.sessions([("A", found.before), ("B", found.after)]),
    }


def test_every_axis_says_what_it_is_and_in_what_unit(zoo: Zoo) -> None:
    units = {
        "champion": ("place in the parameter's range", ""), "differences": ("pair", ", s"),
        "evidence": (", min", "evidence"), "outcomes": (", %", ""), "costs": ("episode", ", s"),
        "narrowing": ("generation", ""), "time": (", min", ""), "failures": (", m", ", m"), "field": (", m", ", m"),
        "sessions": ("place in the parameter's range", ""),
    }  # fmt: skip
    for name, figure in all_figures(zoo).items():
        (axes,) = figure.axes
        x, y = units[name]
        assert x in axes.get_xlabel(), name
        assert axes.get_xlabel(), name
        # where y holds names of rows there is nothing to measure; small panels carry the unit in their title
        ticks = [label.get_text() for label in axes.get_yticklabels()]
        assert y in axes.get_ylabel() if y else (ticks and ticks[0][:1].isalpha()) or ", m" in axes.get_title("left"), (
            name
        )


def luminance(colour: str) -> float:
    """Return the relative luminance of a colour (WCAG 2.2, definition of relative luminance)."""
    parts = [int(colour[at : at + 2], 16) / 255.0 for at in (1, 3, 5)]
    linear = [part / 12.92 if part <= 0.04045 else ((part + 0.055) / 1.055) ** 2.4 for part in parts]
    return float(np.dot([0.2126, 0.7152, 0.0722], linear))


def contrast(one: str, other: str) -> float:
    """Return the contrast ratio (WCAG 2.2)."""
    low, high = sorted((luminance(one), luminance(other)))
    return (high + 0.05) / (low + 0.05)


def test_colours_are_told_apart_in_greyscale() -> None:
    """Contrast of 3 for what is set side by side (WCAG 2.2, 1.4.11); hatches and markers differ too."""
    assert contrast(BEFORE, AFTER) >= 3.0
    looks = [LOOKS[kind] for kind in charts.COUNTED]
    assert len({look.hatch for look in looks}) == len({look.marker for look in looks}) == len(looks)
    lightness = sorted(luminance(look.fill) for look in looks)
    assert min(high - low for low, high in itertools.pairwise(lightness)) > 0.04


def test_a_place_in_the_range_is_that_of_the_parameter_table() -> None:
    low = NamedValues("low", DEFAULTS.model_copy(update={row.name: row.low for row in TABLE}))
    high = NamedValues("high", DEFAULTS.model_copy(update={row.name: row.high for row in TABLE}))
    figure = ranges.champion(low, high, accepted=True)
    assert_allclose(labelled(figure, "before")[0][0], 0.0, atol=1e-12)
    assert_allclose(labelled(figure, "after")[0][0], 1.0)
