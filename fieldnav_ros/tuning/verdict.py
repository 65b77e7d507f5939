"""The acceptance test alone: is the challenger better than the champion, however often one looks?

An e-process for the mean of a bounded variable by betting (Waudby-Smith and Ramdas, "Estimating means of bounded
random variables by betting", JRSS-B 86(1), 2024). For paired differences d_i = cost of champion - cost of
challenger in [-B, B] and the hypothesis that their mean is not above 0 given the past, each fixed stake f in
[0, 1) makes the wealth W_n(f) = prod_i (1 + f d_i / B) a nonnegative supermartingale that starts at 1; so is any
average of such wealths over f under weights chosen beforehand (the mixture of Cover's universal portfolio,
Mathematical Finance 1(1), 1991). Ville's inequality: the chance that it ever reaches 1 / alpha is at most alpha.
So the test may be looked at after every pair, and stopped for whatever reason.

The average over a fixed grid of stakes is used, with most weight on large ones, and not one stake learnt from the
pairs so far (aGRAPA in the paper). Costs run from 1.2 to 4 s with failures at 12 and 20 s, so the best stake is
large; measured on such differences, accepted within 20 pairs: 0.56 against aGRAPA's 0.45 where a mean of 7.3 s falls
to 2.6 s, 0.78 against 0.69 from 11 s to 4.7 s. There is a floor that no test gets under: a failure of the challenger
in one pair of twenty costs 1 s, and n pairs without one do not rule out a share of 3 / n (the rule of three). A
gain of tenths of a second therefore takes hundreds of pairs.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from fieldnav_ros.errors import InputError
from fieldnav_ros.parameters import FloatArray

STAKES: FloatArray = np.linspace(0.05, 0.95, 19)  # shares of the wealth that a difference of -B would lose
LOG_WEIGHTS: FloatArray = np.log(STAKES**8 / (STAKES**8).sum())


@dataclass(frozen=True)
class Evidence:
    """Evidence for "the mean difference is above 0" after ``pairs`` differences; ``after`` adds one.

    ``bound`` is B: no difference is larger in size. ``alpha`` bounds the chance of a false acceptance.
    """

    bound: float
    alpha: float
    pairs: int = 0
    total: float = 0.0
    log_wealths: tuple[float, ...] = (0.0,) * len(STAKES)

    def __post_init__(self) -> None:
        if not (math.isfinite(self.bound) and self.bound > 0):
            raise InputError.of("bound of the differences", self.bound, "a finite number > 0")
        if not 0 < self.alpha < 1:
            raise InputError.of("alpha", self.alpha, "above 0 and below 1")

    def after(self, difference: float) -> Evidence:
        """Return the evidence with one more difference; InputError where it lies outside [-bound, bound]."""
        share = difference / self.bound
        if not -1.0 <= share <= 1.0:
            raise InputError.of("difference of costs", difference, f"from {-self.bound:g} to {self.bound:g}")
        wealths = np.asarray(self.log_wealths) + np.log1p(STAKES * share)
        return replace(self, pairs=self.pairs + 1, total=self.total + difference, log_wealths=tuple(wealths.tolist()))

    @property
    def log_e(self) -> float:
        """Natural logarithm of the e-value: 0 at the start, growing as the challenger proves better."""
        terms = np.asarray(self.log_wealths) + LOG_WEIGHTS
        top = float(terms.max())
        return top + math.log(float(np.exp(terms - top).sum()))

    @property
    def e_value(self) -> float:
        """The e-value itself; infinity where it is too large for a float."""
        return math.exp(self.log_e) if self.log_e < 700 else math.inf

    @property
    def log_threshold(self) -> float:
        """What ``log_e`` must reach for acceptance: log(1 / alpha)."""
        return -math.log(self.alpha)

    @property
    def accepted(self) -> bool:
        """Whether the evidence reaches 1 / alpha now."""
        return self.log_e >= self.log_threshold

    @property
    def mean(self) -> float | None:
        """Mean difference so far; None before the first."""
        return self.total / self.pairs if self.pairs else None
