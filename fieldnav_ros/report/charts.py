"""The page's diagrams over episodes, pairs, generations and time. Each function returns a figure of its own."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import FuncFormatter, MaxNLocator

from fieldnav_ros.model import OutcomeKind
from fieldnav_ros.report.facts import Facts, Round
from fieldnav_ros.report.ranges import whole_ticks
from fieldnav_ros.report.style import AFTER, BEFORE, INK, LOOKS, SOFT, WORDS, key_above, new_figure, styled
from fieldnav_ros.report.values import raised
from fieldnav_ros.tuning.events import Role

COUNTED = (OutcomeKind.ARRIVED, OutcomeKind.TIMEOUT, OutcomeKind.CONTACT, OutcomeKind.OFF_FLOOR)
ROLES: dict[Role, str] = {
    "candidate": "search,\ncandidates",
    "control": "search,\ncontrol",
    "champion": "verdict,\nchampion",
    "challenger": "verdict,\nchallenger",
}


def differences(rounds: Sequence[Round]) -> Figure:
    """Paired differences in the order of the pairs, and their running mean."""
    with styled():
        figure, axes = new_figure(2.6)
        start = 0
        for item in rounds:
            values = np.array([pair.difference for pair in item.pairs])
            at = start + 1 + np.arange(len(values))
            for sign, marker, face, label in (
                (1, "o", AFTER, "challenger better"),
                (-1, "s", "white", "champion better"),
            ):
                mask = values > 0 if sign > 0 else values <= 0
                axes.vlines(at[mask], 0, values[mask], color=AFTER if sign > 0 else BEFORE, linewidth=1.0)
                axes.plot(
                    at[mask],
                    values[mask],
                    marker,
                    color=AFTER if sign > 0 else BEFORE,
                    markerfacecolor=face,
                    markersize=_size(len(values)),
                    label=label if start == 0 else None,
                )
            mean = np.cumsum(values) / np.arange(1, len(values) + 1)
            axes.plot(at, mean, color=INK, linewidth=1.4, label="mean so far" if start == 0 else None)
            start += len(values)
        _rounds_apart(axes, rounds)
        axes.axhline(0, color=SOFT, linewidth=0.8)
        axes.set_xlim(0.4, max(start, 1) + 0.6)
        axes.set_xlabel("pair (a block: both sets on one layout)")
        axes.set_ylabel("champion − challenger, s")
        axes.margins(y=0.12)
        whole_ticks(axes)
        key_above(figure, axes)
    return figure


def _rounds_apart(axes: Axes, rounds: Sequence[Round]) -> None:
    start = 0
    for item in rounds[:-1]:
        start += len(item.pairs)
        axes.axvline(start + 0.5, color=SOFT, linewidth=0.8, linestyle=(0, (1, 2)))


def evidence(rounds: Sequence[Round]) -> Figure:
    """The e-process of each verdict over the floor time used, with its threshold."""
    with styled():
        figure, axes = new_figure(2.6)
        ends = [item.pairs[-1].floor_s / 60.0 if item.pairs else item.begun_floor_s / 60.0 for item in rounds]
        levels = [0.0]
        for number, (item, end) in enumerate(zip(rounds, ends)):
            at = [item.begun_floor_s / 60.0, *(pair.floor_s / 60.0 for pair in item.pairs)]
            height = [0.0, *(pair.log_evidence / math.log(10.0) for pair in item.pairs)]
            threshold = item.log_threshold / math.log(10.0)
            axes.step(
                at,
                height,
                where="post",
                color=AFTER,
                linewidth=1.5,
                label=None if number else "evidence (e-value)",
                marker="o" if len(at) < 40 else None,
                markersize=3,
            )
            axes.plot(
                [at[0], max(end, at[0])],
                [threshold] * 2,
                color=INK,
                linewidth=1.2,
                linestyle=(0, (5, 2)),
                marker="|",
                label=None if number else "threshold for accept",
            )
            levels += [*height, threshold]
        axes.axhline(0, color=SOFT, linewidth=0.8, linestyle=(0, (1, 2)))
        low, high = min(levels), max(levels)
        pad = 0.08 * max(high - low, 1.0)
        axes.set_ylim(low - pad, high + pad)
        _powers(axes, low - pad, high + pad)
        axes.set_xlabel("floor time used, min")
        axes.set_ylabel("evidence (1: none)")
        key_above(figure, axes)
    return figure


def _powers(axes: Axes, low: float, high: float) -> None:
    """Label a linear axis of decimal logarithms with the numbers themselves, as they may be too large for floats."""
    if high - low > 3:
        axes.yaxis.set_major_locator(MaxNLocator(6, integer=True))
        axes.yaxis.set_major_formatter(FuncFormatter(lambda at, _: "1" if at == 0 else raised(round(at))))
        return
    marks = [0.02, 0.05, 0.1, 0.2, 0.5, 1, 2, 5, 10, 20, 50, 100, 200, 500, 1000, 2000, 5000]
    inside = [mark for mark in marks if low <= math.log10(mark) <= high]
    axes.set_yticks([math.log10(mark) for mark in inside], [f"{mark:g}" for mark in inside])


def outcomes(facts: Facts) -> Figure:
    """How episodes ended, as shares of each role's."""
    with styled():
        roles = [role for role in ROLES if any(item.role == role for item in facts.episodes)]
        figure, axes = new_figure(0.9 + 0.5 * len(roles))
        left = np.zeros(len(roles))
        totals = np.array([sum(item.role == role for item in facts.episodes) for role in roles])
        for kind in COUNTED:
            width = 100.0 * np.array([facts.count(kind, role) for role in roles]) / totals
            look = LOOKS[kind]
            axes.barh(
                range(len(roles)),
                width,
                left=left,
                height=0.62,
                color=look.fill,
                hatch=look.hatch,
                edgecolor="white",
                linewidth=0.8,
                label=WORDS[kind],
            )
            left += width
        axes.set_yticks(range(len(roles)), [ROLES[role] for role in roles])
        axes.set_ylim(len(roles) - 0.5, -0.5)
        axes.set_xlim(0, 100)
        axes.set_xlabel("share of the episodes that count, %")
        axes.tick_params(axis="y", length=0)
        key_above(figure, axes, 4)
    return figure


