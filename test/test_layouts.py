"""The package works however it is installed: the same files, found by the same calls, and executables that start.

Each layout is made for real from a copy of the checkout, with the tools that users have: pip and colcon.
"""

from __future__ import annotations

import json
import os
import re
import shutil
import signal
import subprocess
import sys
import sysconfig
import time
import venv
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path

import pytest
import setuptools

pytestmark = pytest.mark.layout

LAYOUTS = ("checkout", "wheel", "editable", "colcon", "colcon-symlink")
# pip installs no data files for an editable installation, and a checkout is no prefix that launch could look in.
in_a_prefix = pytest.mark.parametrize("layout", ["wheel", "colcon", "colcon-symlink"], indirect=True)
NODES = ("guidance_node", "tuner_node", "simulator_node", "judge_node", "recorder_node")
START_TIME, STOP_TIME = 120.0, 60.0
"""Seconds until a busy machine must have started or stopped five processes."""
# What is tried in each: every file of config/ as the code finds it, and where the code came from.
FIND_FILES = """
import json, pathlib, sys
import fieldnav_ros
from fieldnav_ros.resources import config_path
package = pathlib.Path(fieldnav_ros.__file__).parent
print(json.dumps({
    "beside the code": [name for name in json.loads(sys.argv.pop(1)) if (package / name).is_file()],
    "package": str(pathlib.Path(fieldnav_ros.__file__).resolve()),
    "files": {name: config_path(name).read_text("utf-8") for name in sys.argv[1:]},
}))
"""


@dataclass(frozen=True)
class Layout:
    """An installation: its prefix, the environment to run things in, and where its executables lie (if any)."""

    name: str
    source: Path
    prefix: Path
    python: Path
    environment: dict[str, str]
    executables: Path | None

    def run(self, *command: str | Path) -> subprocess.CompletedProcess[str]:
        """Run a command far from the checkout, so that nothing is found by standing beside it."""
        return run(*command, folder=Path("/"), environment=self.environment)


def run(
    *command: str | Path, folder: Path, environment: dict[str, str] | None = None
) -> subprocess.CompletedProcess[str]:
    result = subprocess.run(
        [str(part) for part in command],
        cwd=folder,
        env=os.environ if environment is None else environment,
        capture_output=True,
        text=True,
        timeout=180,
        check=False,
    )
    assert result.returncode == 0, f"{command}\n{result.stdout}\n{result.stderr}"
    return result


def colcon() -> str:
    """Return the colcon beside this Python, or any other."""
    found = shutil.which("colcon", path=os.pathsep.join([sysconfig.get_path("scripts"), os.environ["PATH"]]))
    if found is None:
        message = "colcon is not to be found: install the extra 'colcon' or the package of a ROS 2 installation"
        if os.environ.get("CI"):
            pytest.fail(message)
        pytest.skip(message)
    return found


