from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import yaml
from hypothesis import given
from hypothesis import strategies as st

from fieldnav_ros.errors import InputError
from fieldnav_ros.parameters import DEFAULTS, TABLE
from fieldnav_ros.tuning.prior_file import load_prior
from fieldnav_ros.tuning.space import SPACE, Prior, Space, dump_prior

SIZE = len(TABLE)
points = st.lists(st.floats(0, 1), min_size=SIZE, max_size=SIZE)


def a_prior() -> Prior:
    factor = np.random.default_rng(3).normal(size=(SIZE, SIZE)) * 0.1
    return Prior.of(np.full(SIZE, 0.4), factor @ factor.T + 1e-3 * np.eye(SIZE), "a test", 12)


def test_the_space_is_the_parameter_table() -> None:
    assert SPACE.names == tuple(row.ros_name for row in TABLE)
    assert [(axis.low, axis.high, axis.scale) for axis in SPACE.axes] == [(r.low, r.high, r.scale) for r in TABLE]
    assert Space.model_validate_json(SPACE.model_dump_json()) == SPACE


@given(points)
def test_there_and_back_gives_the_same_point(point: list[float]) -> None:
    assert SPACE.to_unit(SPACE.from_unit(point)) == pytest.approx(point, abs=1e-9)


def test_the_middle_is_the_geometric_mean_on_log_scales_and_the_arithmetic_one_on_linear_scales() -> None:
    # definition of the two scales
    for row, value in zip(TABLE, SPACE.from_unit([0.5] * SIZE).to_array()):
        middle = math.sqrt(row.low * row.high) if row.scale == "log" else (row.low + row.high) / 2
        assert value == pytest.approx(middle)


@given(st.lists(st.floats(-10, 10), min_size=SIZE, max_size=SIZE))
def test_points_outside_are_taken_to_the_bound(point: list[float]) -> None:
    assert SPACE.from_unit(point) == SPACE.from_unit(np.clip(point, 0, 1))


@pytest.mark.parametrize("point", [[0.5] * (SIZE - 1), [math.nan] * SIZE, [math.inf] + [0.5] * (SIZE - 1)])
def test_what_is_no_point_is_refused(point: list[float]) -> None:
    with pytest.raises(InputError, match="point of the search space"):
        SPACE.from_unit(point)


def test_a_prior_survives_its_file(tmp_path: Path) -> None:
    prior = a_prior()
    file = tmp_path / "prior.yaml"
    file.write_text(dump_prior(prior), encoding="utf-8")
    assert load_prior(file) == prior
    assert prior.parameters() == SPACE.from_unit([0.4] * SIZE)


def set_at(content: dict[str, Any], path: tuple[Any, ...], value: Any) -> dict[str, Any]:
    item: Any = content
    for key in path[:-1]:
        item = item[key]
    item[path[-1]] = value
    return content


@pytest.mark.parametrize(
    ("path", "value", "says"),
    [
        (("mean", 0), math.nan, "mean.0 is nan"),
        (("mean", 2), 1.5, "mean.2 is 1.5"),
        (("mean",), [0.5] * 8, "mean has 8 values, must have 9"),
        (("mean",), "x", "mean is 'x'"),
        (("covariance", 0, 0), math.inf, "covariance.0.0 is inf"),
        (("covariance", 0, 1), 0.9, "covariance must be symmetric"),
        (("covariance", 0, 0), -1.0, "must be positive definite"),
        (("covariance",), [[0.0] * 9] * 9, "must be positive definite"),
        (("covariance",), [[1.0] * 9] * 9, "must be positive definite"),
        (("covariance",), [[1.0]], "covariance must have 9 rows of 9 values"),
        (("covariance",), None, "covariance is None"),
        (("space", "axes", 0, "name"), "field.other", "field.other"),
        (("space", "axes", 3, "high"), 9.0, "field.guard_distance runs from 0.08 to 9"),
        (("space", "axes", 3, "scale"), "cubic", "scale is 'cubic'"),
        (("extra",), 1, "extra is not a known key"),
        (("episodes",), -1, "episodes is -1"),
    ],
)
def test_a_bad_prior_is_refused_in_one_sentence(path: tuple[Any, ...], value: Any, says: str) -> None:
    content = set_at(yaml.safe_load(dump_prior(a_prior())), path, value)
    with pytest.raises(InputError) as caught:
        Prior.parse(content, "prior.yaml")
    assert str(caught.value).startswith("prior.yaml: ")
    assert says in str(caught.value)
    assert "\n" not in str(caught.value)


json_like = st.recursive(
    st.none() | st.booleans() | st.floats() | st.integers() | st.text(max_size=5),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=5), inner, max_size=4),
    max_leaves=8,
)


@given(json_like, st.sampled_from(["mean", "covariance", "space", "learnt_from", "episodes", "all"]))
def test_whatever_a_file_holds_ends_in_a_prior_or_in_one_sentence(value: Any, key: str) -> None:
    content = value if key == "all" else {**a_prior().content(), key: value}
    try:
        prior = Prior.parse(content)
    except InputError as error:
        assert "\n" not in str(error)
    else:
        assert np.linalg.eigvalsh(np.array(prior.covariance)).min() > 0


def test_the_default_set_lies_inside_the_cube() -> None:
    point = SPACE.to_unit(DEFAULTS)
    assert ((point > 0) & (point < 1)).all()
