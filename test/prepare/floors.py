"""A small yard and sessions on it, and works that kill the worker they run in."""

from __future__ import annotations

import os
import signal
from pathlib import Path
from typing import Any

import yaml

from fieldnav_ros.parameters import DEFAULTS
from fieldnav_ros.resources import config_path
from fieldnav_ros.tuning.config import SessionConfig, Stage
from fieldnav_ros.tuning.events import Event
from fieldnav_ros.tuning.pretune import MODEL, Runner, pretune, session_on
from fieldnav_ros.tuning.session import Session
from fieldnav_ros.world.batch import BatchResult
from fieldnav_ros.world.layouts import draw_many
from fieldnav_ros.world.work import Work
from fieldnav_ros.yard import Yard

SHIPPED = config_path("yards/parcel_yard.yaml")
MARKER = "FIELDNAV_TEST_MARKER"
SMALL = SessionConfig(
    seed=2, floor_time_s=1.0, episodes=150, grade="moving", time_limit=3.0, population=4, layouts=6, control=False,
    lead_in=(Stage(grade="empty", time_limit=2.5),), rounds=1, pairs_at_once=10, least_pairs=5,
)  # fmt: skip


def content() -> dict[str, Any]:
    """Return the parcel yard with two grades whose episodes are short, as a YAML file holds it."""
    loaded: dict[str, Any] = yaml.safe_load(SHIPPED.read_text(encoding="utf-8"))
    loaded["grades"] = {
        "empty": {"carts": 0, "speed": [0.0, 0.0], "time_limit": 2.5},
        "moving": {"carts": 2, "speed": [0.2, 0.5], "time_limit": 3.0},
    }
    return loaded


def yard() -> Yard:
    return Yard.model_validate(content())


def yard_file(folder: Path, **changes: Any) -> Path:
    path = folder / "yard.yaml"
    path.write_text(yaml.safe_dump({**content(), **changes}), encoding="utf-8")
    return path


def work(layouts: int = 9, sets: int = 3) -> Work:
    """Return a work whose sets and outcomes differ."""
    drawn = draw_many(yard(), "moving", layouts, 1)
    quick = DEFAULTS.model_copy(update={"arrival_gain": 6.0})
    chosen = [quick.model_copy(update={"steer_gain": 3.0 + 4.0 * number}) for number in range(sets)]
    return Work(yard(), "moving", 3.0, tuple(drawn), tuple(chosen), MODEL)


class Deadly(Work):
    """The first of its parts to be run anywhere kills its process, once; the file named by MARKER remembers it."""

    def run(self) -> BatchResult:
        try:
            Path(os.environ[MARKER]).touch(exist_ok=False)
        except FileExistsError:
            return super().run()
        os.kill(os.getpid(), signal.SIGKILL)
        raise AssertionError("killed processes do not come here")


class Fatal(Work):
    """Kills every process that runs it."""

    def run(self) -> BatchResult:
        os.kill(os.getpid(), signal.SIGKILL)
        raise AssertionError("killed processes do not come here")


def driven(run: Runner, config: SessionConfig = SMALL) -> tuple[Session, list[Event]]:
    """Return a session on the small yard driven to its end, and its events."""
    session, log = session_on(yard()), list[Event]()
    events = session.begin(config)
    log += events
    session.apply(*events)
    pretune(session, yard(), log.extend, run)
    return session, log
