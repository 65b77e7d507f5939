"""What follows from a session's state: at most one event at a time, a function of the state and the seed alone.

The order of things: search, generation by generation, until only the verdict's share of the floor time is left;
then the search's favourite is named challenger and meets the champion in pairs on layouts of their own; the verdict;
and another round where enough floor time is left. A search with a curriculum goes through its easier grades first.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from fieldnav_ros.model import Layout
from fieldnav_ros.tuning import events as ev
from fieldnav_ros.tuning.curriculum import STAGE_WIDENING, stage_over
from fieldnav_ros.tuning.imported import warm_start
from fieldnav_ros.tuning.schedule import Plan, alpha_of_round, make_plan
from fieldnav_ros.tuning.search import Search
from fieldnav_ros.tuning.space import SPACE
from fieldnav_ros.tuning.state import Batch, InService, Round, State

Draw = Callable[[str, int], Layout]  # (grade, seed) -> layout; must be a function of the two alone
ENGINE, ORDER, SEARCH_LAYOUTS, VERDICT_LAYOUTS = range(4)  # streams of randomness that never meet
ROLES = ("candidate", "control")
LARGEST_SEED = 2**53  # so that a seed survives JSON readers that hold numbers as doubles


def start_search(state: State) -> Search:
    """Return the engine before the stage's first generation.

    It starts at the stage's prior, else at the best of earlier recordings, else around the first set in service.
    """
    config = state.told
    seed = (config.seed, ENGINE, *([state.stage.number] if state.stage.number else []))
    prior = state.prior or warm_start(state.imported)
    if prior is not None:
        return Search.from_prior(prior, seed, config.population)
    return Search(SPACE.to_unit(state.initial.parameters), config.sigma, seed, config.population)


def plan_of(state: State) -> Plan:
    """Return the plan for the rest of the session."""
    return make_plan(
        state.told, state.times, state.floor_used_s, state.round_budget_s, state.round is not None,
        state.episodes_before,
    )  # fmt: skip


@dataclass(frozen=True)
class Decider:
    """Holds what decisions need beside the state: the engine brought up to the state's generations, and layouts."""

    search: Search
    draw: Draw

    def next(self, state: State) -> ev.Event | None:
        """Return the one event that is due, or None where the session waits for an outcome."""
        if state.config is None or state.ended is not None:
            return None
        if state.accepted is not None:
            return ev.ChampionChanged(set_id=state.accepted.set_id, parameters=state.accepted.parameters)
        if state.round is not None:
            return self._verdict(state, state.round)
        if state.batch is not None:
            return _close_generation(state, state.batch)
        return self._search(state)

    def _search(self, state: State) -> ev.Event:
        config, plan = state.told, plan_of(state)
        if state.rounds >= config.rounds:
            return ev.SessionEnded(reason=f"{state.rounds} of {config.rounds} verdicts reached")
        blocks = min(config.layouts, plan.search_episodes // (self.search.population + config.control))
        why = stage_over(state, plan, blocks) if state.stage.number < len(config.lead_in) else None
        if why is not None:
            return self._stage(state, why)
        if blocks:
            return self._generation(state, blocks)
        if plan.episodes_left < 2 * config.least_pairs:
            left = "too little floor time left for a verdict" if plan.episodes_left else "floor time used up"
            return ev.SessionEnded(reason=left)
        return self._challenger(state) or ev.SessionEnded(reason="too little floor time left for another round")

    def _stage(self, state: State, why: str) -> ev.StageBegun:
        config, number = state.told, state.stage.number + 1
        following = config.lead_in[number] if number < len(config.lead_in) else config
        learnt = self.search.prior(f"grade {state.stage.grade}", state.times.episodes)
        return ev.StageBegun(
            number=number,
            grade=following.grade,
            time_limit=following.time_limit,
            prior=learnt.widened(STAGE_WIDENING),
            reason=why,
        )

    def _challenger(self, state: State) -> ev.ChallengerNamed | None:
        if len(state.generations) > state.generations_before:
            parameters = SPACE.from_unit(self.search.favourite)
        elif state.prior is not None and not state.rounds:
            parameters = state.prior.parameters()
        else:
            return None
        if parameters == state.champion.parameters:
            return None
        number = state.rounds + 1
        return ev.ChallengerNamed(
            round=number,
            set_id=f"challenger-{state.challengers + 1}",
            parameters=parameters,
            alpha=alpha_of_round(state.told.alpha, number, state.told.rounds),
        )

    def _generation(self, state: State, blocks: int) -> ev.BatchOpened:
        number = state.next_batch
        sets = [
            ev.NamedSet(
                id=f"g{number}.{index + 1}",
                role="candidate",
                parameters=SPACE.from_unit(point),
                unit=tuple(float(u) for u in point),
            )
            for index, point in enumerate(self.search.ask())
        ]
        if state.told.control:
            sets.append(_named(state.champion, "control"))
        order = np.random.default_rng((state.told.seed, ORDER, number))
        places = [(int(s), block) for block in range(blocks) for s in order.permutation(len(sets))]
        return self._batch(state, "search", sets, blocks, places)

    def _pairs(self, state: State, current: Round, pairs: int) -> ev.BatchOpened:
        sets = [_named(state.champion, "champion"), _named(current.challenger, "challenger")]
        before = current.evidence.pairs
        # who runs first alternates, so that what changes between the two runs of a pair favours neither
        places = [(first ^ half, pair) for pair in range(pairs) for first in [(before + pair) % 2] for half in (0, 1)]
        return self._batch(state, "verdict", sets, pairs, places)

    def _batch(
        self, state: State, phase: ev.Phase, sets: list[ev.NamedSet], layouts: int, places: list[tuple[int, int]]
    ) -> ev.BatchOpened:
        stream = SEARCH_LAYOUTS if phase == "search" else VERDICT_LAYOUTS
        seeds = np.random.SeedSequence((state.told.seed, stream, state.next_batch)).generate_state(layouts, np.uint64)
        return ev.BatchOpened(
            phase=phase,
            batch=state.next_batch,
            sets=tuple(sets),
            layouts=tuple(self.draw(state.stage.grade, int(seed) % LARGEST_SEED) for seed in seeds),
            runs=tuple(
                ev.Run(episode_id=state.next_episode + place, set_index=chosen, layout_index=layout)
                for place, (chosen, layout) in enumerate(places)
            ),
        )

    def _verdict(self, state: State, current: Round) -> ev.Event | None:
        if state.batch is not None:
            compared = _compare(state.batch, current)
            if compared:
                return compared
        if current.evidence.accepted:
            return _reached(current, "accept", "evidence passed the threshold")
        if current.against.accepted:
            return _reached(current, "keep", "the challenger was shown to be worse")
        plan = plan_of(state)
        if plan.used_up:
            return _reached(current, "keep", "floor time used up")
        batch = state.batch
        if batch is not None:
            between_pairs = len(batch.begun()) == len(batch.compared)
            if len(batch.compared) < len(batch.opened.layouts) and (not between_pairs or plan.episodes_left >= 2):
                return None
        pairs = min(state.told.pairs_at_once, plan.episodes_left // 2)
        return self._pairs(state, current, pairs) if pairs else _reached(current, "keep", "floor time used up")


def stopped(state: State, reason: str) -> list[ev.Event]:
    """Return what ends the session now: a verdict in progress is ``keep``."""
    verdict = [_reached(state.round, "keep", reason)] if state.round is not None else []
    return [*verdict, ev.SessionEnded(reason=reason)]


def _named(item: InService, role: ev.Role) -> ev.NamedSet:
    return ev.NamedSet(id=item.set_id, role=role, parameters=item.parameters)


def _close_generation(state: State, batch: Batch) -> ev.GenerationClosed | None:
    """Close when all have run; early, after whole blocks, where the next block would cut into the verdict's time."""
    blocks = len(batch.complete())
    if blocks < len(batch.opened.layouts):
        plan = plan_of(state)
        between_blocks = bool(blocks) and len(batch.begun()) == blocks
        too_long = len(batch.opened.sets) > plan.search_episodes
        if not plan.used_up and not (between_blocks and too_long):
            return None
    means = np.mean(batch.layout_costs(), axis=0) if blocks else np.full(len(batch.opened.sets), np.nan)
    costs = {role: [float(mean) for mean, item in zip(means, batch.opened.sets) if item.role == role] for role in ROLES}
    return ev.GenerationClosed(
        batch=batch.opened.batch,
        blocks=blocks,
        costs=tuple(costs["candidate"]) if blocks else (),
        control=costs["control"][0] if blocks and costs["control"] else None,
    )


def _compare(batch: Batch, current: Round) -> ev.PairCompared | None:
    for index, (champion, challenger) in zip(batch.complete(), batch.layout_costs()):
        if index not in batch.compared:
            difference = champion - challenger
            return ev.PairCompared(
                round=current.number,
                pair=current.evidence.pairs + 1,
                layout_index=index,
                champion_cost=champion,
                challenger_cost=challenger,
                difference=difference,
                log_evidence=current.evidence.after(difference).log_e,
            )
    return None


def _reached(current: Round, verdict: ev.Decision, reason: str) -> ev.VerdictReached:
    evidence = current.evidence
    return ev.VerdictReached(
        round=current.number,
        verdict=verdict,
        challenger_id=current.challenger.set_id,
        pairs=evidence.pairs,
        mean_difference=evidence.mean,
        log_evidence=evidence.log_e,
        log_threshold=evidence.log_threshold,
        reason=reason,
    )
