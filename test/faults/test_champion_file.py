"""The champion's file follows the ledger, also where a process died or a disk was full between the two."""

from __future__ import annotations

from pathlib import Path

import pytest

pytest.importorskip("rclpy", reason="the keeper belongs to the nodes")

from faults.conftest import Tell

from fieldnav_ros.nodes.keeper import Keeper
from fieldnav_ros.nodes.tuner_settings import SETTINGS
from fieldnav_ros.parameters import DEFAULTS
from fieldnav_ros.params_file import read_parameters
from fieldnav_ros.resources import config_path
from fieldnav_ros.tuning.events import ChampionChanged
from fieldnav_ros.tuning.ledger import Ledger
from fieldnav_ros.yard import load_yard

pytestmark = pytest.mark.ros
YARD = load_yard(config_path("yards/parcel_yard.yaml"))
BETTER = DEFAULTS.model_copy(update={"turn_radius": 0.08})


def keeper(folder: Path) -> Keeper:
    settings = {setting.name: setting.default for setting in SETTINGS}
    own = {"ledger": str(folder / "s.ledger"), "champion_file": str(folder / "champion.yaml")}
    return Keeper({**settings, **own}, YARD)


@pytest.mark.parametrize("state", ["stale", "gone", "cut off", "nonsense"])
def test_a_champion_that_reached_the_ledger_and_not_its_file_is_written_at_the_next_start(
    fast: Path, tell: Tell, state: str
) -> None:
    keeper(fast).close()
    path = fast / "champion.yaml"
    assert read_parameters(path) == DEFAULTS
    with Ledger.open(fast / "s.ledger") as ledger:
        ledger.append([ChampionChanged(set_id="g7.1", parameters=BETTER)])
    text = path.read_text()
    if state == "gone":
        path.unlink()
    elif state != "stale":
        path.write_text(text[: len(text) // 2] if state == "cut off" else "[" * 50)
    keeper(fast).close()
    assert read_parameters(path) == BETTER
    tell(f"champion.yaml {state} after a crash", 1, "written anew from the ledger")
