"""Launch files name only executables, files, arguments and parameters that exist.

The launch system itself is not on every machine, so the files are kept plain and read here as XML.
"""

from __future__ import annotations

import importlib
import re
import xml.etree.ElementTree as ET
from collections.abc import Iterator
from pathlib import Path

import pytest

from fieldnav_ros.resources import config_path

pytest.importorskip("rclpy", reason="a node's parameters are declared in modules that import rclpy")

pytestmark = pytest.mark.ros
FOLDER = Path(__file__).parent.parent / "launch"
FILES = sorted(FOLDER.glob("*.launch.xml"))
SHARED = "$(find-pkg-share fieldnav_ros)/"


def tree(path: Path) -> ET.Element:
    return ET.parse(path).getroot()


def settings_of(executable: str) -> set[str]:
    module = "guidance_settings" if executable == "guidance_node" else executable
    return {setting.name for setting in importlib.import_module(f"fieldnav_ros.nodes.{module}").SETTINGS}


def values(root: ET.Element) -> Iterator[str]:
    for element in root.iter():
        yield from element.attrib.values()


def test_there_are_launch_files() -> None:
    assert {path.name for path in FILES} >= {"sim.launch.xml", "hardware.launch.xml", "rehearse.launch.xml"}


@pytest.mark.parametrize("path", FILES, ids=lambda path: path.name)
def test_only_known_elements_and_attributes_are_used(path: Path) -> None:
    """The subset of the ROS 2 launch XML format (docs.ros.org, "Using XML, YAML and Python for ROS 2 launch files")."""
    known = {
        "launch": set(),
        "arg": {"name", "default", "description"},
        "group": {"if", "unless"},
        "node": {"pkg", "exec", "name", "namespace", "output", "if", "unless"},
        "param": {"name", "value", "from"},
        "remap": {"from", "to"},
    }
    for element in tree(path).iter():
        assert set(element.attrib) <= known[element.tag], element.tag


@pytest.mark.parametrize("path", FILES, ids=lambda path: path.name)
def test_nodes_are_executables_of_this_package(path: Path, root: Path) -> None:
    built = set(re.findall(r'"(\w+_node)', (root / "setup.py").read_text()))
    for node in tree(path).iter("node"):
        assert node.get("pkg") == "fieldnav_ros"
        assert node.get("exec") in built
        assert node.get("exec") == node.get("name"), "files in config/ address nodes by these names"


@pytest.mark.parametrize("path", FILES, ids=lambda path: path.name)
def test_parameters_are_declared_by_their_nodes(path: Path) -> None:
    for node in tree(path).iter("node"):
        given = {param.get("name") for param in node.iter("param") if param.get("name")}
        assert given <= settings_of(str(node.get("exec")))


@pytest.mark.parametrize("path", FILES, ids=lambda path: path.name)
def test_arguments_are_declared_described_and_used(path: Path) -> None:
    declared = {arg.get("name"): arg for arg in tree(path).iter("arg")}
    used = {name for value in values(tree(path)) for name in re.findall(r"\$\(var (\w+)\)", value)}
    assert used == set(declared)
    assert all(arg.get("description") for arg in declared.values())


@pytest.mark.parametrize("path", FILES, ids=lambda path: path.name)
def test_files_named_are_shipped(path: Path) -> None:
    for value in values(tree(path)):
        for name in re.findall(re.escape(SHARED) + r"config/([\w./]+)", value):
            assert config_path(name).is_file()
        assert "$(find-pkg-share" not in value.replace(SHARED, "")


def test_lockstep_has_the_last_word_in_simulation() -> None:
    """Later files win (docs.ros.org, "Passing ROS arguments to nodes"), and a user's file may hold anything."""
    for node in tree(FOLDER / "sim.launch.xml").iter("node"):
        files = [param.get("from") for param in node.iter("param") if param.get("from")]
        assert files[-1] == SHARED + "config/lockstep.yaml"


def test_a_rehearsals_nodes_have_the_files_of_a_rehearsal_and_only_the_simulator_knows_the_floor() -> None:
    for node in tree(FOLDER / "rehearse.launch.xml").iter("node"):
        files = [param.get("from") for param in node.iter("param") if param.get("from")]
        assert files[-1] == SHARED + "config/rehearsal.yaml"
        knows = "$(var floor)" in [param.get("value") for param in node.iter("param")]
        assert knows is (node.get("exec") == "simulator_node")


def test_an_empty_default_of_a_parameter_is_a_quoted_one() -> None:
    """launch_ros reads values as YAML (its evaluate_parameters.py): nothing at all would be null, which it refuses."""
    for path in FILES:
        root = tree(path)
        given = {param.get("value") for param in root.iter("param")}
        bare = {arg.get("name") for arg in root.iter("arg") if arg.get("default") == ""}
        assert not {name for name in bare if f"$(var {name})" in given}


def test_no_simulator_starts_beside_real_hardware() -> None:
    assert "simulator_node" not in {node.get("exec") for node in tree(FOLDER / "hardware.launch.xml").iter("node")}


def test_topics_of_a_stack_can_be_named_for_hardware() -> None:
    names = {arg.get("name") for arg in tree(FOLDER / "hardware.launch.xml").iter("arg")}
    topics = {"pose", "obstacles", "goal", "hold", "cmd_vel", "heading"}
    assert names >= topics | {"pose_type", "stamped_cmd", "frame", "base_frame", "namespace", "yard", "prior", "ledger"}
    assert names >= {"floor_time", "return", "starts", "outcomes", "mode"}