def costs(facts: Facts) -> Figure:
    """Cost of each episode in order; the control over the generations shows whether the floor drifts."""
    with styled():
        figure, axes = new_figure(2.9)
        for kind in COUNTED:
            points = [(item.order, item.cost) for item in facts.episodes if item.kind is kind]
            look = LOOKS[kind]
            if points:
                axes.plot(
                    *zip(*points),
                    look.marker,
                    color=look.edge,
                    alpha=0.55,
                    markersize=_size(len(facts.episodes)) - 0.5,
                    markerfacecolor="none",
                    markeredgewidth=0.8,
                    label=WORDS[kind],
                )
        control = [(item.last_order, item.control) for item in facts.generations if item.control is not None]
        if control:
            axes.plot(
                *zip(*control),
                "-D",
                color=BEFORE,
                markeredgecolor=INK,
                markeredgewidth=0.6,
                markersize=4.5,
                linewidth=1.4,
                label="control, mean",
            )
        means = [(item.last_order, float(np.mean(item.costs))) for item in facts.generations if item.costs]
        if means:
            axes.plot(*zip(*means), "--", color=INK, linewidth=1.4, label="candidates, mean")
        for number, (start, end) in enumerate(_verdict_spans(facts)):
            axes.axvspan(start - 0.5, end + 0.5, color="#eceff1", zorder=0, label=None if number else "in a verdict")
        axes.set_xlabel("episode, in the order of the record")
        axes.set_ylabel("cost, s")
        axes.set_ylim(bottom=0)
        axes.set_xlim(0, max(len(facts.episodes), 1) + 1)
        whole_ticks(axes)
        key_above(figure, axes)
    return figure


def _verdict_spans(facts: Facts) -> list[tuple[int, int]]:
    """Return first and last of the episodes of each verdict, by order."""
    result = list[tuple[int, int]]()
    for item in facts.episodes:
        if item.phase == "verdict":
            joined = bool(result) and result[-1][1] == item.order - 1
            result[-1:] = [(result[-1][0], item.order)] if joined else [*result[-1:], (item.order, item.order)]
    return result


def time_use(facts: Facts) -> Figure:
    """Floor time as planned at the start and as used (min)."""
    with styled():
        figure, axes = new_figure(2.1)
        plan, spent = facts.plan, facts.spending
        search, verdict, other = "#8fb8d3", "#2f6690", "#d5d9dc"
        if plan is not None:
            reserve = plan.floor_left_s - plan.search_left_s
            _stack(axes, 0, [(plan.search_left_s, search, ""), (reserve, verdict, "")])
        parts = [
            (spent.search_run, search, "", "search, driving"),
            (spent.search_reset, search, "///", "search, resets"),
            (spent.verdict_run, verdict, "", "verdict, driving"),
            (spent.verdict_reset, verdict, "///", "verdict, resets"),
            (spent.void, "#f0c04a", "xxx", "void episodes"),
            (spent.other, other, "...", "other"),
        ]
        _stack(axes, 1, [part[:3] for part in parts])
        for _, colour, hatch, label in parts:
            axes.barh([0], [0], color=colour, hatch=hatch, label=label)
        if facts.config is not None and facts.config.episodes is None:
            axes.axvline(facts.config.floor_time_s / 60.0, color=INK, linewidth=1.2, linestyle=(0, (5, 2)))
        axes.set_yticks([0, 1], ["plan", "used"])
        axes.set_ylim(1.5, -0.5)
        axes.set_xlim(left=0)
        bounded = facts.config is None or facts.config.episodes is None
        axes.set_xlabel("floor time, min" + (" (dashed: what the session was given)" if bounded else ""))
        axes.tick_params(axis="y", length=0)
        key_above(figure, axes)
    return figure


def _stack(axes: Axes, row: int, parts: Sequence[tuple[float, str, str]]) -> None:
    left = 0.0
    for length_s, colour, hatch in parts:
        axes.barh(
            [row],
            [length_s / 60.0],
            left=[left],
            height=0.6,
            color=colour,
            hatch=hatch,
            edgecolor="white",
            linewidth=0.8,
        )
        left += length_s / 60.0


def _size(points: int) -> float:
    return 5.0 if points < 60 else 3.8 if points < 600 else 2.8
