"""The nouns of the job: what they take, what they refuse, and that they stay as they were made."""

from __future__ import annotations

from typing import Any

import pytest
from pydantic import ValidationError

from fieldnav_ros.model import KINDS, Frozen, Layout, Obstacle, Outcome, OutcomeKind, Pose, Robot

POSE = {"x": 1.0, "y": 2.0, "yaw": 0.5}
DISC = {"x": 1.0, "y": 2.0, "vx": 0.1, "vy": -0.1, "radius": 0.06}
ROBOT = {"radius": 0.06, "track": 0.1, "wheel_speed": 1.2, "wheel_accel": 4.0}
OUTCOME = {"kind": "arrived", "time": 2.0, "clearance": 0.1}
NOUNS: list[tuple[type[Frozen], dict[str, Any]]] = [
    (Pose, POSE), (Obstacle, DISC), (Robot, ROBOT), (Outcome, OUTCOME)
]  # fmt: skip
NUMBERS = [(noun, good, key) for noun, good in NOUNS for key in good if key != "kind"]


@pytest.mark.parametrize(("noun", "good", "key"), NUMBERS)
@pytest.mark.parametrize("bad", [float("nan"), float("inf"), -float("inf"), True, "1.0", [1.0], 10**400])
def test_each_number_is_a_finite_number_and_nothing_else(
    noun: type[Frozen], good: dict[str, Any], key: str, bad: object
) -> None:
    noun.model_validate(good)
    with pytest.raises(ValidationError) as caught:
        noun.model_validate({**good, key: bad})
    assert caught.value.errors()[0]["loc"] == (key,)


@pytest.mark.parametrize(("noun", "good"), NOUNS)
def test_nouns_are_frozen_and_know_their_keys(noun: type[Frozen], good: dict[str, Any]) -> None:
    made = noun.model_validate(good)
    with pytest.raises(ValidationError, match="frozen"):
        setattr(made, next(iter(good)), 1.0)
    with pytest.raises(ValidationError, match="theta"):
        noun.model_validate({**good, "theta": 1.0})


@pytest.mark.parametrize(("noun", "good", "key"), [row for row in NUMBERS if row[0] is Robot or row[2] == "radius"])
@pytest.mark.parametrize("bad", [0.0, -0.1])
def test_sizes_and_limits_are_positive(noun: type[Frozen], good: dict[str, Any], key: str, bad: float) -> None:
    with pytest.raises(ValidationError, match="greater than 0"):
        noun.model_validate({**good, key: bad})


@pytest.mark.parametrize(
    ("noun", "content"),
    [
        (Outcome, {**OUTCOME, "time": -0.01}),
        (Outcome, {**OUTCOME, "kind": "won"}),
        (Layout, {"start": POSE, "goal": POSE, "seed": -1}),
        (Layout, {"start": POSE}),
        (Layout, {"start": POSE, "goal": POSE, "obstacles": [POSE]}),
    ],
)
def test_refused(noun: type[Frozen], content: dict[str, Any]) -> None:
    with pytest.raises(ValidationError):
        noun.model_validate(content)


def test_layout_comes_back_from_json_as_it_went() -> None:
    layout = Layout(start=Pose(**POSE), goal=Pose(x=0.1, y=1 / 3, yaw=-3.0), obstacles=(Obstacle(**DISC),), seed=7)
    assert Layout.model_validate_json(layout.model_dump_json()) == layout


def test_outcomes_are_the_five_of_the_contract_and_their_codes_are_their_places() -> None:
    """Ledgers and batched arrays hold these words and codes: they must never move."""
    assert [(kind.value, kind.code) for kind in OutcomeKind] == [
        ("arrived", 0), ("timeout", 1), ("contact", 2), ("off_floor", 3), ("void", 4)
    ]  # fmt: skip
    assert tuple(KINDS[kind.code] for kind in OutcomeKind) == tuple(OutcomeKind)
