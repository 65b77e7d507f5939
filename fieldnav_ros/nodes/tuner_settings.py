"""The parameters of the tuner node: one table from which they are declared and config/tuner.yaml is tested."""

from __future__ import annotations

from fieldnav_ros.nodes.base import YARD
from fieldnav_ros.nodes.convert import POSE_TYPES
from fieldnav_ros.nodes.declare import Setting

SETTINGS: tuple[Setting, ...] = (
    YARD,
    Setting("mode", "tune", "tune, or observe: change nothing, and score the stack's own goals for the record",
            choices=("tune", "observe")),
    Setting("ledger", "session.ledger", "path of the session's ledger; an existing one is gone on with"),
    Setting("champion_file", "champion.yaml", "path that the champion is written to, as a ROS parameter file"),
    Setting("initial", "", "ROS parameter file with the set to begin with; empty: the table's defaults"),
    Setting("prior", "", "prior from an earlier session or from preparing at home; empty: none"),
    Setting("guidance", "guidance_node", "name of the guidance node, relative to this node's namespace"),
    Setting("grade", "moving", "grade of the yard that layouts are drawn from"),
    Setting("seed", 0, "seed of everything random in the session", 0, 2**31),
    Setting("floor_time", 20.0, "floor time that the session may use, in min, resets included", 0.1, 10_000.0),
    Setting("floor_clock", "wall", "wall: floor time as the clock runs; pose: as the poses' stamps tell it, for "
            "simulators at another speed; episode: the outcomes' own times and the yard's reset time, for those that "
            "are not paced", choices=("wall", "pose", "episode")),
    Setting("rounds", 1, "most verdicts in the session; more share the 5 % error among them", 1, 16),
    Setting("verdict_share", 0.35, "share of the floor time kept for the verdict", 0.05, 0.95),
    Setting("layouts", 4, "layouts of a generation, the same for all its sets", 1, 100),
    Setting("first_step", 0.15, "first step of a search without a prior, as a share of each range", 0.01, 0.5),
    Setting("place", "", "where the session is held, for the record"),
    Setting("begin", False, "begin at once, without waiting for the service ~/begin"),
    Setting("outcomes", "judge", "whose outcomes count: judge (judge_node), referee (the stack's own) or operator",
            choices=("judge", "referee", "operator")),
    Setting("outcome_deadline", 10.0, "s of waiting beyond the time limit, before an episode is run again", 0.5, 600.0),
    Setting("return", "simulator", "how the robot gets to its next start: simulator (it is put there), drive (by "
            "itself, with the champion), operator (by hand)", choices=("simulator", "drive", "operator")),
    Setting("starts", "region", "region: starts are drawn from the yard's start region; marks: from its marks",
            choices=("region", "marks")),
    Setting("drive_limit", 15.0, "s for a drive to the next start, before the operator is asked", 1.0, 600.0),
    Setting("start_slack", 0.10, "m by which the robot may be off its start; no more than the judge's", 0.005, 5.0),
    Setting("start_turn", 0.35, "rad by which it may be turned away from it", 0.01, 3.15),
    Setting("start_rest", 1.0, "s for which it must stand there before it is sent off", 0.1, 60.0),
    Setting("pose_type", "PoseStamped", "message type of the topic pose", choices=tuple(POSE_TYPES)),
    Setting("frame", "", "frame of the poses; empty: as in the yard file"),
)  # fmt: skip
