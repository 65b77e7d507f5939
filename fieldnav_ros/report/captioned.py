"""The page's pictures: each figure with its words for those who cannot see it, and what to see for those who can."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from markupsafe import Markup
from matplotlib.figure import Figure

from fieldnav_ros.parameters import TABLE
from fieldnav_ros.report import charts, provenance, ranges
from fieldnav_ros.report.drift import Drift
from fieldnav_ros.report.facts import Facts, NamedValues, Round
from fieldnav_ros.report.record import Record
from fieldnav_ros.report.style import WORDS, as_svg
from fieldnav_ros.report.values import (
    Sentence,
    evidence,
    plain,
    seconds,
    share,
    title_of,
    whole,
)


@dataclass(frozen=True)
class Picture:
    """A figure of the page: its SVG, what it shows in words, and a caption that says what to see."""

    key: str
    svg: Markup
    alt: str
    caption: Sentence
    title: Sentence = ()


def picture(key: str, figure: Figure, alt: str, caption: Sentence, title: Sentence = ()) -> Picture:
    """Return a figure made ready for the page; ``key`` must be unique on it."""
    opening = Markup('<svg role="img" aria-label="{}"').format(alt)
    return Picture(key, opening + Markup(as_svg(figure, key).removeprefix("<svg")), alt, caption, title)


def champion_picture(before: NamedValues, other: NamedValues, accepted: bool) -> Picture:
    """Return where both sets lie in the ranges."""
    moved = max(TABLE, key=lambda row: abs(_place(other, row.name) - _place(before, row.name)))
    word = "after" if accepted else "the challenger, not accepted"
    return picture(
        "champion",
        ranges.champion(before, other, accepted),
        f"Nine horizontal scales, one for each parameter, with a diamond for before and a circle for {word}. "
        f"The longest way is that of {title_of(moved)}.",
        [
            "Each line is one parameter's range. Diamond: before; circle: ",
            word,
            ". Look at how long the ways are, and for circles at an end of their line: the longest way is that of ",
            title_of(moved),
            ".",
        ],
    )


def _place(item: NamedValues, name: str) -> float:
    return next(row.to_unit(getattr(item.values, name)) for row in TABLE if row.name == name)


def evidence_pictures(rounds: Sequence[Round]) -> list[Picture]:
    """Return the pairs' differences and the e-process; nothing where no pair was compared."""
    shown = [item for item in rounds if item.pairs]
    if not shown:
        return []
    pairs = [pair for item in shown for pair in item.pairs]
    better = sum(pair.difference > 0 for pair in pairs)
    telling = next((item for item in shown if item.accepted), shown[-1])
    reached = "passes" if telling.log_evidence >= telling.log_threshold else "stays below"
    which = f"In verdict {telling.number} of {len(rounds)} it" if len(rounds) > 1 else "It"
    return [
        picture(
            "differences",
            charts.differences(shown),
            f"Differences of {len(pairs)} pairs; the challenger was better in {better}.",
            [
                "Each stem is a pair on one layout, run close in time so that drift cancels. Above zero the challenger "
                "was better: in ",
                whole("pairs_better", better),
                " of ",
                whole("pairs", len(pairs)),
                ". Long stems are one-sided failures; the line is the mean so far.",
            ],
        ),
        picture(
            "evidence",
            charts.evidence(shown),
            f"The e-value over floor time. {which} {reached} the threshold and ends at "
            f"{evidence('', telling.log_evidence).text} against {evidence('', telling.log_threshold).text}.",
            [
                "The evidence starts at one and grows while the challenger proves better. It may be looked at after "
                "every pair; the first time it reaches the dashed line is an accept. ",
                *_which(telling, rounds),
                f" {reached} the line: ",
                evidence(f"round.{telling.number}.log_evidence", telling.log_evidence),
                " against ",
                evidence(f"round.{telling.number}.log_threshold", telling.log_threshold),
                ".",
            ],
        ),
    ]


