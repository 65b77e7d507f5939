"""Recordings from before a session: what they change in it, and what they never do."""

from __future__ import annotations

import numpy as np
import pytest
from tuning.synthetic_floor import BEST, draw, finish, run, started

from fieldnav_ros.errors import InputError
from fieldnav_ros.model import Outcome, OutcomeKind
from fieldnav_ros.parameters import DEFAULTS, ParameterSet
from fieldnav_ros.tuning.cost import cost, cost_bound
from fieldnav_ros.tuning.events import About, Event, EvidenceImported, RecordedEpisode, SessionConfig
from fieldnav_ros.tuning.imported import BEST_SHARE, LEAST_BEST, LEAST_SETS, WIDTH, warm_start
from fieldnav_ros.tuning.session import Session
from fieldnav_ros.tuning.space import SPACE
from fieldnav_ros.tuning.verdict import Evidence

CONFIG = SessionConfig(seed=4, floor_time_s=900.0, grade="moving", time_limit=10.0)
ABOUT = About(model="foresight")


def evidence(
    parameters: ParameterSet, *times: float, grade: str = "moving", model: str = "foresight"
) -> EvidenceImported:
    return EvidenceImported(
        source="old.ledger", model=model, grade=grade, time_limit=10.0, set_id="s", parameters=parameters,
        episodes=tuple(
            RecordedEpisode(bag=f"{n}.a.1", outcome=Outcome(kind=OutcomeKind.ARRIVED, time=time), cost=time)
            for n, time in enumerate(times)
        ),
    )  # fmt: skip


def begun(*imported: EvidenceImported, config: SessionConfig = CONFIG) -> Session:
    session = Session(draw)
    session.apply(*imported)
    session.apply(*session.begin(config, about=ABOUT))
    return session


def recorded_floor(sets: int, seed: int, around: float = 0.15) -> list[EvidenceImported]:
    """Return recordings on the synthetic floor of sets scattered about its best."""
    rng = np.random.default_rng(seed)
    result = []
    for number in range(sets):
        parameters = SPACE.from_unit(np.clip(BEST + around * rng.standard_normal(9), 0.0, 1.0))
        episodes = []
        for episode in range(4):
            layout = draw("moving", 1000 * number + episode)
            pending = started(CONFIG)[0].pending()[0].model_copy(update={"parameters": parameters, "layout": layout})
            outcome = run(pending)
            value = cost(outcome, 10.0)
            assert value is not None
            episodes.append(RecordedEpisode(bag="b", outcome=outcome, cost=value))
        result.append(
            EvidenceImported(
                source="s", model="foresight", grade="moving", time_limit=10.0, set_id=f"s{number}",
                parameters=parameters, episodes=tuple(episodes),
            )
        )  # fmt: skip
    return result


def test_the_plan_expects_episodes_as_long_as_the_recorded_ones() -> None:
    assert begun().plan.mean_episode_s == CONFIG.episode_guess_s
    assert begun(evidence(DEFAULTS, 6.0, 8.0)).plan.mean_episode_s == pytest.approx(7.0)


def test_the_champions_recorded_cost_is_known_from_the_start() -> None:
    other = DEFAULTS.model_copy(update={"steer_gain": 7.0})
    session = begun(evidence(DEFAULTS, 6.0, 8.0), evidence(other, 1.0))
    assert session.summary()["champion_cost"] == pytest.approx(7.0)
    assert session.summary()["episodes_done"] == 0, "recorded episodes are none of this session"


@pytest.mark.parametrize(
    "foreign", [evidence(DEFAULTS, 6.0, grade="empty"), evidence(DEFAULTS, 6.0, model="published")]
)
def test_recordings_under_other_conditions_change_nothing(foreign: EvidenceImported) -> None:
    assert begun(foreign).state == begun().state


def test_evidence_comes_before_the_session() -> None:
    session = begun()
    with pytest.raises(InputError, match="must come before"):
        session.apply(evidence(DEFAULTS, 5.0))


def test_the_search_begins_at_the_promising_distribution() -> None:
    """Mean and covariance as Nomura et al. (AAAI 2021) give them, worked out here by loops over outer products."""
    items = recorded_floor(40, seed=2)
    prior = warm_start(items)
    assert prior is not None
    means = {item.set_id: sum(episode.cost for episode in item.episodes) / len(item.episodes) for item in items}
    count = max(LEAST_BEST, int(np.ceil(BEST_SHARE * len(items))))
    best = [SPACE.to_unit(item.parameters) for item in sorted(items, key=lambda item: means[item.set_id])[:count]]
    centre = sum(best) / count
    spread = sum(np.outer(point - centre, point - centre) for point in best) / count + WIDTH**2 * np.eye(9)
    np.testing.assert_allclose(prior.mean, centre)
    np.testing.assert_allclose(prior.covariance, spread)


def test_too_few_sets_place_no_search() -> None:
    assert warm_start(recorded_floor(LEAST_SETS - 1, seed=1)) is None
    few = begun(*recorded_floor(LEAST_SETS - 1, seed=1))
    assert first_candidates(few) == first_candidates(begun())


def first_candidates(session: Session) -> list[ParameterSet]:
    batch = session.state.batch
    assert batch is not None
    return [item.parameters for item in batch.opened.sets if item.role == "candidate"]


def test_a_search_with_recordings_starts_nearer_to_the_best() -> None:
    def distance(session: Session) -> float:
        return float(np.mean([np.linalg.norm(SPACE.to_unit(item) - BEST) for item in first_candidates(session)]))

    assert distance(begun(*recorded_floor(30, seed=3))) < 0.75 * distance(begun())


def test_no_recording_is_evidence_for_a_verdict() -> None:
    """The e-value after the first pair is that of one pair alone, whatever was recorded of the champion before."""
    log: list[Event] = []
    session = begun(*recorded_floor(30, seed=3), evidence(DEFAULTS, 1.0, 1.0, 1.0, 1.0))
    finish(session, log, at_most=260)
    named = next(event for event in log if event.kind == "challenger_named")
    first = next(event for event in log if event.kind == "pair_compared")
    alone = Evidence(cost_bound(10.0), named.alpha).after(first.difference)
    assert (first.pair, first.log_evidence) == (1, alone.log_e)


def test_a_session_with_recordings_is_the_same_when_it_is_folded_again() -> None:
    log: list[Event] = list(recorded_floor(30, seed=3))
    session = Session(draw)
    session.apply(*log)
    for events in [session.begin(CONFIG, about=ABOUT)]:
        log += events
        session.apply(*events)
    finish(session, log, at_most=60)
    again = Session(draw)
    again.apply(*log)
    assert again.state == session.state
    assert again.advance() == []
