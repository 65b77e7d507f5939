"""The two commands for newcomers: what they install, when they install again, and how they say what is missing.

Python itself is played by a small shell script, so that no test here needs an index or takes a minute.
"""

from __future__ import annotations

import os
import shutil
import subprocess
from collections.abc import Callable
from pathlib import Path

import pytest

PYTHON = r"""#!/bin/sh
case "$*" in
*version_info*) exit "${TOO_OLD:-0}" ;;
*ensurepip*) exit "${NO_VENV:-0}" ;;
*_base_executable*) echo "$0" ;;
*rclpy*) exit "${NO_ROS:-1}" ;;
*"< (2, 4)"*) exit "${OLD_NUMPY:-0}" ;;
*numpy*) echo numpy==1.26.4 ;;
--version) echo "Python ${FAKE_VERSION:-3.12.3}" ;;
"-m venv "*)
    for venv; do :; done
    mkdir -p "$venv/bin"
    cp "$0" "$venv/bin/python"
    printf '#!/bin/sh\necho "fieldnav $*"\n' >"$venv/bin/fieldnav"
    printf '#!/bin/sh\necho "ruff $*"\nexit "${RUFF:-0}"\n' >"$venv/bin/ruff"
    printf '#!/bin/sh\necho "mypy $*"\n' >"$venv/bin/mypy"
    printf '#!/bin/sh\necho "pytest $*"\nexit "${PYTEST:-0}"\n' >"$venv/bin/pytest"
    chmod +x "$venv"/bin/*
    echo "$@" >>"$CALLS"
    ;;
*pip*install*)
    echo "$@" >>"$CALLS"
    [ -z "$PIP_SAYS" ] || { echo "$PIP_SAYS"; exit 1; }
    ;;
esac
"""
# What the machine that runs the tests has set must not decide what they see.
PYTEST = [
    "pytest --ignore test/nodes --ignore test/faults --ignore test/test_layouts.py",
    "pytest test/nodes test/faults test/test_layouts.py",
]
"""Two beside each other; what the second says comes last."""
UNSET = ("ROS_DISTRO", "AMENT_PREFIX_PATH", "PYTHONPATH", "PIP_SAYS")


