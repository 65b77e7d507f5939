"""The JSON that travels in std_msgs/String on ``episode/request``, ``episode/outcome`` and ``tuner/status``.

Everything from outside passes ``decode_request``, ``decode_outcome`` or ``decode_status``; what they return is
finite, bounded and complete. ``python -m fieldnav_ros.nodes.payloads DIRECTORY`` writes the JSON Schemas.
"""

from __future__ import annotations

import json
import sys
from pathlib import Path
from typing import Annotated, Any, Literal, TypeVar

from pydantic import ConfigDict, Field, TypeAdapter, ValidationError, model_validator

from fieldnav_ros.errors import InputError, WorkError
from fieldnav_ros.incoming import LARGEST_COORDINATE, LARGEST_SPEED
from fieldnav_ros.model import Frozen, Layout, Outcome, OutcomeKind, Pose
from fieldnav_ros.yard import Arrival

LARGEST_PAYLOAD = 64 * 1024

Name = Annotated[str, Field(pattern=r"^[A-Za-z0-9][A-Za-z0-9._-]{0,79}$", description="letters, digits, . _ -")]
FrameName = Annotated[str, Field(min_length=1, max_length=80)]
Sentence = Annotated[str, Field(max_length=1000)]
Count = Annotated[int, Field(ge=0, le=10**9)]
Seconds = Annotated[float, Field(ge=0, le=1e9)]


class Payload(Frozen):
    """Base of all payloads: a schema version (1 where it is left out) and no unknown keys."""

    model_config = ConfigDict(frozen=True, extra="forbid", allow_inf_nan=False, populate_by_name=True)
    schema_version: Literal[1] = Field(default=1, alias="schema", description="version of this payload")


Source = Literal["judge", "referee", "operator"]


class EpisodeRequested(Payload):
    """What every request that is judged holds; ``RunEpisode`` and ``ObserveEpisode`` say what moves the robot."""

    episode: Name = Field(description="identifies the episode; the outcome repeats it")
    set: Name = Field(description="id of the parameter set in service")
    layout: Layout
    frame: FrameName = Field(description="frame of all poses in the layout")
    time_limit: float = Field(gt=0, le=600, description="s until the episode counts as timed out")
    arrival: Arrival = Field(default=Arrival(), description="how close counts as arrived (m, rad)")
    grade: str = Field(default="", max_length=80, description="the yard's grade, for the record")
    source: str = Field(default="", max_length=80, description="who asks, for the record")
    outcomes: Source | None = Field(default=None, description="whose outcome ends the episode; null: anybody's")

    @model_validator(mode="after")
    def _within_reason(self) -> EpisodeRequested:
        layout = self.layout
        for name, item in (("start", layout.start), ("goal", layout.goal), *_named(layout)):
            _check_bounds(f"layout.{name}", item)
        return self

    def ended_by(self, outcome: EpisodeOutcome) -> bool:
        """Tell whether an outcome ends this episode: it is about it, and from whom the request names."""
        return outcome.episode == self.episode and self.outcomes in (None, outcome.source)


class RunEpisode(EpisodeRequested):
    """``episode/request``: put everything at the layout's start and run one episode to its goal."""

    action: Literal["run"] = "run"


class ObserveEpisode(EpisodeRequested):
    """``episode/request``: judge and record the way to a goal that somebody else gave; guidance changes nothing."""

    action: Literal["observe"] = "observe"


class DriveTo(Payload):
    """``episode/request``: drive to the next start and stand there; nobody judges it. A word to stop ends it."""

    action: Literal["drive"] = "drive"
    episode: Name = Field(description="names the drive")
    goal: Pose
    frame: FrameName = Field(description="frame of the goal")
    time_limit: float = Field(gt=0, le=600, description="s after which guidance gives the drive up")
    source: str = Field(default="", max_length=80, description="who asks, for the record")

    @model_validator(mode="after")
    def _within_reason(self) -> DriveTo:
        _check_bounds("goal", self.goal)
        return self


class StopEpisode(Payload):
    """``episode/request``: end whatever episode runs; the robot stops. A word to stop never fails on a name."""

    action: Literal["stop"] = "stop"
    episode: Name = Field(description="the episode meant, for the record")
    source: str = Field(default="", max_length=80, description="who asks, for the record")


Request = RunEpisode | ObserveEpisode | DriveTo | StopEpisode
EpisodeRequest = Annotated[Request, Field(discriminator="action")]


class EpisodeOutcome(Payload):
    """``episode/outcome``: how an episode ended, once."""

    episode: Name
    kind: OutcomeKind
    time: Seconds = Field(description="s from the start of the episode to its end")
    clearance: float | None = Field(default=None, description="least gap to an obstacle or wall in m; null: unknown")
    stamp: float = Field(description="time of the end in s, on the clock of the poses' stamps")
    source: Source
    detail: Sentence = ""

    def outcome(self) -> Outcome:
        """Return what the pure parts know as an outcome."""
        return Outcome(kind=self.kind, time=self.time, clearance=self.clearance)


class PastEpisode(Frozen):
    """One of the last episodes, without its set: who may take episodes back must not know whose they were."""

    episode: Count
    kind: OutcomeKind
    time: Seconds = Field(description="s from the start of the episode to its end")
    source: str = Field(max_length=2000)


