"""Intervals from the likelihood itself, where a parameter sits at a bound or is lopsided.

One searched number is held, all the others are fitted anew, and the interval ends where what
is left over has grown by as much as chance explains (profile likelihood: Venzon and
Moolgavkar 1988). It is one-sided where the number is, and has no end where the log gives none.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from fitters.search import approach

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from fitters.estimate import Estimate
    from fitters.noise import Noise
    from fitters.problem import Problem

#: First step away from the estimate, in standard errors, and how it grows [1].
_FIRST_STEP = 0.5
_GROWTH = 1.7
#: Steps until the log is said to give no end: 0.5 times 1.7 to this power in standard errors.
_MOST_STEPS = 12
#: The end is closed in on by so many halvings.
_HALVINGS = 6
#: A searched logarithm is followed no farther than this: a factor of about 150 [1].
_FARTHEST_LOG = 5.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Ends:
    """Where an interval ends, and the first linear factor there.

    Attributes
    ----------
    low, high : float
        Of the searched number or the dead time; infinite where the log gives no end.
    gain_low, gain_high : float
        First linear factor of the shapes at each end.
    """

    low: float
    high: float
    gain_low: float
    gain_high: float


def ends_of(
    problem: Problem, estimate: Estimate, noise: Noise, *, held: int, stderr: float, quantile: float
) -> Ends:
    """Find where the interval of one number ends.

    Parameters
    ----------
    problem : Problem
        What the estimate was settled on.
    estimate : Estimate
    noise : Noise
        Of what is left over.
    held : int
        Place of the number among the searched ones; one past them for the dead time.
    stderr : float
        Its standard error by the curvature, a first idea of its scale.
    quantile : float
        Standard errors that an interval of a well-known number would reach [1].
    """
    allowed = (quantile * noise.sd / problem.spread) ** 2
    walker = _Walker(problem=problem, estimate=estimate, held=held, allowed=allowed)
    low, gain_low = walker.end(-1.0, stderr)
    high, gain_high = walker.end(1.0, stderr)
    return Ends(low=low, high=high, gain_low=gain_low, gain_high=gain_high)


@dataclass(frozen=True, kw_only=True)
class _Walker:
    problem: Problem
    estimate: Estimate
    held: int
    allowed: float

    def end(self, direction: float, stderr: float) -> tuple[float, float]:
        """Walk away from the estimate until the misfit is beyond chance; give place and gain there."""
        point = np.append(self.estimate.search, max(self.estimate.dead_time, 0.0))
        start, lowest = float(point[self.held]), self._cost(point)
        bound = self._bound(direction, start)
        scale = stderr if np.isfinite(stderr) and stderr > 0.0 else 1.0
        inside, step = start, _FIRST_STEP * scale
        for _ in range(_MOST_STEPS):
            trial = start + direction * step
            trial = max(trial, bound) if direction < 0.0 else min(trial, bound)
            moved, cost = self._at(point, trial)
            if cost > lowest + self.allowed:
                return self._closed_in(point, inside, trial, lowest)
            inside, point = trial, moved
            if trial == bound:
                break
            step *= _GROWTH
        at_zero = self.held == self.estimate.structure.searched and direction < 0.0
        return (0.0 if at_zero else direction * np.inf), self._gain(point)

    def _closed_in(
        self, point: NDArray[np.float64], inside: float, outside: float, lowest: float
    ) -> tuple[float, float]:
        for _ in range(_HALVINGS):
            middle = 0.5 * (inside + outside)
            moved, cost = self._at(point, middle)
            if cost > lowest + self.allowed:
                outside = middle
            else:
                inside, point = middle, moved
        return 0.5 * (inside + outside), self._gain(point)

    def _bound(self, direction: float, start: float) -> float:
        if self.held < self.estimate.structure.searched:
            return start + direction * _FARTHEST_LOG
        return 0.0 if direction < 0.0 else self.problem.longest_dead_time

    def _at(self, near: NDArray[np.float64], value: float) -> tuple[NDArray[np.float64], float]:
        """Fit the others anew from a point nearby."""
        point = near.copy()
        point[self.held] = value
        end = approach(self.problem, self.estimate.structure, (point[:-1], float(point[-1])), held=self.held)
        return np.append(end.search, end.dead_time), end.cost

    def _cost(self, point: NDArray[np.float64]) -> float:
        costs = self.problem.costs(self.estimate.structure, point[:-1], point[-1:])
        return float(costs[0])

    def _gain(self, point: NDArray[np.float64]) -> float:
        factors = self.problem.factors(self.estimate.structure, point[:-1], float(point[-1]))
        return float(factors[0]) * self.problem.spread
