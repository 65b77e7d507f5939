"""Easier grades first, and budgets in episodes: what the search goes through, and that it is still a fold."""

from __future__ import annotations

from collections import Counter
from typing import Any

import numpy as np
import pytest
from tuning.synthetic_floor import BEST, commit, draw, finish, replayed, run, started

from fieldnav_ros.errors import InputError
from fieldnav_ros.model import Layout, Outcome, OutcomeKind
from fieldnav_ros.tuning import events as ev
from fieldnav_ros.tuning.config import Stage
from fieldnav_ros.tuning.curriculum import PAYS, STAGE_WIDENING, WINDOW
from fieldnav_ros.tuning.session import Report, Session
from fieldnav_ros.tuning.space import SPACE

STAGED = ev.SessionConfig(
    seed=3, floor_time_s=1.0, episodes=1200, grade="hard", time_limit=10.0, population=6, layouts=4, control=False,
    lead_in=(Stage(grade="easy", time_limit=5.0), Stage(grade="fair", time_limit=7.0)), rounds=1, pairs_at_once=10,
)  # fmt: skip


def the(log: list[ev.Event], kind: type) -> list[Any]:
    return [event for event in log if type(event) is kind]


def together(session: Session, log: list[ev.Event]) -> None:
    """Drive a session to its end, everything that is open at once."""
    while episodes := session.pending():
        outcomes = [run(episode) for episode in episodes]
        commit(session, log, session.record_all([Report(e.id, o, o.time) for e, o in zip(episodes, outcomes)]))


def whole(config: ev.SessionConfig) -> tuple[Session, list[ev.Event]]:
    session, log = started(config)
    together(session, log)
    return session, log


def test_grades_come_in_order_each_with_its_own_limit_and_layouts_and_the_verdict_is_on_the_last() -> None:
    grades: list[str] = []

    def noted(grade: str, seed: int) -> Layout:
        grades.append(grade)
        return draw(grade, seed)

    session, log = Session(noted), list[ev.Event]()
    commit(session, log, session.begin(STAGED))
    limits = []
    while not session.ended:
        limits += [(session.state.stage.grade, session.phase, episode.time_limit) for episode in session.pending()]
        outcomes = [run(episode) for episode in session.pending()]
        reports = [Report(e.id, o, o.time) for e, o in zip(session.pending(), outcomes)]
        commit(session, log, session.record_all(reports))
    assert list(dict.fromkeys(grades)) == ["easy", "fair", "hard"]
    assert list(dict.fromkeys(limits)) == [
        ("easy", "search", 5.0), ("fair", "search", 7.0), ("hard", "search", 10.0), ("hard", "verdict", 10.0)
    ]  # fmt: skip
    assert [event.number for event in the(log, ev.StageBegun)] == [1, 2]


def test_each_grade_starts_from_the_last_ones_distribution() -> None:
    session, log = started(STAGED)
    while not the(log, ev.StageBegun):
        before = session.prior()
        outcomes = [run(episode) for episode in session.pending()]
        reports = [Report(e.id, o, o.time) for e, o in zip(session.pending(), outcomes)]
        commit(session, log, session.record_all(reports))
    [begun] = the(log, ev.StageBegun)
    learnt = replayed(log[: log.index(begun)]).prior()
    assert begun.prior.mean == learnt.mean != before.mean
    assert np.array(begun.prior.covariance) == pytest.approx(np.array(learnt.covariance) * STAGE_WIDENING**2)
    assert session.prior().mean == pytest.approx(begun.prior.mean)
    assert np.array(session.prior().covariance) == pytest.approx(np.array(begun.prior.covariance), rel=1e-6)


def test_a_grade_that_has_nothing_more_to_teach_is_left_before_its_share_is_used_up() -> None:
    """On a floor where all sets cost the same, after as few generations as can show it."""
    session, log = started(STAGED.model_copy(update={"episodes": 4000}))
    while not session.ended:
        same = Outcome(kind=OutcomeKind.ARRIVED, time=2.0)
        commit(session, log, session.record_all([Report(e.id, same, 2.0) for e in session.pending()]))
    for event in the(log, ev.StageBegun):
        assert event.reason == "it stopped paying: 2.00 s, then 2.00 s"
    opened = Counter(
        sum(isinstance(event, ev.StageBegun) for event in log[:at]) for at, event in enumerate(log)
        if isinstance(event, ev.BatchOpened)
    )  # fmt: skip
    assert opened[0] == opened[1] == 2 * WINDOW
    assert opened[2] > 2 * WINDOW


