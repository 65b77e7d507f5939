"""The README shows what the code has."""

from __future__ import annotations

import ast
import re
from pathlib import Path

from fieldnav_ros.cli import build_parser
from fieldnav_ros.nodes.pit.view import OUTCOME_KEYS, SERVICE_KEYS
from fieldnav_ros.parameters import markdown_table

README = (Path(__file__).parent.parent / "README.md").read_text(encoding="utf-8")


def test_parameter_table_is_the_one_in_code() -> None:
    shown = README.split("python3 -m fieldnav_ros.parameters -->\n")[1].split("<!-- table end -->")[0]
    assert shown == markdown_table()


def test_verbs_listed_are_the_verbs_there_are() -> None:
    listed = set(re.findall(r"^\| `fieldnav (\w+)", README, flags=re.MULTILINE))
    (verbs,) = (action.choices for action in build_parser()._actions if action.dest == "verb")
    assert listed == set(verbs or ())


def warnings_of_the_nodes() -> set[str]:
    """Return the names under which nodes count warnings: of ``warn``, ``usable`` and the halts that are faults."""
    package = Path(__file__).parent.parent / "fieldnav_ros"
    found = set()
    for path in [*package.glob("nodes/**/*.py"), package / "pilot.py"]:
        for call in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            if not isinstance(call, ast.Call) or not call.args or not isinstance(call.args[0], ast.Constant):
                continue
            name = call.func.attr if isinstance(call.func, ast.Attribute) else getattr(call.func, "id", "")
            harmless = any(key.arg == "fault" and ast.unparse(key.value) == "False" for key in call.keywords)
            if name in ("warn", "usable") or (name == "Halt" and not harmless):
                found.add(("stopped_" if name == "Halt" else "") + str(call.args[0].value))
    return found


def test_the_page_for_the_site_says_what_each_warning_means() -> None:
    page = README.split("## A session on site\n")[1].split("\n## ")[0]
    listed = set(re.findall(r"`(\w+)`", " ".join(re.findall(r"^\| (.*?) \|", page, flags=re.MULTILINE))))
    there = warnings_of_the_nodes()
    assert len(there) > 20
    assert there - listed == set()
    assert {name for name in listed if "_" in name} - there == set()


def test_the_page_for_the_site_names_every_key_of_the_terminal() -> None:
    page = README.split("## A session on site\n")[1].split("\n## ")[0]
    assert {*SERVICE_KEYS, *OUTCOME_KEYS} <= set(re.findall(r"`(\w)`", page))


def test_the_two_commands_stand_in_it_and_name_files_that_exist() -> None:
    for name in ("launch/demo.sh", "test/run.sh"):
        assert f"bash {name}" in README
        assert (Path(__file__).parent.parent / name).is_file()
