"""The layers hold: who imports ROS, who imports whom, and what is out of bounds for pure code."""

from __future__ import annotations

import ast
import re
from collections.abc import Iterator
from pathlib import Path

import pytest

PACKAGE = "fieldnav_ros"
# Data flows one way: each layer imports from those before it and from itself.
LAYERS = (
    {"errors"},
    {"model", "parameters"},
    {"yard", "params_file", "resources", "arguments"},
    {"drive", "pending", "tracking"},
    {"field"},
    {"guide", "crowd", "incoming"},
    {"world"},
    {"pilot", "resets", "judging", "survey"},
    {"tuning"},
    {"prepare"},
    {"bags"},
    {"report"},
    {"nodes"},
    {"cli"},
    {"entry"},
)
RANK = {name: rank for rank, layer in enumerate(LAYERS) for name in layer}
SHELL = {"nodes", "cli"}
ROS = re.compile(r"rclpy|rclcpp|rcl_|ament_|launch|rosidl|rosgraph|tf2|unique_identifier|.*_(msgs|srvs|interfaces)$")

# Pure code gets time, randomness and files from its caller.
PURE = {
    "errors", "model", "parameters", "drive", "pending", "tracking", "field", "guide", "crowd", "incoming", "pilot",
    "resets", "judging", "world", "survey", "tuning",
}  # fmt: skip
PURE_BUT = {
    "tuning/ledger.py": "writes the session's record",
    "tuning/prior_file.py": "reads the file that a session may start from",
}
IMPURE_MODULES = {
    "asyncio", "datetime", "glob", "io", "logging", "multiprocessing", "os", "pathlib", "pickle", "random", "secrets",
    "shutil", "signal", "socket", "sqlite3", "subprocess", "sys", "tempfile", "threading", "time",
}  # fmt: skip
IMPURE_CALLS = {"open", "input", "print", "exec", "eval", "__import__"}
SEEDED_RANDOM = {"default_rng", "Generator", "SeedSequence", "BitGenerator", "PCG64", "Philox"}


def faults(path: str, source: str) -> Iterator[str]:
    """Yield what a module does that its layer must not. ``path`` is relative to the package."""
    layer = path.removesuffix(".py").split("/")[0]
    if layer == "__init__":
        return
    if layer not in RANK:
        yield f"{path}: {layer} is in no layer; say in LAYERS where it belongs"
        return
    tree = ast.parse(source)
    # What a module does when it is run as a program of its own is done by a shell, not by the module.
    tree.body = [node for node in tree.body if not is_main_guard(node)]
    pure = layer in PURE and path not in PURE_BUT
    for module, line in imports(tree, path):
        top, _, rest = module.partition(".")
        if ROS.match(top) and layer not in SHELL:
            yield f"{path}:{line}: imports {module}; only nodes/ and cli.py know ROS"
        if pure and top in IMPURE_MODULES:
            yield f"{path}:{line}: imports {module}; pure code gets this from its caller"
        if top == PACKAGE and rest:
            other = rest.split(".")[0]
            if RANK.get(other, -1) > RANK[layer]:
                yield f"{path}:{line}: imports {module}, which is a layer above {layer}"
    if pure:
        yield from impure_calls(path, tree)


def is_main_guard(node: ast.stmt) -> bool:
    """Tell whether a statement is ``if __name__ == "__main__":``."""
    return isinstance(node, ast.If) and ast.unparse(node.test) == "__name__ == '__main__'"