class Clone:
    """A small clone with a Python of its own; ``calls`` holds what was asked of venv and pip."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.python = folder.parent / "python"
        self.log = folder.parent / "calls"

    def run(self, script: str, *arguments: str, **variables: str) -> subprocess.CompletedProcess[str]:
        environment = {key: value for key, value in os.environ.items() if key not in UNSET}
        environment |= {"PYTHON": str(self.python), "CALLS": str(self.log), **variables}
        return subprocess.run(
            ["bash", self.folder / script, *arguments],
            cwd=self.folder.parent,
            env=environment,
            capture_output=True,
            text=True,
            timeout=60,
            check=False,
        )

    def calls(self) -> list[str]:
        lines = self.log.read_text().splitlines() if self.log.is_file() else []
        self.log.unlink(missing_ok=True)
        return lines


@pytest.fixture
def clone(root: Path, tmp_path: Path) -> Clone:
    folder = tmp_path / "the clone"
    for name in ("launch/demo.sh", "launch/environment.sh", "test/run.sh", "setup.py", "setup.cfg", "pyproject.toml"):
        (folder / name).parent.mkdir(parents=True, exist_ok=True)
        shutil.copy(root / name, folder / name)
    (folder / "fieldnav_ros").mkdir()
    shutil.copy(root / "fieldnav_ros" / "__init__.py", folder / "fieldnav_ros")
    (tmp_path / "python").write_text(PYTHON)
    (tmp_path / "python").chmod(0o755)
    (tmp_path / "uname").write_text('#!/bin/sh\n[ "$1" = -s ] && echo Linux || echo "${FAKE_MACHINE:-x86_64}"\n')
    (tmp_path / "uname").chmod(0o755)
    return Clone(folder)


@pytest.fixture(autouse=True)
def _machine(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.setenv("PATH", f"{tmp_path}{os.pathsep}{os.environ['PATH']}")


def test_the_demo_installs_once_and_then_runs_with_its_arguments(clone: Clone) -> None:
    first = clone.run("launch/demo.sh", "--seed", "3", "--out", "a b")
    assert first.returncode == 0, first.stderr
    assert first.stdout == "fieldnav demo --seed 3 --out a b\n"
    assert "installing" in first.stderr
    venv, pip = clone.calls()
    assert venv.endswith(f"{clone.folder}/.venv-demo")
    assert f"--editable {clone.folder}[" in pip

    second = clone.run("launch/demo.sh")
    assert second.stdout == "fieldnav demo\n"
    assert second.stderr == ""
    assert clone.calls() == []


Change = Callable[[Clone], dict[str, str]]


def new_requirement(clone: Clone) -> dict[str, str]:
    with (clone.folder / "setup.py").open("a") as file:
        file.write("# one more\n")
    return {}


def new_source(clone: Clone) -> dict[str, str]:
    (clone.folder / "fieldnav_ros" / "new.py").write_text("pass\n")
    return {}


@pytest.mark.parametrize(
    ("change", "expected"),
    [
        (new_source, []),
        (new_requirement, ["pip"]),
        (lambda clone: {"FAKE_VERSION": "3.13.0"}, ["pip"]),
        (lambda clone: {"NO_ROS": "0"}, ["venv", "pip"]),
    ],
    ids=["sources are linked to", "requirements", "Python's version", "ROS sourced since"],
)
def test_what_decides_about_the_environment_makes_it_anew(
    clone: Clone, change: Change, expected: list[str]
) -> None:
    clone.run("launch/demo.sh")
    clone.calls()
    result = clone.run("launch/demo.sh", **change(clone))
    assert result.returncode == 0, result.stderr
    assert [next(word for word in call.split() if word in ("venv", "pip")) for call in clone.calls()] == expected


def test_a_clone_that_was_moved_gets_a_new_environment(clone: Clone) -> None:
    """Scripts in an environment hold its path."""
    clone.run("launch/demo.sh")
    clone.calls()
    clone.folder = clone.folder.rename(clone.folder.parent / "moved")
    assert clone.run("launch/demo.sh").returncode == 0
    assert len(clone.calls()) == 2


def test_without_ros_wheels_are_installed_and_with_it_its_own_packages_are_used(clone: Clone) -> None:
    """The message packages of an installation need the numpy that they were compiled against."""
    clone.run("launch/demo.sh")
    venv, pip = clone.calls()
    assert ",ros]" in pip
    assert "--system-site-packages" not in venv
    clone.run("launch/demo.sh", NO_ROS="0", ROS_DISTRO="jazzy")
    venv, pip = clone.calls()
    assert ",ros]" not in pip
    assert "--system-site-packages" in venv
    constraints = pip.partition("--constraint ")[2].partition(" --editable")[0]
    assert Path(constraints).read_text() == "numpy==1.26.4\n"


@pytest.mark.parametrize(
    ("variables", "says"),
    [
        ({"PYTHON": "no-such-python"}, "no-such-python is not to be found; install Python 3.10 or later"),
        ({"TOO_OLD": "1", "FAKE_VERSION": "3.9.18"}, "is Python 3.9.18, must be Python 3.10 or later"),
        ({"NO_VENV": "1"}, "apt install python3-venv"),
        ({"FAKE_MACHINE": "aarch64"}, "no ROS 2 wheels for Linux on aarch64; source a ROS 2 installation"),
        ({"PIP_SAYS": "Failed to establish: NewConnectionError"}, "cannot reach the Python package index"),
        ({"PIP_SAYS": "ERROR: No matching distribution found for cma"}, "No matching distribution found for cma"),
        ({"PIP_SAYS": "OSError: [Errno 28] No space left on device"}, "the disk is full"),
    ],
    ids=lambda value: str(value) if isinstance(value, str) else "",
)
@pytest.mark.parametrize("script", ["launch/demo.sh", "test/run.sh"])
def test_what_is_missing_is_said_in_one_sentence(
    clone: Clone, script: str, variables: dict[str, str], says: str
) -> None:
    result = clone.run(script, **variables)
    assert result.returncode == 1
    assert result.stdout == ""
    (sentence,) = [line for line in result.stderr.splitlines() if "installing into" not in line]
    assert says in sentence


def test_a_failed_installation_is_tried_again(clone: Clone) -> None:
    assert clone.run("launch/demo.sh", PIP_SAYS="ERROR: gone").returncode == 1
    clone.calls()
    assert clone.run("launch/demo.sh").returncode == 0
    assert any("pip" in call for call in clone.calls())


def test_the_checks_run_in_order_and_arguments_go_to_pytest(clone: Clone) -> None:
    result = clone.run("test/run.sh", "-k", "some thing")
    assert result.returncode == 0, result.stderr
    assert result.stdout.splitlines() == ["ruff check .", "mypy ", "pytest -k some thing"]


def test_types_are_left_out_where_numpy_is_older_than_the_annotations(clone: Clone) -> None:
    result = clone.run("test/run.sh", OLD_NUMPY="1")
    assert result.returncode == 0
    assert result.stdout.splitlines() == ["ruff check .", *PYTEST]
    assert "types are not checked here" in result.stderr


@pytest.mark.parametrize(("variables", "code"), [({"RUFF": "1"}, 1), ({"PYTEST": "5"}, 5), ({"PYTEST": "1"}, 1)])
def test_a_check_that_fails_fails_the_whole_and_the_tests_run_all_the_same(
    clone: Clone, variables: dict[str, str], code: int
) -> None:
    """Pytest's 5 says that no test ran: that is a failure too."""
    result = clone.run("test/run.sh", **variables)
    assert result.returncode == code
    assert result.stdout.splitlines()[-2:] == PYTEST


def test_the_libraries_of_another_environment_are_left_behind(clone: Clone) -> None:
    """Started inside an environment with ROS wheels, the scripts would pass its library path on."""
    (clone.folder / "launch" / "demo.sh").write_text(
        (clone.folder / "launch" / "demo.sh").read_text().replace("exec fieldnav demo", "env; exec fieldnav demo")
    )
    inside = {"_ROS_WHEELS_BOOTSTRAP_COMPLETE": "1", "LD_LIBRARY_PATH": "/other/lib"}
    seen = clone.run("launch/demo.sh", **inside).stdout
    assert "_ROS_WHEELS_BOOTSTRAP_COMPLETE" not in seen
    assert "/other/lib" not in seen
    outside = clone.run("launch/demo.sh", **{**inside, "_ROS_WHEELS_BOOTSTRAP_COMPLETE": ""}).stdout
    assert "LD_LIBRARY_PATH=/other/lib" in outside
