"""The search engine: CMA-ES from ``cma`` in the unit cube, repeatable from its recorded generations.

N. Hansen and A. Ostermeier, "Completely derandomized self-adaptation in evolution strategies", Evolutionary
Computation 9(2), 2001. Warm start: M. Nomura et al., "Warm starting CMA-ES for hyperparameter optimization",
AAAI 2021: the prior's mean and covariance become those of the first generation.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any, NamedTuple

import cma
import numpy as np

from fieldnav_ros.parameters import FloatArray
from fieldnav_ros.tuning.space import Prior

EDGE = 1e-3  # a start on a bound is taken this far inside, where the boundary transformation has a slope


SHARPENING = 2.0  # power of the inverse variance that a mean counts with


class Generation(NamedTuple):
    """What the engine was told: points of the unit cube as it proposed them, and their costs."""

    points: tuple[tuple[float, ...], ...]
    costs: tuple[float, ...]


class Search:
    """Ask for a generation of points, tell their costs, again. Draws depend on seed and generation alone."""

    def __init__(self, start: FloatArray, sigma: float, seed: Sequence[int], population: int | None = None) -> None:
        """Start at a point of the unit cube, shape (9,), with step size ``sigma``; ``seed`` is a list of words."""
        self._seed = tuple(seed)
        self._generator = np.random.default_rng(self._seed)
        self.told: tuple[Generation, ...] = ()
        self._means: list[FloatArray] = []
        self._spreads: list[float] = []  # the distributions' mean variances, one for each mean
        self._asked: list[FloatArray] | None = None
        options: dict[str, Any] = {
            "bounds": [0.0, 1.0],
            "randn": self._normal,
            "seed": math.nan,  # "do nothing": numpy's global generator stays untouched
            "verbose": -9,
            "verb_log": 0,
            "verb_disp": 0,
        }
        if population is not None:
            options["popsize"] = population
        self._engine = cma.CMAEvolutionStrategy(np.clip(start, EDGE, 1.0 - EDGE), sigma, options)

    @classmethod
    def from_prior(cls, prior: Prior, seed: Sequence[int], population: int | None = None) -> Search:
        """Start from a prior's mean and covariance."""
        covariance = np.array(prior.covariance)
        sigma = math.exp(np.linalg.slogdet(covariance)[1] / (2 * len(covariance)))
        search = cls(np.array(prior.mean), sigma, seed, population)
        sampler = search._engine.sm
        sampler.C = covariance / sigma**2
        sampler._decompose_C()  # the library has no public way to start from a full covariance
        search._engine._updateBDfromSM(sampler)
        return search

    @property
    def population(self) -> int:
        """Points per generation."""
        return int(self._engine.popsize)

    @property
    def mean(self) -> FloatArray:
        """The distribution's mean in the unit cube, shape (9,)."""
        favourite: FloatArray = np.clip(np.asarray(self._engine.result.xfavorite, dtype=float), 0.0, 1.0)
        return favourite

    @property
    def favourite(self) -> FloatArray:
        """The point to go on with: an average of the means after the later half of the generations, shape (9,).

        Under noise a single mean wanders; averaging the iterates evens that out (Polyak and Juditsky, SIAM J.
        Control and Optimization 30(4), 1992). Where the search converges its last means are the best ones by far:
        each counts with a power of the inverse of its distribution's variance. Measured on COCO in dimension 10
        with 600 evaluations (``test/benchmark/coco.py``), geometric means of the regret over that of the last mean:
        bbob-noisy 0.47, bbob 1.05; over fewer problems equal weights had 1.21 and 1.87, these 0.77 and 1.00.
        """
        if not self._means:
            return self.mean
        half = len(self._means) // 2
        spreads = np.array(self._spreads[half:])
        return np.asarray(np.average(self._means[half:], axis=0, weights=(spreads.min() / spreads) ** SHARPENING))

    @property
    def covariance(self) -> FloatArray:
        """The distribution's covariance in the unit cube (before it is folded at the bounds), shape (9, 9)."""
        scale = np.asarray(self._engine.sigma_vec.scaling, dtype=float) * np.ones(len(self._engine.mean))
        return np.asarray(self._engine.sigma**2 * self._engine.sm.covariance_matrix * np.outer(scale, scale))

    def ask(self) -> list[FloatArray]:
        """Return the generation's points, shape (9,) each; the same ones until costs are told."""
        if self._asked is None:
            self._generator = np.random.default_rng((*self._seed, len(self.told)))
            self._asked = [np.clip(point, 0.0, 1.0) for point in self._engine.ask()]
        return list(self._asked)

    def prior(self, learnt_from: str, episodes: int) -> Prior:
        """Return what has been learnt so far, for a later search."""
        return Prior.of(self.favourite, self.covariance, learnt_from, episodes)

    def tell(self, generation: Generation) -> None:
        """Take the costs of a generation (smaller is better).

        Recorded points win over those that this engine would propose (another library version, another
        machine's linear algebra): the search then goes on from what was really run.
        """
        asked = self.ask()
        recorded = [np.array(point) for point in generation.points]
        same = len(asked) == len(recorded) and all(np.array_equal(a, r) for a, r in zip(asked, recorded))
        self._engine.tell(asked if same else recorded, list(generation.costs))
        self.told = (*self.told, generation)
        self._means.append(self.mean)
        self._spreads.append(float(np.trace(self.covariance)))
        self._asked = None

    def _normal(self, rows: int, columns: int) -> FloatArray:
        return self._generator.standard_normal((rows, columns))
