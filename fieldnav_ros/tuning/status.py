"""Where a session stands, in plain words and numbers. Nothing is decided here."""

from __future__ import annotations

from fieldnav_ros.tuning.decide import plan_of
from fieldnav_ros.tuning.state import State

Summary = dict[str, str | float | int | None]


def phase_of(state: State) -> str:
    """Return one word for where the session stands."""
    if state.config is None:
        return "waiting"
    if state.ended is not None:
        return "ended"
    if state.released:
        return "released"
    if state.paused:
        return "paused"
    return "verdict" if state.round else "search"


def summary_of(state: State) -> Summary:
    """Return plain numbers for a status line; times and costs in s."""
    plan, current, ended = plan_of(state), state.round, state.ended is not None
    evidence = current.evidence if current else None
    return {
        "phase": phase_of(state),
        "grade": state.stage.grade,
        "episodes_done": state.times.episodes,
        "episodes_left": 0 if ended else plan.episodes_left,
        "search_episodes_left": 0 if ended else plan.search_episodes,
        "verdict_episodes_left": 0 if ended else plan.verdict_episodes,
        "floor_time_used_s": state.floor_used_s,
        "floor_time_left_s": plan.floor_left_s,
        "mean_episode_s": plan.mean_episode_s,
        "mean_reset_s": plan.mean_reset_s,
        "generations": len(state.generations),
        "champion": state.champion.set_id,
        "champion_cost": state.champion_costs.mean,
        "challenger": current.challenger.set_id if current else None,
        "challenger_cost": current.challenger_costs.mean if current else None,
        "pairs": evidence.pairs if evidence else 0,
        "mean_difference": evidence.mean if evidence else None,
        "log_evidence": evidence.log_e if evidence else None,
        "log_threshold": evidence.log_threshold if evidence else None,
        "verdicts": state.rounds,
        "last_verdict": state.verdict.verdict if state.verdict else None,
        "ended": state.ended,
    }
