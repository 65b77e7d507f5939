"""Sessions in batched simulation, for the programs beside this one."""

from __future__ import annotations

from fieldnav_ros.parameters import DEFAULTS, ParameterSet
from fieldnav_ros.resources import config_path
from fieldnav_ros.tuning.config import SessionConfig
from fieldnav_ros.tuning.pretune import pretune, session_on
from fieldnav_ros.tuning.session import Session
from fieldnav_ros.tuning.space import Prior
from fieldnav_ros.world.batch import BatchResult
from fieldnav_ros.world.work import Work
from fieldnav_ros.yard import Plant, PlantRanges, Yard, load_yard


def parcel_yard() -> Yard:
    """Return the yard that comes with the package."""
    return load_yard(config_path("yards/parcel_yard.yaml"))


def one_robot(yard: Yard, plant: Plant | None = None) -> Yard:
    """Return the yard with one robot (default: the yard's own) in place of robots like it."""
    still = PlantRanges(**dict.fromkeys(PlantRanges.model_fields, (0.0, 0.0)))
    return yard.model_copy(update={"plant": plant or yard.plant, "plant_ranges": still})


def hold(
    yard: Yard, config: SessionConfig, model: str, prior: Prior | None = None, champion: ParameterSet = DEFAULTS
) -> Session:
    """Run a session to its end, on a field of this model, and return it."""
    session = session_on(yard)
    session.apply(*session.begin(config, champion, prior))

    def run(work: Work) -> list[BatchResult]:
        return [work._replace(model=model).run()]

    pretune(session, yard, lambda _: None, run)
    return session