def test_a_grade_that_pays_is_left_when_its_share_is_used_up() -> None:
    config = STAGED.model_copy(update={"episodes": 4000, "lead_share": 0.1})
    session, log = started(config)
    cost = 5.0
    while not the(log, ev.StageBegun):
        cost *= 1.0 - 2 * PAYS
        gaining = Outcome(kind=OutcomeKind.ARRIVED, time=cost)
        commit(session, log, session.record_all([Report(e.id, gaining, cost) for e in session.pending()]))
    [begun] = the(log, ev.StageBegun)
    assert "its share of the search is used up" in begun.reason
    search = 4000 * (1 - config.verdict_share)
    assert 0.1 * search <= session.state.stage.episodes_before < 0.1 * search + 24


def test_it_finds_a_better_set_and_proves_it() -> None:
    session, _ = whole(STAGED.model_copy(update={"episodes": 3000, "seed": 1}))
    assert session.champion.set_id == "challenger-1"
    initial = session.state.initial.parameters
    far = [((SPACE.to_unit(each) - BEST) ** 2).sum() for each in (session.champion.parameters, initial)]
    assert far[0] < 0.5 * far[1]


@pytest.mark.parametrize("episodes", [1, 7, 30, 50, 400, 1200])
def test_no_more_episodes_than_given_are_scored_whatever_time_they_take(episodes: int) -> None:
    session, log = whole(STAGED.model_copy(update={"episodes": episodes}))
    assert session.ended
    scored = len(the(log, ev.EpisodeScored))
    assert scored <= episodes
    assert session.plan.episodes_left == episodes - scored
    if session.state.ended == "floor time used up" or not session.champion.set_id.startswith("challenger"):
        assert scored >= episodes - 2 * STAGED.least_pairs


def test_cut_anywhere_it_goes_on_to_the_same_end() -> None:
    session, log = whole(STAGED)
    decided = [at for at, event in enumerate(log) if not isinstance(event, ev.EpisodeScored)]
    for cut in sorted({*decided[::6], *range(1, len(log), 211)} - {0}):
        again, new = replayed(log[:cut]), list(log[:cut])
        commit(again, new, again.advance())
        together(again, new)
        assert [e for e in new if not isinstance(e, ev.ReportIgnored)] == [
            e for e in log if not isinstance(e, ev.ReportIgnored)
        ], f"cut after event {cut}"
        assert again.state == session.state


def test_voiding_the_outcome_that_ended_a_grade_takes_the_search_back_into_it() -> None:
    session, log = started(STAGED)
    while not the(log, ev.StageBegun):
        episode = session.pending()[0]
        outcome = run(episode)
        commit(session, log, session.record(episode.id, outcome, outcome.time))
    commit(session, log, session.void())
    assert session.state.stage.grade == "easy"
    [again] = session.pending()
    commit(session, log, session.record(again.id, outcome, outcome.time))
    assert session.state.stage.grade == "fair"
    assert replayed(log).state == session.state
    assert replayed(log).prior() == session.prior()
    finish(session, log)
    assert session.ended


def test_a_curriculum_needs_names_and_limits() -> None:
    with pytest.raises(ValueError, match="time_limit"):
        Stage(grade="easy", time_limit=0.0)
    with pytest.raises(InputError, match="lead_in"):
        ev.parse_event('{"kind": "session_begun", "champion": {}, "config": {"floor_time_s": 1, "lead_in": [3]}}')


def test_a_record_from_before_there_were_stages_and_budgets_in_episodes_is_still_read() -> None:
    config = '{"seed":5,"floor_time_s":500.0,"grade":"moving","time_limit":10.0}'
    old = '{"kind":"session_begun","config":' + config + ',"champion":{}}'
    session = Session(draw)
    session.apply(ev.parse_event(old))
    assert session.state.stage.grade == "moving"
    assert session.state.stage.time_limit == 10.0
    assert session.config.episodes is None
    assert session.advance()
