"""The page's tables as plain data for the template."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from fieldnav_ros.model import OutcomeKind
from fieldnav_ros.parameters import TABLE
from fieldnav_ros.report import charts
from fieldnav_ros.report.facts import Facts, NamedValues, Round
from fieldnav_ros.report.style import WORDS
from fieldnav_ros.report.values import (
    Name,
    Sentence,
    Value,
    bound,
    evidence,
    figures,
    minutes,
    seconds,
    setting,
    share,
    title_of,
    unit_of,
    whole,
)

MOST_ROWS = 40
SYMBOLS = {
    "d_e": ("d", "e"),
    "K_r": ("K", "r"),
    "K_o": ("K", "o"),
    "d_min": ("d", "min"),
    "delta": ("δ", ""),
    "K_w": ("K", "w"),
    "K_p": ("K", "p"),
    "R_m": ("R", "m"),
}


@dataclass(frozen=True)
class ParameterRow:
    """One line of the table of values."""

    title: str
    symbol: tuple[str, str]
    unit: str
    meaning: str
    low: Value
    high: Value
    before: Value
    other: Value | None
    change: Value | None


def parameter_rows(before: NamedValues, other: NamedValues | None) -> list[ParameterRow]:
    """Return the nine numbers of one set, or of two and the change from one to the other."""
    rows = []
    for row in TABLE:
        old = getattr(before.values, row.name)
        new = getattr(other.values, row.name) if other else None
        rows.append(
            ParameterRow(
                title=title_of(row),
                symbol=SYMBOLS.get(row.symbol, ("", "")),
                unit=unit_of(row),
                meaning=row.meaning,
                low=bound(f"table.{row.name}.low", row.low),
                high=bound(f"table.{row.name}.high", row.high),
                before=setting(f"before.{row.name}", old),
                other=None if new is None else setting(f"other.{row.name}", new),
                change=None if new is None else _change(row.name, old, new, row.scale == "log"),
            )
        )
    return rows


def _change(name: str, old: float, new: float, relative: bool) -> Value:
    """Return a change in per cent for a number on a logarithmic scale, else as a difference."""
    if relative:
        return share(f"change.{name}", new / old - 1.0, sign=True)
    off = new - old
    sign = "+" if off > 0 else ""
    return Value(f"change.{name}", off, f"{sign}{figures(off, 2)}" if off else "0")


def round_lists(rounds: Sequence[Round]) -> list[dict[str, Any]]:
    """Return each verdict as a list of what it rests on."""
    result = []
    for item in rounds:
        key = f"round.{item.number}"
        mean = item.mean_difference
        rows: list[tuple[str, Sentence]] = [
            ("in service", [Name(item.champion.id)]),
            ("challenger", [Name(item.challenger.id)]),
            ("pairs", [whole(f"{key}.pairs", len(item.pairs))]),
            (
                "mean difference",
                [seconds(f"{key}.signed_difference", mean, sign=True)] if mean is not None else ["none"],
            ),
            (
                "evidence",
                [
                    evidence(f"{key}.log_evidence", item.log_evidence),
                    " of ",
                    evidence(f"{key}.log_threshold", item.log_threshold),
                ],
            ),
            ("false accept", ["at most ", share(f"{key}.alpha", item.alpha)]),
            ("reason", [Name(item.verdict.reason)] if item.verdict else ["the record stops before the verdict"]),
        ]
        word = item.verdict.verdict if item.verdict else "open"
        result.append({"title": ["Verdict ", whole(f"{key}.number", item.number), f": {word}"], "rows": rows})
    return result


def pair_rows(rounds: Sequence[Round]) -> list[list[Value]]:
    """Return the last pairs as a table: verdict, pair, both costs, difference, evidence."""
    rows = []
    for item in rounds:
        for pair in item.pairs:
            key = f"pair.{item.number}.{pair.pair}"
            rows.append(
                [
                    whole(f"{key}.round", item.number),
                    whole(f"{key}.pair", pair.pair),
                    seconds(f"{key}.champion_cost", pair.champion_cost),
                    seconds(f"{key}.challenger_cost", pair.challenger_cost),
                    seconds(f"{key}.difference", pair.difference, sign=True),
                    evidence(f"{key}.log_evidence", pair.log_evidence),
                ]
            )
    return rows[-MOST_ROWS:]


def outcome_rows(facts: Facts) -> list[dict[str, Any]]:
    """Return counts of outcomes and mean costs by role, and over all."""
    names = {role: name.replace("\n", " ") for role, name in charts.ROLES.items()}
    rows = []
    for role, title in [*names.items(), (None, "all")]:
        runs = [item for item in facts.episodes if role in (None, item.role)]
        voids = facts.count(OutcomeKind.VOID, role)
        if role is not None and not runs and not voids:
            continue
        key = f"outcomes.{role or 'all'}"
        counts = [whole(f"{key}.{kind.value}", facts.count(kind, role)) for kind in OutcomeKind]
        mean = seconds(f"{key}.mean_cost", sum(item.cost for item in runs) / len(runs)) if runs else None
        rows.append({"title": title, "counts": counts, "mean": mean})
    return rows


def time_rows(facts: Facts) -> list[tuple[str, Value | None, Value]]:
    """Return what floor time was planned for and went into (min), and episodes."""
    plan, spent = facts.plan, facts.spending
    searched = sum(item.phase == "search" for item in facts.episodes)
    search_s, verdict_s = spent.search_run + spent.search_reset, spent.verdict_run + spent.verdict_reset
    reserve = plan.floor_left_s - plan.search_left_s if plan else 0.0
    return [
        ("search", minutes("plan.search", plan.search_left_s) if plan else None, minutes("used.search", search_s)),
        ("verdict", minutes("plan.verdict", reserve) if plan else None, minutes("used.verdict", verdict_s)),
        ("void episodes", None, minutes("used.void", spent.void)),
        ("other", None, minutes("used.other", spent.other)),
        ("all", minutes("plan.all", plan.floor_left_s) if plan else None, minutes("used.all", spent.total)),
        ("resets, of all", None, minutes("used.resets", spent.search_reset + spent.verdict_reset)),
        (
            "search episodes",
            whole("plan.search_episodes", plan.search_episodes) if plan else None,
            whole("search_episodes", searched),
        ),
        (
            "verdict episodes",
            whole("plan.verdict_episodes", plan.verdict_episodes) if plan else None,
            whole("verdict_episodes", len(facts.episodes) - searched),
        ),
    ]


def void_rows(facts: Facts) -> list[dict[str, Any]]:
    """Return the last void episodes, each with the notes that name it."""
    rows = []
    for item in facts.voids[-MOST_ROWS:]:
        told = [note.text for note in facts.notes if note.text.startswith(f"episode {item.id}:")]
        earlier = f"scored {WORDS[item.earlier]} before" if item.earlier else "never scored"
        rows.append(
            {"item": item, "earlier": earlier, "notes": told, "time": seconds(f"void.{item.id}", item.floor_time_s)}
        )
    return rows


def ignored_rows(facts: Facts) -> list[tuple[str, str, Value]]:
    """Return reports that were not counted, by reason and source."""
    counted = Counter((item.reason, item.source) for item in facts.ignored)
    return [
        (reason, source, whole(f"ignored.{index}", count))
        for index, ((reason, source), count) in enumerate(counted.most_common(MOST_ROWS))
    ]
