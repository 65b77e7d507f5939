"""The README shows what the code has."""

from __future__ import annotations

import re
from pathlib import Path

from fieldnav_ros.cli import build_parser
from fieldnav_ros.parameters import markdown_table

README = (Path(__file__).parent.parent / "README.md").read_text(encoding="utf-8")


def test_parameter_table_is_the_one_in_code() -> None:
    shown = README.split("python3 -m fieldnav_ros.parameters -->\n")[1].split("<!-- table end -->")[0]
    assert shown == markdown_table()


def test_verbs_listed_are_the_verbs_there_are() -> None:
    listed = set(re.findall(r"^\| `fieldnav (\w+)", README, flags=re.MULTILINE))
    (verbs,) = (action.choices for action in build_parser()._actions if action.dest == "verb")
    assert listed == set(verbs or ())


def test_the_two_commands_stand_in_it_and_name_files_that_exist() -> None:
    for name in ("launch/demo.sh", "test/run.sh"):
        assert f"bash {name}" in README
        assert (Path(__file__).parent.parent / name).is_file()
