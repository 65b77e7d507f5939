"""Payloads: round trips, their JSON Schemas (checked by the library jsonschema), and refusal of everything else."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st
from jsonschema import Draft202012Validator, ValidationError

from fieldnav_ros.errors import InputError
from fieldnav_ros.model import Layout, Obstacle, OutcomeKind, Pose
from fieldnav_ros.nodes import payloads
from fieldnav_ros.nodes.payloads import (
    DriveTo,
    EpisodeOutcome,
    ObserveEpisode,
    PastEpisode,
    RunEpisode,
    StopEpisode,
    TunerStatus,
)

names = st.from_regex(r"\A[A-Za-z0-9][A-Za-z0-9._-]{0,79}\Z")
metres = st.floats(-1e4, 1e4)
poses = st.builds(Pose, x=metres, y=metres, yaw=metres)
obstacles = st.builds(
    Obstacle, x=metres, y=metres, vx=st.floats(-100, 100), vy=st.floats(-100, 100), radius=st.floats(0.01, 5.0)
)
layouts = st.builds(Layout, start=poses, goal=poses, obstacles=st.lists(obstacles, max_size=5).map(tuple))
runs = st.builds(
    RunEpisode,
    episode=names,
    set=names,
    layout=layouts,
    frame=st.text(min_size=1, max_size=80),
    time_limit=st.floats(0.1, 600.0),
    grade=st.text(max_size=80),
)
observations = st.builds(
    ObserveEpisode, episode=names, set=names, layout=layouts, frame=st.just("map"), time_limit=st.floats(0.1, 600.0),
    outcomes=st.sampled_from(["judge", "referee", "operator"]) | st.none(),
)  # fmt: skip
drives = st.builds(DriveTo, episode=names, goal=poses, frame=st.just("map"), time_limit=st.floats(0.1, 600.0))
stops = st.builds(StopEpisode, episode=names)
outcomes = st.builds(
    EpisodeOutcome,
    episode=names,
    kind=st.sampled_from(OutcomeKind),
    time=st.floats(0.0, 1e6),
    clearance=st.none() | st.floats(allow_nan=False, allow_infinity=False),
    stamp=st.floats(-1e9, 1e10),
    source=st.sampled_from(["judge", "referee", "operator"]),
    detail=st.text(max_size=1000),
)
statuses = st.builds(
    TunerStatus,
    state=st.text(min_size=1, max_size=40),
    phase=st.text(max_size=40),
    episodes_done=st.integers(0, 10**9),
    episodes_left=st.integers(0, 10**9),
    floor_time_left=st.floats(-1e6, 1e6),
    champion=names,
    warnings=st.lists(st.text(max_size=100), max_size=20).map(tuple),
    in_service=st.none() | names,
    pose_age=st.none() | st.floats(0.0, 1e6),
    last=st.lists(
        st.builds(
            PastEpisode, episode=st.integers(0, 10**6), kind=st.sampled_from(OutcomeKind), time=st.floats(0.0, 1e6),
            source=st.text(max_size=100),
        ),
        max_size=10,
    ).map(tuple),
)
KINDS: list[tuple[str, Any, Any]] = [
    ("episode_request", runs | observations | drives | stops, payloads.decode_request),
    ("episode_outcome", outcomes, payloads.decode_outcome),
    ("tuner_status", statuses, payloads.decode_status),
]
RUN = RunEpisode(
    episode="e1",
    set="s1",
    layout=Layout(start=Pose(x=0, y=0, yaw=0), goal=Pose(x=1, y=0, yaw=0)),
    frame="map",
    time_limit=5.0,
)


@pytest.mark.parametrize(("name", "values", "decode"), KINDS, ids=[kind[0] for kind in KINDS])
def test_whatever_is_sent_fits_its_schema_and_comes_back_the_same(
    name: str, values: st.SearchStrategy[Any], decode: Any
) -> None:
    validator = Draft202012Validator(payloads.schemas()[name])

    @given(values)
    def check(payload: Any) -> None:
        text = payloads.encode(payload)
        validator.validate(json.loads(text))
        assert decode(text) == payload

    check()


@pytest.mark.parametrize("name", [kind[0] for kind in KINDS])
def test_schema_files_are_those_of_the_models(name: str, root: Path) -> None:
    """``python -m fieldnav_ros.nodes.payloads config/schema`` brings them up to date."""
    stored = json.loads((root / "config" / "schema" / f"{name}.json").read_text(encoding="utf-8"))
    Draft202012Validator.check_schema(stored)
    assert _bare(stored) == _bare(payloads.schemas()[name])


def _bare(schema: Any) -> Any:
    """Leave out the texts, so that a better docstring breaks nothing."""
    if isinstance(schema, dict):
        return {key: _bare(value) for key, value in schema.items() if key not in ("description", "title")}
    return [_bare(value) for value in schema] if isinstance(schema, (list, tuple)) else schema


GOOD = json.loads(payloads.encode(RUN))
WRONG: list[tuple[str, dict[str, Any]]] = [
    ("unknown key", {**GOOD, "colour": 1}),
    ("other version", {**GOOD, "schema": 2}),
    ("no action", {key: value for key, value in GOOD.items() if key != "action"}),
    ("other action", {**GOOD, "action": "jump"}),
    ("number as text", {**GOOD, "time_limit": "5"}),
    ("no time", {**GOOD, "time_limit": 0}),
    ("too much time", {**GOOD, "time_limit": 601}),
    ("a path as name", {**GOOD, "episode": "../../x"}),
    ("no name", {**GOOD, "episode": ""}),
    ("no layout", {**GOOD, "layout": None}),
    ("a drive to nowhere", {"action": "drive", "episode": "e", "frame": "map", "time_limit": 5}),
    ("outcomes of nobody", {**GOOD, "outcomes": "audience"}),
    ("a stop with a layout", {"action": "stop", "episode": "e", "layout": GOOD["layout"]}),
]


@pytest.mark.parametrize("wrong", [case[1] for case in WRONG], ids=[case[0] for case in WRONG])
def test_wrong_content_is_refused_by_model_and_schema_alike(wrong: dict[str, Any]) -> None:
    with pytest.raises(InputError):
        payloads.decode_request(json.dumps(wrong))
    with pytest.raises(ValidationError):
        Draft202012Validator(payloads.schemas()["episode_request"]).validate(wrong)


@pytest.mark.parametrize("number", ["NaN", "Infinity", "-Infinity", "1e400", "1e300"])
def test_numbers_that_are_none_or_beyond_reason_are_refused(number: str) -> None:
    text = payloads.encode(RUN).replace('"x":1.0', f'"x":{number}')
    assert number in text
    with pytest.raises(InputError, match="x"):
        payloads.decode_request(text)


@given(st.text(max_size=300) | st.recursive(st.none() | st.integers(), st.lists, max_leaves=20).map(json.dumps))
def test_any_other_text_is_one_sentence(text: str) -> None:
    for _, _, decode in KINDS:
        with pytest.raises(InputError) as caught:
            decode(text)
        assert "\n" not in str(caught.value)
        assert len(str(caught.value)) < 300


def test_a_drive_out_of_this_world_is_refused() -> None:
    goal = Pose(x=2e4, y=0, yaw=0)
    with pytest.raises(ValueError, match=r"goal\.x is 20000"):
        DriveTo(episode="e", goal=goal, frame="map", time_limit=5.0)


@pytest.mark.parametrize("text", ["x" * 70_000, "é" * 40_000, "[" * 60_000, '{"a":' * 12_000, "\udc80"])
def test_size_depth_and_broken_unicode_are_refused(text: str) -> None:
    with pytest.raises(InputError):
        payloads.decode_request(text)


@pytest.mark.parametrize(
    ("wanted", "episode", "source", "ends"),
    [
        (None, "e1", "judge", True),
        (None, "e2", "judge", False),
        ("operator", "e1", "operator", True),
        ("operator", "e1", "judge", False),
        ("referee", "e1", "operator", False),
    ],
)
def test_an_episode_ends_by_the_report_of_whom_its_request_names(
    wanted: Any, episode: str, source: Any, ends: bool
) -> None:
    request = RUN.model_copy(update={"outcomes": wanted})
    outcome = EpisodeOutcome(episode=episode, kind=OutcomeKind.ARRIVED, time=1.0, stamp=0.0, source=source)
    assert request.ended_by(outcome) is ends