@pytest.fixture(scope="module")
def source(root: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A copy of the checkout: building leaves traces in the folder built from."""
    copy = tmp_path_factory.mktemp("src") / "fieldnav_ros"
    left_out = shutil.ignore_patterns(
        ".git", ".venv*", "build", "install", "log", "*.egg-info", "__pycache__", ".*_cache", ".hypothesis"
    )
    shutil.copytree(root, copy, ignore=left_out)
    return copy


@pytest.fixture(scope="module", params=LAYOUTS)
def layout(request: pytest.FixtureRequest, source: Path, tmp_path_factory: pytest.TempPathFactory) -> Layout:
    name = str(request.param)
    folder = tmp_path_factory.mktemp(name)
    if name == "checkout":
        environment = {**os.environ, "PYTHONPATH": f"{source}{os.pathsep}{os.environ.get('PYTHONPATH', '')}"}
        return Layout(name, source, source, Path(sys.executable), environment, None)
    if name in ("wheel", "editable"):
        return installed_by_pip(name, source, folder)
    return built_by_colcon(name, source, folder)


def installed_by_pip(name: str, source: Path, prefix: Path) -> Layout:
    """Install into a bare environment; the libraries it needs are borrowed from the one that runs the tests."""
    venv.create(prefix, with_pip=False, symlinks=True)
    python = prefix / "bin" / "python"
    pip = (sys.executable, "-m", "pip", "--disable-pip-version-check", "--python", python)
    options = ("--no-deps", "--no-build-isolation", "--no-index", "--quiet")
    lent = {**os.environ, "PYTHONPATH": str(lend_setuptools(prefix / "lent"))}
    if name == "wheel":
        run(*pip, "wheel", *options, "--wheel-dir", prefix, source, folder=prefix, environment=lent)
        (wheel,) = prefix.glob("*.whl")
        run(*pip, "install", "--no-deps", "--no-index", "--quiet", wheel, folder=prefix)
    else:
        run(*pip, "install", *options, "--editable", source, folder=prefix, environment=lent)
    # By a .pth file and not by PYTHONPATH: what lies there comes last, and the ways in which fieldnav_ros itself may
    # be installed there do not come at all.
    libraries = [path for path in sys.path if path.endswith(("site-packages", "dist-packages"))]
    (site_packages,) = prefix.glob("lib/python*/site-packages")
    (site_packages / "borrowed.pth").write_text("\n".join(libraries) + "\n")
    return Layout(name, source, prefix, python, {**os.environ, "VIRTUAL_ENV": str(prefix)}, prefix / "bin")


def lend_setuptools(folder: Path) -> Path:
    """Make a folder that holds setuptools and nothing else, since no index is asked and nothing else must be seen."""
    folder.mkdir()
    home = Path(setuptools.__file__).parent.parent
    for item in (*home.glob("setuptools*"), *home.glob("_distutils_hack"), *home.glob("pkg_resources")):
        (folder / item.name).symlink_to(item)
    return folder


def built_by_colcon(name: str, source: Path, workspace: Path) -> Layout:
    """Build a workspace, and take the environment that its setup file makes."""
    options = ["--symlink-install"] if name == "colcon-symlink" else []
    run(colcon(), "--log-base", "log", "build", *options, "--base-paths", source, folder=workspace)
    prefix = workspace / "install" / "fieldnav_ros"
    script = f". {workspace}/install/setup.bash && env -0"
    listed = run("bash", "-c", script, folder=workspace).stdout.split("\0")
    environment = dict(item.partition("=")[::2] for item in listed if item)
    return Layout(name, source, prefix, Path(sys.executable), environment, prefix / "lib" / "fieldnav_ros")


def shipped(root: Path) -> dict[str, str]:
    folder = root / "config"
    paths = sorted(path for path in folder.rglob("*") if path.is_file())
    return {path.relative_to(folder).as_posix(): path.read_text("utf-8") for path in paths}


def beside_the_code(root: Path) -> list[str]:
    """Return what lies in the package and is no code: templates, py.typed (PEP 561)."""
    package = root / "fieldnav_ros"
    paths = sorted(path for path in package.rglob("*") if path.is_file() and path.suffix not in (".py", ".pyc"))
    return [path.relative_to(package).as_posix() for path in paths]


def test_every_file_that_the_code_reads_is_found(layout: Layout) -> None:
    expected = shipped(layout.source)
    beside = beside_the_code(layout.source)
    seen = json.loads(layout.run(layout.python, "-c", FIND_FILES, json.dumps(beside), *expected).stdout)
    assert seen["files"] == expected
    assert seen["beside the code"] == beside
    package = Path(seen["package"])
    if layout.name in ("wheel", "colcon"):
        assert package.is_relative_to(layout.prefix)
    else:
        assert package.is_relative_to(layout.source)


@in_a_prefix
def test_ros_tools_find_the_package_by_the_ament_index(layout: Layout) -> None:
    """Where the marker lies is ament's rule (ament_cmake's resource index, doc/resource_index.md)."""
    share = layout.prefix / "share"
    assert (share / "ament_index/resource_index/packages/fieldnav_ros").is_file()
    assert (share / "fieldnav_ros/package.xml").read_bytes() == (layout.source / "package.xml").read_bytes()
    for name, text in shipped(layout.source).items():
        assert (share / "fieldnav_ros/config" / name).read_text("utf-8") == text
    launch_files = {path.name for path in (layout.source / "launch").glob("*.launch.*")}
    assert {path.name for path in (share / "fieldnav_ros/launch").iterdir()} == launch_files


@in_a_prefix
def test_launch_finds_the_executables_in_lib(layout: Layout) -> None:
    """launch_ros takes what is executable in lib/<package> (ros2pkg.api.get_executable_paths): all of it, once."""
    folder = layout.prefix / "lib" / "fieldnav_ros"
    found = {path.name for path in folder.iterdir() if os.access(path, os.X_OK)}
    assert found == {"fieldnav", *NODES}


@pytest.mark.ros
def test_the_command_line_starts(layout: Layout) -> None:
    commands: list[list[str | Path]] = [[layout.python, "-m", "fieldnav_ros.cli"]]
    if layout.executables is not None:
        commands.append([layout.executables / "fieldnav"])
    if layout.name == "wheel":
        commands.append([layout.prefix / "lib" / "fieldnav_ros" / "fieldnav"])
    for command in commands:
        assert "demo" in layout.run(*command, "--help").stdout


@pytest.mark.ros
@in_a_prefix
def test_the_nodes_start_appear_in_the_graph_and_stop_when_asked(layout: Layout, tmp_path: Path) -> None:
    """Each executable as launch starts it; SIGINT ends it with exit code 0."""
    with ExitStack() as stack:
        running = [stack.enter_context(Running(layout, node, tmp_path)) for node in NODES]
        wait_for_nodes(set(NODES), running)
        for node in running:
            node.process.send_signal(signal.SIGINT)
        ends = [(node.process.wait(STOP_TIME), node.said()) for node in running]
        assert [code for code, _ in ends] == [0] * len(NODES), ends


class Running:
    """A node in a process of its own, which is gone when the block ends, however it ends."""

    def __init__(self, layout: Layout, node: str, folder: Path) -> None:
        self.name = node
        self._log = folder / f"{node}.log"
        with self._log.open("wb") as log:
            self.process = subprocess.Popen(
                [layout.prefix / "lib" / "fieldnav_ros" / node],
                cwd=folder,
                env=layout.environment,
                stdout=log,
                stderr=subprocess.STDOUT,
            )

    def __enter__(self) -> Running:
        return self

    def __exit__(self, *_: object) -> None:
        self.process.kill()
        self.process.wait()

    def said(self) -> str:
        return self._log.read_text("utf-8", errors="replace")


def wait_for_nodes(wanted: set[str], running: list[Running]) -> None:
    """Wait until all nodes are in the graph; fail at once where one has ended, or at the deadline."""
    import rclpy  # here, so that the other tests run without it
    from rclpy.context import Context

    context = Context()
    rclpy.init(context=context)
    watcher = rclpy.create_node("layout_watcher", context=context)
    try:
        deadline = time.monotonic() + START_TIME
        while not wanted <= set(watcher.get_node_names()):
            for node in running:
                assert node.process.poll() is None, f"{node.name} ended: {node.said()}"
            assert time.monotonic() < deadline, f"in the graph: {watcher.get_node_names()}"
            time.sleep(0.05)
    finally:
        watcher.destroy_node()
        context.try_shutdown()


@pytest.mark.parametrize("layout", ["colcon"], indirect=True)
def test_colcon_test_runs_tests_and_says_how_many(layout: Layout) -> None:
    """`colcon test` exits with 0 on failures and where it found nothing to run: only its results tell."""
    workspace = layout.prefix.parent.parent
    command = (colcon(), "--log-base", "log")
    environment = {**os.environ, "PYTEST_ADDOPTS": ""}
    options = ("--base-paths", layout.source, "--pytest-args", "-m", "smoke")
    run(*command, "test", *options, folder=workspace, environment=environment)
    summary = run(*command, "test-result", "--verbose", folder=workspace).stdout
    numbers = re.search(r"(\d+) tests, (\d+) errors, (\d+) failures, (\d+) skipped", summary)
    assert numbers, summary
    tests, errors, failures, skipped = (int(number) for number in numbers.groups())
    assert tests - skipped > 20
    assert errors == failures == 0
