"""From events to facts: what a void takes back is gone, and sums agree with the session's own."""

from __future__ import annotations

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from report.conftest import Zoo
from report.ledgers import ZOO, begun, drive, keep, made_up, small

from fieldnav_ros.errors import InputError
from fieldnav_ros.model import Outcome, OutcomeKind
from fieldnav_ros.report.gather import facts
from fieldnav_ros.tuning.events import Event, Noted
from fieldnav_ros.tuning.session import Session

STEPS = st.lists(
    st.sampled_from(["run", "run", "run", "void last", "void open", "judge void", "spend", "pause", "report again"]),
    max_size=60,
)


@settings(max_examples=25, deadline=None)
@given(steps=STEPS, seed=st.integers(0, 1000))
def test_facts_agree_with_the_session_after_any_course_of_things(steps: list[str], seed: int) -> None:
    """Episodes, floor time, champion, open episodes and live decisions, against the session's fold."""
    session, log = begun(small(seed=seed, minutes=4.0, least_pairs=2, layouts=1))
    runner = made_up(failing=0.2, gain=2.0)
    for step in steps:
        apply(session, log, step, runner)
    found, state = facts(log), session.state
    assert found.after is not None
    assert found.after.id == session.champion.set_id
    assert found.spending.total == pytest.approx(state.floor_used_s)
    assert len(found.generations) >= len(state.generations)
    assert sum(bool(item.costs) for item in found.generations) == len(state.generations)
    assert sum(item.verdict is not None for item in found.rounds) == state.rounds
    assert found.ended == state.ended
    waiting = 0 if session.ended else len(resumed(session).pending())
    assert found.open_episodes == waiting


def resumed(session: Session) -> Session:
    copy = Session()
    copy.state = session.state
    copy.apply(*session.resume())
    return copy


def apply(session: Session, log: list[Event], step: str, runner: object) -> None:
    if session.ended:
        return
    pending = session.pending()
    if step == "run":
        drive(session, log, runner, at_most=1)  # type: ignore[arg-type]  # a Runner
    elif step == "void last" and session.state.last_scored is not None:
        keep(session, log, session.void())
    elif step == "void open" and pending:
        keep(session, log, session.void(pending[0].id))
    elif step == "judge void" and pending:
        keep(session, log, session.record(pending[0].id, Outcome(kind=OutcomeKind.VOID, time=1.0), 3.0))
    elif step == "spend":
        keep(session, log, session.spend(2.0, "tape"))
    elif step == "pause":
        keep(session, log, session.resume() or session.pause())
    elif step == "report again":
        keep(session, log, session.record(1, Outcome(kind=OutcomeKind.CONTACT, time=1.0), 3.0))


def test_a_verdict_that_a_void_took_back_is_not_told() -> None:
    """The last outcome brought the verdict; voided, the champion is the old one again and the round is open."""
    session, log = begun(small(seed=2, minutes=30.0))
    runner = made_up(failing=0.0, gain=3.5)
    while not any(event.kind == "verdict_reached" for event in log):
        drive(session, log, runner, at_most=1)
    assert facts(log).rounds[0].accepted
    keep(session, log, session.void())
    found = facts(log)
    assert found.taken_back >= 2
    assert found.rounds[0].verdict is None
    assert found.after is not None
    assert found.after.id == "initial"
    assert not found.changed


@pytest.mark.parametrize("name", sorted(ZOO))
def test_any_part_of_a_ledger_has_its_facts(zoo: Zoo, name: str) -> None:
    """A session may be cut off after any event."""
    log = ZOO[name]() if name not in ("by_simulation", "curriculum") else []
    for end in range(0, len(log), max(len(log) // 20, 1)):
        found = facts(log[:end])
        assert len(found.episodes) == sum(event.kind == "episode_scored" for event in log[:end]) - sum(
            item.earlier is not None for item in found.voids
        )


def test_events_that_cannot_follow_are_refused_in_one_sentence() -> None:
    with pytest.raises(InputError, match="session_begun"):
        facts([Noted(source="x", text="first")])
    log = begun(small())[1]
    opened = log[-1]
    broken = opened.model_copy(update={"runs": tuple(r.model_copy(update={"set_index": 99}) for r in opened.runs)})  # type: ignore[union-attr]  # a BatchOpened
    with pytest.raises(InputError, match="does not hold"):
        facts([*log[:-1], broken])
