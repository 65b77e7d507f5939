"""Parameter files: what is written is read back, and whatever is wrong with one is said in a sentence."""

from __future__ import annotations

import os
from pathlib import Path

import pytest
import yaml
from hypothesis import given
from hypothesis import strategies as st

from fieldnav_ros.errors import InputError, WorkError
from fieldnav_ros.parameters import DEFAULTS, TABLE, ParameterSet
from fieldnav_ros.params_file import parameters_text, read_parameters, write_parameters
from fieldnav_ros.resources import config_path

sets = st.tuples(*(st.floats(row.low, row.high) for row in TABLE)).map(ParameterSet.from_array)


@given(sets)
def test_text_holds_each_number_to_the_last_bit(parameters: ParameterSet) -> None:
    tree = yaml.safe_load(parameters_text(parameters, "about", "published"))["/**"]["ros__parameters"]
    for row in TABLE:
        assert tree[row.group][row.name] == getattr(parameters, row.name)
        assert isinstance(tree[row.group][row.name], float)  # ROS takes no integer for a double


def test_file_is_read_back_and_leaves_nothing_else_behind(tmp_path: Path) -> None:
    path = tmp_path / "champion.yaml"
    for radius in (0.05, 0.06):
        wanted = DEFAULTS.model_copy(update={"turn_radius": radius})
        write_parameters(path, wanted, "first line\nsecond line", "published")
        assert read_parameters(path) == wanted
    assert os.listdir(tmp_path) == ["champion.yaml"]
    assert path.read_text().startswith("# first line\n# second line\n")


def test_names_may_be_dotted_and_files_of_other_nodes_are_no_fault(tmp_path: Path) -> None:
    path = tmp_path / "set.yaml"
    path.write_text("robot_3/guidance_node:\n  ros__parameters:\n    field.turn_radius: 0.07\n    frame: odom\n")
    assert read_parameters(path).turn_radius == 0.07


def test_file_that_comes_with_the_package_holds_the_defaults() -> None:
    assert read_parameters(config_path("guidance.yaml")) == DEFAULTS


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("", "must hold node names"),
        ("- 1", "must hold node names"),
        ("a: 1", "'a' has no ros__parameters"),
        ("a: {ros__parameters: 1}", "'a' has no ros__parameters"),
        ("a: {ros__parameters: {field: {turn_radios: 0.1}}}", "field.turn_radios is not a known parameter"),
        ("a: {ros__parameters: {field: {turn_radius: .nan}}}", "field.turn_radius is nan, must be a number from 0.03"),
        ("a: {ros__parameters: {field.turn_radius: 7}}", "field.turn_radius is 7, must be a number from 0.03 to 0.4 m"),
        ("a: {ros__parameters: {drive: {steer_gain: fast}}}", "drive.steer_gain is 'fast', must be a number"),
        ("a: {ros__parameters: {7: 1}}", "7 is not a parameter name"),
        ("a: [", "not readable as YAML"),
    ],
)
def test_what_is_wrong_with_a_file_is_said_in_one_sentence(tmp_path: Path, text: str, said: str) -> None:
    path = tmp_path / "set.yaml"
    path.write_text(text)
    with pytest.raises(InputError) as caught:
        read_parameters(path)
    assert said in str(caught.value)
    assert str(path) in str(caught.value)
    assert "\n" not in str(caught.value)


def test_missing_file_and_unwritable_place_are_told(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="No such file"):
        read_parameters(tmp_path / "none.yaml")
    (tmp_path / "file").write_text("")
    with pytest.raises(WorkError, match="cannot be written"):
        write_parameters(tmp_path / "file" / "set.yaml", DEFAULTS, "about", "published")