def imports(tree: ast.Module, path: str) -> Iterator[tuple[str, int]]:
    """Yield the full name and line of everything a module imports, at its top or anywhere else."""
    here = [PACKAGE, *path.removesuffix(".py").removesuffix("/__init__").split("/")]
    package = here if path.endswith("__init__.py") else here[:-1]
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            yield from ((alias.name, node.lineno) for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            stem = package[: len(package) + 1 - node.level] if node.level else []
            base = ".".join([*stem, *([node.module] if node.module else [])])
            # `from fieldnav_ros import nodes` names the package in the list, not before it.
            yield from ((f"{base}.{alias.name}", node.lineno) for alias in node.names)
        elif isinstance(node, ast.Call) and name_of(node.func).split(".")[-1] in {"import_module", "__import__"}:
            yield from ((str(item.value), node.lineno) for item in node.args if isinstance(item, ast.Constant))


def impure_calls(path: str, tree: ast.Module) -> Iterator[str]:
    """Yield calls that read or write something, or draw from numpy's global random state."""
    for node in ast.walk(tree):
        if not isinstance(node, ast.Call):
            continue
        name = name_of(node.func)
        if name in IMPURE_CALLS:
            yield f"{path}:{node.lineno}: calls {name}()"
        if re.match(r"(np|numpy)\.random\.", name) and name.split(".")[2] not in SEEDED_RANDOM:
            yield f"{path}:{node.lineno}: {name}() draws from the global random state"
        if name.split(".")[-1] == "default_rng" and not (node.args or node.keywords):
            yield f"{path}:{node.lineno}: default_rng() without a seed"
        if re.search(r"\.(tofile|savez?|savetxt|loadtxt|fromfile|memmap)$", name):
            yield f"{path}:{node.lineno}: {name}() reads or writes a file"


def name_of(node: ast.expr) -> str:
    """Return the dotted name of a plain expression such as ``np.random.rand``, or what of it is plain."""
    if isinstance(node, ast.Attribute):
        return f"{name_of(node.value)}.{node.attr}"
    return node.id if isinstance(node, ast.Name) else ""


def modules(root: Path) -> list[str]:
    package = root / PACKAGE
    return sorted(path.relative_to(package).as_posix() for path in package.rglob("*.py"))


def test_no_module_reaches_over_its_layer(root: Path) -> None:
    found = [
        fault for path in modules(root) for fault in faults(path, (root / PACKAGE / path).read_text(encoding="utf-8"))
    ]
    assert not found, "\n".join(found)


def test_the_check_sees_the_modules_it_is_about(root: Path) -> None:
    """A wrong folder or a renamed package must not look like a clean one."""
    seen = {path.removesuffix(".py").split("/")[0] for path in modules(root)}
    assert {"field", "world", "tuning", "nodes", "model", "parameters", "drive"} <= seen
    assert all((root / PACKAGE / path).is_file() for path in PURE_BUT)


VIOLATIONS = [
    ("field/heading.py", "import rclpy"),
    ("field/heading.py", "from geometry_msgs.msg import PoseStamped"),
    ("tuning/ledger.py", "from rclpy.node import Node"),
    ("yard.py", "from typing import TYPE_CHECKING\nif TYPE_CHECKING:\n    import nav_msgs.msg"),
    ("report/page.py", "def late():\n    from std_srvs.srv import Trigger"),
    ("bags/read.py", "import importlib\nimportlib.import_module('builtin_interfaces.msg')"),
    ("tuning/session.py", "from fieldnav_ros.nodes import payloads"),
    ("report/page.py", "from fieldnav_ros.nodes.payloads import RunEpisode"),
    ("bags/write.py", "from .. import nodes"),
    ("bags/write.py", "from ..nodes.convert import pose"),
    ("report/__init__.py", "from ..nodes import convert"),
    ("bags/read.py", "from fieldnav_ros import nodes"),
    ("nodes/tuner_node.py", "from fieldnav_ros.cli import main"),
    ("field/heading.py", "from fieldnav_ros.world.plant import Plant"),
    ("model.py", "import fieldnav_ros.yard"),
    ("world/judge.py", "from fieldnav_ros.tuning import cost"),
    ("world/plant.py", "import time"),
    ("field/approach.py", "from pathlib import Path"),
    ("tuning/session.py", "import sqlite3"),
    ("tuning/schedule.py", "from datetime import datetime"),
    ("tuning/search.py", "import os.path"),
    ("world/layouts.py", "import numpy as np\nnp.random.uniform(0, 1)"),
    ("world/layouts.py", "import numpy as np\nnp.random.seed(1)"),
    ("world/layouts.py", "from numpy.random import default_rng\ndefault_rng()"),
    ("tuning/search.py", "open('state.txt')"),
    ("drive.py", "print('turning')"),
    ("drive.py", "if __name__ == 'drive':\n    print('turning')"),
    ("world/batch.py", "import numpy as np\nnp.save('rows.npy', [1])"),
    ("plugins/new.py", "pass"),
]


@pytest.mark.parametrize(("path", "source"), VIOLATIONS, ids=[f"{path}: {source}" for path, source in VIOLATIONS])
def test_a_violation_is_seen(path: str, source: str) -> None:
    assert list(faults(path, source)), "not seen"


@pytest.mark.parametrize(
    ("path", "source"),
    [
        ("nodes/guidance_node.py", "import rclpy\nfrom geometry_msgs.msg import PoseStamped\nimport time"),
        ("cli.py", "import rclpy\nfrom fieldnav_ros.nodes import tuner_node\nprint(1)"),
        ("tuning/ledger.py", "import sqlite3, os\nfrom pathlib import Path"),
        ("tuning/session.py", "from fieldnav_ros.tuning.search import Search\nfrom . import cost"),
        ("tuning/session.py", "from ..yard import Yard\nfrom .. import errors"),
        ("world/layouts.py", "import numpy as np\nnp.random.default_rng(3)\nnp.random.SeedSequence(4)"),
        ("parameters.py", "if __name__ == '__main__':\n    print('| table |')"),
        ("bags/read.py", "from rosbags.highlevel import AnyReader\nfrom pathlib import Path"),
        ("field/heading.py", "import numpy as np\nfrom fieldnav_ros.field.approach import approach_heading"),
    ],
)
def test_what_a_layer_may_do_is_let_through(path: str, source: str) -> None:
    assert list(faults(path, source)) == []
