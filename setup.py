"""Metadata and lists of files: pip and colcon (ament_python) both start here."""

from __future__ import annotations

import re
import sys
from pathlib import Path

from setuptools import find_packages, setup

NAME = "fieldnav_ros"
SHARE = f"share/{NAME}"
NODES = ("guidance_node", "tuner_node", "simulator_node", "judge_node", "recorder_node")
EXECUTABLES = {name: f"{NAME}.entry:{name}" for name in ("fieldnav", *NODES)}

# ROS 2 as wheels, for machines without a ROS installation (x86-64, CPython 3.10 to 3.14). One distribution per
# environment. rclpy does not depend on an rmw of its own accord, so it is named here.
ROS_WHEELS = (
    "rclpy",
    "rmw-fastrtps-cpp",
    "geometry-msgs",
    "nav-msgs",
    "std-msgs",
    "std-srvs",
    "visualization-msgs",
    "diagnostic-msgs",
)
EXTRAS = {
    "ros": [f"ros-jazzy-{wheel}" for wheel in ROS_WHEELS],
    "ros-kilted": [f"ros-kilted-{wheel}" for wheel in ROS_WHEELS],
    "bags": ["mcap>=1.5", "rosbags"],  # mcap 1.5 is the first that writes out a chunk when asked
    "report": ["matplotlib", "jinja2", "markupsafe"],
    "pit": ["rich"],
    "cluster": ["distributed"],
    "benchmark": ["coco-experiment", "numba", "optuna", "pymunk"],
    # colcon-core 0.x calls `setup.py develop --editable`, which setuptools 80 took away.
    "colcon": ["colcon-common-extensions", "setuptools>=70.1,<80"],
}
EXTRAS["test"] = [
    *EXTRAS["bags"],
    *EXTRAS["report"],
    *EXTRAS["pit"],
    *EXTRAS["cluster"],
    "pytest>=8",
    "hypothesis",
    "jsonschema",
    "mcap-ros2-support",
    # New releases of these two find new faults in unchanged code.
    "ruff>=0.17,<0.18",
    "mypy>=2.4,<3",
    "scipy-stubs",
    "types-PyYAML",
    "types-jsonschema",
]

# Launch looks for a package's executables in lib/<package>. colcon puts them there (setup.cfg), pip puts them in
# bin/ only, so that a wheel carries these next to them.
WRAPPER = '#!/bin/sh\nexec "${0%/*}/../../bin/${0##*/}" "$@"\n'


def version() -> str:
    """Return the version that the package states."""
    found = re.search(r'^__version__ = "(.+)"$', Path(NAME, "__init__.py").read_text(encoding="utf-8"), re.MULTILINE)
    if found is None:
        raise SystemExit(f"{NAME}/__init__.py states no __version__")
    return found.group(1)


def config_files() -> list[Path]:
    """Return the files under config/, hidden ones left out, relative to this file's folder."""
    return sorted(path for path in Path("config").rglob("*") if path.is_file() and not path.name.startswith("."))


def package_files() -> list[str]:
    """Return what lies in the package and is no code, such as templates."""
    paths = sorted(path for path in Path(NAME).rglob("*") if path.is_file() and path.suffix not in (".py", ".pyc"))
    return [path.relative_to(NAME).as_posix() for path in paths if not path.name.startswith(".")]


def shared_files() -> list[tuple[str, list[str]]]:
    """Return what goes outside the Python package, as (folder under the prefix, files)."""
    folders = {
        "share/ament_index/resource_index/packages": [f"resource/{NAME}"],
        SHARE: ["package.xml"],
        f"{SHARE}/launch": sorted(path.as_posix() for path in Path("launch").glob("*.launch.*")),
    }
    for path in config_files():
        folders.setdefault(f"{SHARE}/{path.parent.as_posix()}", []).append(path.as_posix())
    if "bdist_wheel" in sys.argv:
        folders[f"lib/{NAME}"] = [write_wrapper(Path("build/wrappers", name)) for name in EXECUTABLES]
    return list(folders.items())


def write_wrapper(path: Path) -> str:
    """Write an executable that hands over to its namesake in the prefix's bin/ and return its path."""
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_text(WRAPPER, encoding="utf-8")
    path.chmod(0o755)
    return path.as_posix()


def readme() -> str:
    """Return the README; a build folder of colcon's holds links to the sources but none to it."""
    path = Path("README.md")
    return path.read_text(encoding="utf-8") if path.is_file() else ""


setup(
    name=NAME,
    version=version(),
    description="Heading-field guidance for small wheeled robots, and its retuning on the real robot",
    long_description=readme(),
    long_description_content_type="text/markdown",
    author="the fieldnav_ros developers",
    author_email="maintainers@fieldnav.example",
    maintainer="fieldnav maintainers",
    maintainer_email="maintainers@fieldnav.example",
    license="Apache-2.0",
    python_requires=">=3.10",
    install_requires=["numpy", "scipy", "cma", "pydantic>=2", "PyYAML"],
    extras_require=EXTRAS,
    # config/ lies beside the package in a checkout and inside it once installed: see fieldnav_ros/resources.py.
    packages=[*find_packages(include=[NAME, f"{NAME}.*"]), f"{NAME}.config"],
    package_dir={f"{NAME}.config": "config"},
    package_data={
        NAME: ["py.typed", "report/template/*"],
        f"{NAME}.config": [path.relative_to("config").as_posix() for path in config_files()],
    },
    data_files=shared_files(),
    entry_points={"console_scripts": [f"{name} = {target}" for name, target in EXECUTABLES.items()]},
    zip_safe=False,
)