def _which(item: Round, rounds: Sequence[Round]) -> Sentence:
    if len(rounds) == 1:
        return ["Here it"]
    return [
        "In verdict ",
        whole(f"round.{item.number}.number", item.number),
        " of ",
        whole("rounds", len(rounds)),
        " it",
    ]


def outcome_picture(facts: Facts) -> Picture | None:
    """Return shares of outcomes by role."""
    if not facts.episodes:
        return None
    failed = len(facts.failures)
    by_kind = ", ".join(f"{WORDS[kind]} {facts.count(kind)}" for kind in charts.COUNTED)
    return picture(
        "outcomes",
        charts.outcomes(facts),
        f"Shares of outcomes by role. Over all episodes: {by_kind}.",
        [
            whole("failures", failed),
            " of ",
            whole("episodes", len(facts.episodes)),
            " episodes that count failed. "
            "Compare the two rows of the verdict: they ran on the same layouts. Candidates of a search are meant to be "
            "worse than what it ends with.",
        ],
    )


def cost_picture(facts: Facts, drift: Drift | None) -> Picture | None:
    """Return costs over episodes with the control."""
    if not facts.episodes:
        return None
    caption: list[Any] = [
        "Each mark is an episode; failures lie on their own lines. The candidates' mean should fall; "
    ]
    if drift is None:
        caption += ["the control (the champion, run in every block) ran too seldom to say whether the floor drifted."]
    else:
        verb = "drifts beyond chance" if drift.seen else "shows no drift beyond chance"
        caption += [
            "the control (the champion, run in every block) should stay level. It ",
            verb,
            ": ",
            seconds("drift.slope", drift.slope, sign=True),
            " per hundred episodes, standard error ",
            seconds("drift.error", drift.error),
            ", over ",
            whole("drift.episodes", drift.episodes),
            " control episodes.",
        ]
    slope = f" The control's slope is {plain(drift.slope, 2, True)} s per hundred episodes." if drift else ""
    return picture("costs", charts.costs(facts), f"Cost of {len(facts.episodes)} episodes in order.{slope}", caption)


def narrowing_pictures(facts: Facts, other: NamedValues) -> list[Picture]:
    """Return one small picture for each parameter; nothing before the first generation."""
    shown = [item for item in facts.generations if item.sets]
    if not shown or facts.before is None:
        return []
    result = []
    for row in TABLE:
        spans = [[row.to_unit(getattr(chosen, row.name)) for chosen in item.sets] for item in (shown[0], shown[-1])]
        widths = [max(span) - min(span) for span in spans]
        ratio = share(f"narrowed.{row.name}", widths[1] / widths[0]) if widths[0] > 0 else None
        caption: Sentence = (
            ["Last span: ", ratio, " of the first"] if ratio and len(shown) > 1 else ["One generation only"]
        )
        result.append(
            picture(
                f"narrowing-{row.name}",
                ranges.narrowing(shown, row, facts.before, other),
                f"Values of {title_of(row)} proposed over {len(shown)} generations.",
                caption,
            )
        )
    return result


def time_picture(found: Facts) -> Picture | None:
    """Return floor time as planned and as used; None where no session was begun."""
    if found.plan is None:
        return None
    return picture(
        "time",
        charts.time_use(found),
        "Two bars of floor time: the plan at the start, and what was used for search, verdict, resets and voids.",
        [
            "Plain: driving; hatched: resets. A search bar longer than planned has eaten into the verdict; "
            "resets longer than driving say where the next session can save."
        ],
    )


def session_picture(records: list[Record]) -> Picture | None:
    """Return where the sets in service of all sessions lie; None where none has one."""
    named: list[tuple[str, NamedValues]] = [
        (provenance.letter(index), item.facts.after) for index, item in enumerate(records) if item.facts.after
    ]
    if not named:
        return None
    return picture(
        "sessions",
        ranges.sessions(named),
        f"Nine horizontal scales with the sets in service of {len(named)} sessions.",
        [
            "Each line is one parameter's range, each mark the set in service at the end of a session. Where marks lie "
            "together the number travels from floor to floor; where they part it has to be found on site."
        ],
    )
