from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st
from tuning.synthetic_floor import finish, started

from fieldnav_ros.errors import InputError
from fieldnav_ros.model import Outcome, OutcomeKind
from fieldnav_ros.tuning.events import (
    EpisodeScored,
    GenerationClosed,
    NamedSet,
    SessionConfig,
    dump_event,
    event_schema,
    parse_event,
)
from fieldnav_ros.tuning.space import SPACE

floats = st.floats(0, 1e9)


@given(floats, st.lists(st.floats(allow_nan=False, allow_infinity=False), max_size=5), floats)
def test_events_come_back_from_json_to_the_last_bit(time: float, costs: list[float], floor: float) -> None:
    scored = EpisodeScored(
        episode_id=3, outcome=Outcome(kind=OutcomeKind.ARRIVED, time=time), cost=time, floor_time_s=floor
    )
    closed = GenerationClosed(batch=1, blocks=1, costs=tuple(costs))
    assert parse_event(dump_event(scored)) == scored
    assert parse_event(dump_event(closed)) == closed


@given(st.lists(st.floats(0, 1), min_size=9, max_size=9))
def test_parameter_sets_come_back_from_json_to_the_last_bit(point: list[float]) -> None:
    named = NamedSet(id="a", role="candidate", parameters=SPACE.from_unit(point), unit=tuple(point))
    assert NamedSet.model_validate_json(named.model_dump_json()) == named


def test_every_event_of_a_session_comes_back_from_json() -> None:
    session, log = started(SessionConfig(seed=2, floor_time_s=900.0))
    finish(session, log)
    assert [parse_event(dump_event(event)) for event in log] == log
    assert {"session_begun", "batch_opened", "verdict_reached", "session_ended"} <= {event.kind for event in log}


@pytest.mark.parametrize(
    ("payload", "says"),
    [
        ("", "JSON"),
        ("{", "JSON"),
        ("[]", ""),
        ('{"kind": "unheard_of"}', "unheard_of"),
        ('{"kind": "paused", "extra": 1}', "extra is not a known key"),
        ('{"kind": "episode_scored", "episode_id": 1}', "outcome is missing"),
        ('{"kind": "generation_closed", "batch": 1, "blocks": 1, "costs": [NaN]}', "nan"),
    ],
)
def test_what_is_no_event_is_refused_in_one_sentence(payload: str, says: str) -> None:
    with pytest.raises(InputError) as caught:
        parse_event(payload, "event 4")
    assert str(caught.value).startswith("event 4: ")
    assert says in str(caught.value)
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize(
    ("key", "value"),
    [("floor_time_s", 0), ("alpha", 1), ("population", 3), ("layouts", 0), ("verdict_share", 1.0), ("seed", -1)],
)
def test_a_configuration_out_of_bounds_is_refused(key: str, value: float) -> None:
    with pytest.raises(ValueError, match=key):
        SessionConfig.model_validate({"floor_time_s": 600.0, key: value})


def test_the_schema_names_every_kind_of_event() -> None:
    assert len(event_schema()["discriminator"]["mapping"]) == 19
