"""Errors as a person at the terminal reads them: one line with name, value and bound."""

from __future__ import annotations

import pickle

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pydantic import BaseModel, ConfigDict, Field, ValidationError, field_validator

from fieldnav_ros.errors import FieldnavError, InputError, WorkError, clipped, shown

ANYTHING = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text() | st.binary(),
    lambda inner: st.lists(inner) | st.dictionaries(st.text(), inner) | st.tuples(inner, inner),
    max_leaves=30,
)


class Sample(BaseModel):
    model_config = ConfigDict(extra="forbid", allow_inf_nan=False)
    size: float = Field(default=1.0, gt=0, le=5)
    label: str = Field(default="a", min_length=1)
    pair: tuple[float, float] = (0.0, 1.0)
    even: int = 2

    @field_validator("even")
    @classmethod
    def _even(cls, value: int) -> int:
        if value % 2:
            raise ValueError(f"{value} must be even")
        return value


def refusal(content: object) -> str:
    with pytest.raises(ValidationError) as caught:
        Sample.model_validate(content)
    return str(InputError.from_validation(caught.value, "a.yaml"))


def test_exit_codes_are_those_of_the_command_line() -> None:
    """1 the work failed, 2 bad input: DESIGN's contract for scripts, after the shell's common practice."""
    assert (WorkError("x").exit_code, InputError("x").exit_code, FieldnavError("x").exit_code) == (1, 2, 1)
    assert issubclass(InputError, FieldnavError)
    assert issubclass(WorkError, FieldnavError)


@settings(deadline=None, max_examples=100)
@given(value=ANYTHING)
def test_sentence_has_name_value_and_bound_on_one_short_line(value: object) -> None:
    text = str(InputError.of("robot.radius", value, "> 0 m"))
    assert text.startswith("robot.radius is ")
    assert text.endswith(", must be > 0 m")
    assert len(text.splitlines()) == 1
    assert len(text) < 400
    assert text.isprintable()


@settings(deadline=None, max_examples=100)
@given(sentence=st.text())
def test_no_error_breaks_the_line_or_reaches_the_terminal_with_control_characters(sentence: str) -> None:
    text = str(WorkError(sentence))
    assert text.isprintable()
    assert len(text) == len(sentence)


@pytest.mark.parametrize(
    ("value", "expected"),
    [
        (-1, "-1"),
        (0.25, "0.25"),
        ("abc", "'abc'"),
        (True, "True"),
        ("x" * 61, repr("x" * 60) + "..."),
        ("x" * 60, repr("x" * 60)),
        (b"x" * 10**7, repr(b"x" * 60) + "..."),
        ([16**5000], "[an integer of 20001 bits]"),
    ],
)
def test_shown_is_the_value_itself_up_to_a_bound(value: object, expected: str) -> None:
    assert shown(value) == expected


def test_shown_takes_bounded_effort_on_shared_nesting() -> None:
    """Lists of lists of the same list, 2^200 entries written out: repr would never end."""
    nest: list[object] = []
    for _ in range(200):
        nest = [nest, nest]
    assert len(shown(nest)) < 80


def test_array_in_a_sentence_stays_on_one_line() -> None:
    assert str(InputError.of("points", np.zeros((3, 3)), "one row")).isprintable()


def test_clipped_leaves_short_names_alone() -> None:
    assert clipped("a" * 60) == "a" * 60
    assert clipped("a" * 61) == "a" * 60 + "..."


@pytest.mark.parametrize(
    ("content", "expected"),
    [
        ({"size": -1}, "a.yaml: size is -1, must be greater than 0"),
        ({"size": 6}, "a.yaml: size is 6, must be less than or equal to 5"),
        ({"size": "x"}, "a.yaml: size is 'x', must be a valid number, unable to parse string as a number"),
        ({"size": float("nan")}, "a.yaml: size is nan, must be a finite number"),
        ({"label": ""}, "a.yaml: label is '', must have at least 1 character"),
        ({"pair": [1]}, "a.yaml: pair.1 is missing"),
        ({"speed": 1}, "a.yaml: speed is not a known key"),
        ({"even": 3}, "a.yaml: even: 3 must be even"),
        ({1: 2}, "a.yaml: 1 is not a known key"),
        (5, "a.yaml: value is 5, must be a valid dictionary or instance of Sample"),
        ({"size": -1, "even": 3}, "a.yaml: size is -1, must be greater than 0 (and 1 more)"),
    ],
)
def test_validation_error_becomes_one_plain_sentence(content: object, expected: str) -> None:
    assert refusal(content) == expected


def test_long_key_with_line_breaks_stays_a_sentence() -> None:
    text = refusal({"no\nsuch\x1b[31m" * 10000: 1})
    assert text.isprintable()
    assert len(text) < 200


def test_errors_survive_the_way_between_processes() -> None:
    back = pickle.loads(pickle.dumps(InputError.of("a", 1, "2")))
    assert str(back) == "a is 1, must be 2"
    assert back.exit_code == 2
