"""The search space: nine numbers mapped to the unit cube, and what one session hands the next about it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Annotated, Any

import numpy as np
import yaml
from pydantic import Field, ValidationError, model_validator

from fieldnav_ros.errors import InputError, clipped, shown
from fieldnav_ros.model import Frozen
from fieldnav_ros.parameters import TABLE, FloatArray, ParameterSet, Scale

SYMMETRY = 1e-9  # largest difference between mirrored elements, as a share of the largest element


class Axis(Frozen):
    """One direction of the space: which parameter, over which range, on which scale."""

    name: str
    unit: str
    low: float
    high: float
    scale: Scale


class Space(Frozen):
    """The unit cube over the parameter table; a point is nine values from 0 to 1 in table order."""

    axes: tuple[Axis, ...]

    @classmethod
    def of_table(cls) -> Space:
        """Return the space of the parameter table as it stands."""
        return cls(
            axes=tuple(
                Axis(name=row.ros_name, unit=row.unit, low=row.low, high=row.high, scale=row.scale) for row in TABLE
            )
        )

    @property
    def names(self) -> tuple[str, ...]:
        """ROS names of the axes, in order."""
        return tuple(axis.name for axis in self.axes)

    def to_unit(self, parameters: ParameterSet) -> FloatArray:
        """Return the set as a point of the unit cube, shape (9,)."""
        values = parameters.to_array()
        return np.array([row.to_unit(value) for row, value in zip(TABLE, values)])

    def from_unit(self, point: Sequence[float] | FloatArray) -> ParameterSet:
        """Return the set at a point; coordinates outside 0..1 are taken to the nearest bound.

        Raises InputError on a wrong number of coordinates, NaN or infinity.
        """
        array = np.asarray(point, dtype=float)
        if array.shape != (len(TABLE),) or not np.isfinite(array).all():
            raise InputError.of("point of the search space", point, f"{len(TABLE)} finite numbers")
        return ParameterSet.from_array([row.from_unit(float(u)) for row, u in zip(TABLE, np.clip(array, 0.0, 1.0))])

    def difference(self, other: Space) -> str | None:
        """Say in one clause how ``other`` departs from this space; None where it does not."""
        if other.names != self.names:
            odd = sorted(set(other.names) ^ set(self.names)) or list(other.names)
            return f"its parameters differ from the table's at {', '.join(clipped(name) for name in odd[:4])}"
        for mine, theirs in zip(self.axes, other.axes):
            if mine != theirs:
                return (
                    f"{mine.name} runs from {theirs.low:g} to {theirs.high:g} ({theirs.scale}) there "
                    f"and from {mine.low:g} to {mine.high:g} ({mine.scale}) here"
                )
        return None


SPACE = Space.of_table()
Coordinate = Annotated[float, Field(ge=0.0, le=1.0)]


class Prior(Frozen):
    """What an earlier session learnt: mean and covariance in the unit cube, and where they come from."""

    space: Space
    mean: tuple[Coordinate, ...]
    covariance: tuple[tuple[float, ...], ...]
    learnt_from: str = Field(default="", max_length=2000)
    episodes: int = Field(default=0, ge=0)

    @model_validator(mode="after")
    def _usable(self) -> Prior:
        size = len(self.space.axes)
        if len(self.mean) != size:
            raise ValueError(f"mean has {len(self.mean)} values, must have {size}")
        if len(self.covariance) != size or any(len(row) != size for row in self.covariance):
            raise ValueError(f"covariance must have {size} rows of {size} values")
        matrix = np.array(self.covariance)
        largest = float(np.abs(matrix).max())
        if float(np.abs(matrix - matrix.T).max()) > SYMMETRY * largest:
            raise ValueError("covariance must be symmetric")
        least = float(np.linalg.eigvalsh(matrix).min())
        if least <= 1e-14 * max(largest, 1e-300):
            raise ValueError(f"covariance has the eigenvalue {least:.3g}, must be positive definite")
        return self

    @classmethod
    def of(cls, mean: FloatArray, covariance: FloatArray, learnt_from: str = "", episodes: int = 0) -> Prior:
        """Make a prior over the present table from arrays of shape (9,) and (9, 9)."""
        matrix = (covariance + covariance.T) / 2.0
        return cls(
            space=SPACE,
            mean=tuple(float(v) for v in mean),
            covariance=tuple(tuple(float(v) for v in row) for row in matrix),
            learnt_from=learnt_from,
            episodes=episodes,
        )

    @classmethod
    def parse(cls, content: object, source: str = "prior") -> Prior:
        """Make a prior from what a YAML file holds; InputError, one sentence, on whatever is wrong with it."""
        if not isinstance(content, Mapping):
            raise InputError(f"{source}: holds {shown(content)}, must hold the keys of a prior")
        try:
            prior = cls.model_validate(dict(content))
        except ValidationError as error:
            raise InputError.from_validation(error, source) from error
        except (np.linalg.LinAlgError, FloatingPointError, OverflowError) as error:
            raise InputError(f"{source}: covariance cannot be decomposed: {error}") from error
        departure = SPACE.difference(prior.space)
        if departure:
            raise InputError(f"{source}: learnt over another space: {departure}")
        return prior

    def widened(self, factor: float) -> Prior:
        """Return the prior with every standard deviation ``factor`` times as large."""
        return Prior.of(np.array(self.mean), np.array(self.covariance) * factor**2, self.learnt_from, self.episodes)

    def parameters(self) -> ParameterSet:
        """Return the set at the mean."""
        return self.space.from_unit(self.mean)

    def content(self) -> dict[str, Any]:
        """Return what ``parse`` takes, in plain types."""
        return self.model_dump(mode="json")


def dump_prior(prior: Prior) -> str:
    """Return the prior as YAML text with its keys explained."""
    return (
        "# A prior: mean and covariance over the parameters in the unit cube (0 = low, 1 = high, on each scale).\n"
        + yaml.safe_dump(prior.content(), sort_keys=False, default_flow_style=None, width=120)
    )
