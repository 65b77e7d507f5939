"""Settings of the nodes: shipped files agree with the tables, wrong values are one sentence and exit code 2."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest
import yaml

pytest.importorskip("rclpy", reason="starts real nodes")

from fieldnav_ros.errors import InputError
from fieldnav_ros.nodes import guidance_settings, judge_node, simulator_node, tuner_node
from fieldnav_ros.nodes.declare import Setting, tunable_settings
from fieldnav_ros.parameters import TABLE

pytestmark = pytest.mark.ros
TABLES: dict[str, tuple[Setting, ...]] = {
    "guidance": guidance_settings.SETTINGS,
    "simulator": simulator_node.SETTINGS,
    "judge": judge_node.SETTINGS,
    "tuner": tuner_node.SETTINGS,
}


def flat(tree: dict[str, Any], prefix: str = "") -> dict[str, Any]:
    values: dict[str, Any] = {}
    for key, value in tree.items():
        values.update(flat(value, f"{prefix}{key}.") if isinstance(value, dict) else {f"{prefix}{key}": value})
    return values


@pytest.mark.parametrize("name", TABLES)
def test_shipped_file_names_every_parameter_with_its_default(name: str, root: Path) -> None:
    content = yaml.safe_load((root / "config" / f"{name}.yaml").read_text(encoding="utf-8"))
    given = flat(content[f"/**/{name}_node"]["ros__parameters"])
    assert given == {setting.name: setting.default for setting in TABLES[name]}


@pytest.mark.parametrize("name", TABLES)
def test_every_key_of_a_shipped_file_carries_a_comment_with_its_default(name: str, root: Path) -> None:
    lines = (root / "config" / f"{name}.yaml").read_text(encoding="utf-8").splitlines()
    for number, line in enumerate(lines):
        if line.startswith("    ") and ": " in line and not line.lstrip().startswith("#"):
            comment = line + (lines[number + 1] if "#" in line and "default" not in line else "")
            assert "#" in line, line
            assert "default" in comment or line.strip().split(":")[0] in ("robot", "arrival"), line


def test_tunable_settings_are_the_table() -> None:
    for setting, row in zip(tunable_settings(), TABLE):
        described = setting.descriptor()
        bounds = described.floating_point_range[0]
        assert (setting.name, setting.default) == (row.ros_name, row.default)
        assert (bounds.from_value, bounds.to_value, described.read_only) == (row.low, row.high, False)
        assert row.meaning in described.description
        assert row.unit in described.description


@pytest.mark.parametrize(
    ("setting", "value"),
    [
        (Setting("a", 1.0, "", 0.0, 2.0), 2.1),
        (Setting("a", 1.0, "", 0.0, 2.0), float("nan")),
        (Setting("a", 1.0, "", 0.0, 2.0), "1.0"),
        (Setting("a", 1.0, "", 0.0, 2.0), True),
        (Setting("a", True, ""), 1),
        (Setting("a", 1, "", 0, 2), 3),
        (Setting("a", 1, "", 0, 2), 1.5),
        (Setting("a", 1, "", 0, 2), True),
        (Setting("a", "x", "", choices=("x", "y")), "z"),
        (Setting("a", [""], ""), "x"),
    ],
)
def test_values_of_the_wrong_kind_or_out_of_bounds_are_refused(setting: Setting, value: object) -> None:
    with pytest.raises(InputError, match=r"^a is "):
        setting.check(value)


BAD = [
    ("guidance_node", ["-p", "pose_timout:=0.2"], "pose_timout"),
    ("guidance_node", ["-p", "pose_timeout:=5.0"], "pose_timeout is 5.0"),
    ("guidance_node", ["-p", "field.turn_radius:=.nan"], "field.turn_radius is nan"),
    ("guidance_node", ["-p", "field.model:=magic"], "field.model is 'magic'"),
    ("guidance_node", ["-p", "yard:=missing.yaml"], "missing.yaml"),
    ("guidance_node", ["--params-file", "missing.yaml"], "missing.yaml"),
    ("simulator_node", ["-p", "mode:=fast"], "mode is 'fast'"),
    ("simulator_node", ["-p", "stamped_cmd:=false"], "stamped_cmd"),
    ("judge_node", ["-p", "reliable:=3"], "reliable is 3"),
    ("tuner_node", ["-p", "seed:=1.5"], "seed is 1.5, must be a whole number"),
    ("tuner_node", ["-p", "grade:=wild", "-p", "floor_time:=12"], "grade in yard 'parcel yard' is 'wild'"),
    ("tuner_node", ["-p", "initial:=missing.yaml"], "missing.yaml"),
]


@pytest.mark.parametrize(("node", "words", "names"), BAD, ids=[f"{node}-{words[-1]}" for node, words, _ in BAD])
def test_bad_parameters_are_one_sentence_and_exit_code_2(node: str, words: list[str], names: str) -> None:
    done = subprocess.run(
        [sys.executable, "-m", f"fieldnav_ros.nodes.{node}", "--ros-args", *words],
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )
    ours = [line for line in done.stderr.splitlines() if line.startswith(f"{node}: ")]
    assert done.returncode == 2
    assert len(ours) == 1
    assert names in ours[0]
    assert "Traceback" not in done.stderr
