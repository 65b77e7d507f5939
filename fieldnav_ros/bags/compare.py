"""Recorded episodes beside the ledger's: which agree, which differ and how, which the one has and the other not."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import NamedTuple

from fieldnav_ros.bags.scoring import Scored
from fieldnav_ros.model import Layout, Outcome, OutcomeKind
from fieldnav_ros.parameters import ParameterSet
from fieldnav_ros.tuning import events as ev
from fieldnav_ros.tuning.session import Session

TIME_SLACK = 1e-3
"""Seconds by which the same outcome may differ: a thousandth is beyond any judge's clock."""


@dataclass(frozen=True)
class Known:
    """An episode of a ledger; ``outcome`` is None before it was scored or where it was voided. Time limit in s.

    ``parameters`` are None for one that was only watched, which is known by its name, not by a number.
    """

    id: int | str
    set_id: str
    parameters: ParameterSet | None
    layout: Layout
    grade: str
    time_limit: float
    outcome: Outcome | None = None
    void: bool = False


class Difference(NamedTuple):
    """One episode that came out another way; outcomes are None where there is none."""

    bag: str
    episode: int | str
    ledger: Outcome | None
    found: Outcome | None

    def sentence(self) -> str:
        """Say what differs."""
        return f"{self.bag}: {_said(self.ledger)} in the ledger, {_said(self.found)} from the bag"


@dataclass(frozen=True)
class Comparison:
    """Bags against a ledger. ``matched`` holds each recorded episode with its entry, in the order recorded."""

    matched: tuple[tuple[Scored, Known], ...]
    agree: tuple[Scored, ...]
    differ: tuple[Difference, ...]
    open: tuple[Scored, ...]
    """Recordings that end before their episode does, under the rules asked for."""
    void: tuple[Scored, ...]
    """Recordings of episodes that the ledger does not count."""
    repeats: tuple[Scored, ...]
    """Earlier attempts at an episode that was run again under the same id."""
    strangers: tuple[Scored, ...]
    """Recordings without an entry: of another session, or of an episode that was never scored."""
    unrecorded: tuple[int | str, ...]
    """Ids of episodes that were scored and have no bag."""


def known_episodes(events: Iterable[ev.Event]) -> tuple[dict[int | str, Known], Session]:
    """Return what a ledger's events say of each episode that was asked for or watched, and the session they make."""
    session, found = Session(), dict[int | str, Known]()
    for event in events:
        session.apply(event)
        if isinstance(event, ev.BatchOpened):
            found.update((item.id, item) for item in _opened(event, session))
        elif isinstance(event, ev.EpisodeScored) and event.episode_id in found:
            found[event.episode_id] = replace(found[event.episode_id], outcome=event.outcome)
        elif isinstance(event, ev.EpisodeVoided) and event.episode_id in found:
            voided = found[event.episode_id]
            found[event.rerun_id] = replace(voided, id=event.rerun_id, outcome=None, void=False)
            found[event.episode_id] = replace(voided, outcome=None, void=True)
        elif isinstance(event, ev.EpisodeObserved):
            found[event.name] = Known(
                event.name, event.set_id, None, event.layout, "", event.time_limit, event.outcome
            )  # fmt: skip
    return found, session


def _opened(event: ev.BatchOpened, session: Session) -> Iterable[Known]:
    stage = session.state.stage
    for run in event.runs:
        if 0 <= run.set_index < len(event.sets) and 0 <= run.layout_index < len(event.layouts):
            chosen = event.sets[run.set_index]
            yield Known(
                run.episode_id, chosen.id, chosen.parameters, event.layouts[run.layout_index], stage.grade,
                stage.time_limit,
            )  # fmt: skip


def compare(scored: Sequence[Scored], known: Mapping[int | str, Known]) -> Comparison:
    """Set recordings beside a ledger's episodes. A bag belongs to an entry by id, set and layout together."""
    last = dict[int | str, Scored]()
    strangers, repeats = list[Scored](), list[Scored]()
    for item in sorted(scored, key=lambda item: item.begun):
        entry = known.get(item.request.episode) or (known.get(item.number) if item.number is not None else None)
        if entry is None or not _is_of(item, entry):
            strangers.append(item)
            continue
        if entry.id in last:
            repeats.append(last[entry.id])
        last[entry.id] = item
    matched = [(item, known[number]) for number, item in sorted(last.items(), key=lambda pair: pair[1].begun)]
    counted = [(item, entry) for item, entry in matched if entry.outcome is not None]
    closed = [(item, entry) for item, entry in counted if item.ruling is not None]
    return Comparison(
        matched=tuple(matched),
        agree=tuple(item for item, entry in closed if _same(entry.outcome, item.outcome)),
        differ=tuple(
            Difference(item.request.episode, entry.id, entry.outcome, item.outcome)
            for item, entry in closed
            if not _same(entry.outcome, item.outcome)
        ),
        open=tuple(item for item, _ in counted if item.ruling is None),
        void=tuple(item for item, entry in matched if entry.void),
        repeats=tuple(repeats),
        strangers=(*strangers, *(item for item, entry in matched if entry.outcome is None and not entry.void)),
        unrecorded=tuple(
            entry.id for entry in known.values() if entry.outcome is not None and entry.id not in last
        ),
    )  # fmt: skip


def _is_of(item: Scored, entry: Known) -> bool:
    return item.request.layout == entry.layout and (entry.parameters is None or item.request.set == entry.set_id)


def _same(one: Outcome | None, other: Outcome | None) -> bool:
    if one is None or other is None:
        return one is other
    return one.kind is other.kind and abs(one.time - other.time) <= TIME_SLACK


def _said(outcome: Outcome | None) -> str:
    if outcome is None:
        return "nothing"
    after = "" if outcome.kind is OutcomeKind.TIMEOUT else f" after {outcome.time:.3f} s"
    return outcome.kind.value.replace("_", " ") + after