class TunerStatus(Payload):
    """``tuner/status``: where the session stands, for the operator's terminal. Optional where the tuner cannot say."""

    state: str = Field(min_length=1, max_length=40, description="what the tuner does now, one word")
    phase: str = Field(max_length=40, description="part of the session")
    episodes_done: Count
    episodes_left: Count
    floor_time_left: float = Field(description="s of floor time left; negative when overdrawn")
    champion: Name
    champion_cost: float | None = None
    challenger: Name | None = None
    challenger_cost: float | None = None
    evidence: float | None = Field(default=None, description="evidence for the challenger so far")
    threshold: float | None = Field(default=None, description="evidence needed to accept it")
    message: Sentence = ""
    warnings: tuple[Sentence, ...] = Field(default=(), max_length=20)
    mode: Literal["tune", "observe"] = "tune"
    todo: Sentence = Field(default="", description="what whoever stands beside the floor should do now")
    floor_time: Seconds | None = Field(default=None, description="s of floor time that the session may use")
    search_left: Count | None = Field(default=None, description="episodes planned for the search")
    verdict_left: Count | None = Field(default=None, description="episodes kept for the verdict")
    mean_episode: Seconds | None = Field(default=None, description="s that an episode takes, as learnt so far")
    mean_reset: Seconds | None = Field(default=None, description="s that a reset takes, as learnt so far")
    pairs: Count | None = Field(default=None, description="pairs that champion and challenger have run")
    verdict: Sentence = Field(default="", description="the last verdict, in words")
    in_service: Name | None = Field(default=None, description="set that guidance holds, read back; null: unconfirmed")
    episode: Name | None = Field(default=None, description="episode that runs, as in its request")
    episode_time: Seconds | None = Field(default=None, description="s since it was asked for")
    outcomes: Source = Field(default="judge", description="whose outcomes count")
    returns: Literal["simulator", "drive", "operator"] = "simulator"
    pose_age: Seconds | None = Field(default=None, description="s since the newest pose; null: not watched or none yet")
    last: tuple[PastEpisode, ...] = Field(default=(), max_length=10, description="last episodes, newest first")


_BOUNDS = {
    "x": LARGEST_COORDINATE, "y": LARGEST_COORDINATE, "yaw": LARGEST_COORDINATE,
    "vx": LARGEST_SPEED, "vy": LARGEST_SPEED, "radius": LARGEST_COORDINATE,
}  # fmt: skip
_REQUEST: TypeAdapter[Request] = TypeAdapter(EpisodeRequest)
_OUTCOME = TypeAdapter(EpisodeOutcome)
_STATUS = TypeAdapter(TunerStatus)
_SCHEMAS: dict[str, TypeAdapter[Any]] = {
    "episode_request": _REQUEST, "episode_outcome": _OUTCOME, "tuner_status": _STATUS,
}  # fmt: skip
Decoded = TypeVar("Decoded")


def encode(payload: Request | EpisodeOutcome | TunerStatus) -> str:
    """Return the payload as JSON; WorkError where it is larger than a receiver accepts."""
    text = payload.model_dump_json(by_alias=True)
    if len(text.encode()) > LARGEST_PAYLOAD:
        raise WorkError(f"{type(payload).__name__} is {len(text.encode())} bytes, may be at most {LARGEST_PAYLOAD}")
    return text


def decode_request(text: str) -> Request:
    """Return the request in ``text``; InputError in one sentence where it is none."""
    return _decode(_REQUEST, text, "episode/request")


def decode_outcome(text: str) -> EpisodeOutcome:
    """Return the outcome in ``text``; InputError in one sentence where it is none."""
    return _decode(_OUTCOME, text, "episode/outcome")


def decode_status(text: str) -> TunerStatus:
    """Return the tuner's status in ``text``; InputError in one sentence where it is none."""
    return _decode(_STATUS, text, "tuner/status")


def schemas() -> dict[str, dict[str, Any]]:
    """Return the JSON Schema (draft 2020-12) of each payload under the name of its file without suffix."""
    return {
        name: {
            "$schema": "https://json-schema.org/draft/2020-12/schema",
            "$id": f"urn:fieldnav_ros:{name}:1",
            "title": name,
            **_with_action(adapter.json_schema()),
        }
        for name, adapter in _SCHEMAS.items()
    }


def _with_action(schema: dict[str, Any]) -> dict[str, Any]:
    """Require the action, which has a default only for those who make requests in Python."""
    for part in schema.get("$defs", {}).values():
        if "action" in part.get("properties", {}):
            part["required"] = ["action", *part["required"]]
    return schema


def write_schemas(folder: Path) -> None:
    """Write ``schemas()`` into the folder, one file each."""
    for name, schema in schemas().items():
        (folder / f"{name}.json").write_text(json.dumps(schema, indent=2) + "\n", encoding="utf-8")


def _check_bounds(name: str, item: Any) -> None:
    for key, limit in _BOUNDS.items():
        value = getattr(item, key, 0.0)
        if abs(value) > limit:
            raise ValueError(f"{name}.{key} is {value:g}, must be from {-limit:g} to {limit:g}")


def _named(layout: Layout) -> list[tuple[str, Any]]:
    return [(f"obstacles.{index}", obstacle) for index, obstacle in enumerate(layout.obstacles)]


def _decode(adapter: TypeAdapter[Decoded], text: str, source: str) -> Decoded:
    # Characters first: measuring bytes of a huge string would already cost its size in memory.
    if len(text) > LARGEST_PAYLOAD or len(text.encode(errors="replace")) > LARGEST_PAYLOAD:
        raise InputError(f"{source}: message is longer than {LARGEST_PAYLOAD} bytes")
    try:
        return adapter.validate_json(text.encode(errors="replace"), strict=True)
    except ValidationError as error:
        found = error.errors(include_url=False)[0]
        if found["type"] == "json_invalid":
            raise InputError(f"{source}: not readable as JSON: {found['ctx']['error']}") from error
        if found["type"].startswith("union_tag"):
            raise InputError(f"{source}: action must be 'run', 'observe', 'drive' or 'stop'") from error
        raise InputError.from_validation(error, source) from error


if __name__ == "__main__":
    write_schemas(Path(sys.argv[1]))
