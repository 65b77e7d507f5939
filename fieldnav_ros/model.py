"""The nouns of the job as frozen, validated values: pose, obstacle, robot, layout, outcome.

Units and axes are those of REP-103: metres, radians, seconds; x forward, y left, yaw anticlockwise.
"""

from __future__ import annotations

from enum import Enum
from typing import Annotated

from pydantic import BaseModel, ConfigDict, Field

Number = Annotated[float, Field(strict=True)]
"""A float or an int; no text and no bool is taken for one."""
Positive = Annotated[Number, Field(gt=0)]


class Frozen(BaseModel):
    """A value: immutable, no unknown keys, no NaN or infinity anywhere."""

    model_config = ConfigDict(frozen=True, extra="forbid", allow_inf_nan=False)


class Pose(Frozen):
    """Where something is and which way it faces, in the floor's frame (m, m, rad)."""

    x: Number
    y: Number
    yaw: Number


class Obstacle(Frozen):
    """A disc that must not be touched, and how it moves (m, m/s)."""

    x: Number
    y: Number
    vx: Number = 0.0
    vy: Number = 0.0
    radius: Positive


class Robot(Frozen):
    """What a differential-drive robot can do. The limits bind every parameter set that is tried."""

    radius: Positive = Field(description="footprint radius in m")
    track: Positive = Field(description="distance between the wheels in m")
    wheel_speed: Positive = Field(description="largest speed of a wheel in m/s")
    wheel_accel: Positive = Field(description="largest acceleration of a wheel in m/s^2")


class Layout(Frozen):
    """Where an episode begins: start pose, goal pose, obstacle states."""

    start: Pose
    goal: Pose
    obstacles: tuple[Obstacle, ...] = ()
    seed: int = Field(default=0, ge=0, description="seed of the plant's noise in simulation")


class OutcomeKind(str, Enum):
    """How an episode ended. The order is that of the codes in batched arrays (see ``code``)."""

    ARRIVED = "arrived"
    TIMEOUT = "timeout"
    CONTACT = "contact"
    OFF_FLOOR = "off_floor"
    VOID = "void"

    @property
    def code(self) -> int:
        """Small integer used in arrays of outcomes."""
        return KINDS.index(self)


KINDS: tuple[OutcomeKind, ...] = tuple(OutcomeKind)


class Outcome(Frozen):
    """How an episode ended, when (s after its start), and how close it came to touching (m)."""

    kind: OutcomeKind
    time: Number = Field(ge=0, description="seconds from the start of the episode to its end")
    clearance: Number | None = Field(
        default=None, description="least gap to an obstacle or wall in m; none where nothing was near"
    )
