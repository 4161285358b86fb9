"""Where to start the search: a grid over the searched numbers and the dead time."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from fitters.problem import Problem
    from fitters.structures.base import Structure

#: Rows the grid looks at; enough to tell good starts from bad ones.
_COARSE_ROWS = 64
#: Dead times tried, from none to most of the time left after the first move.
_DEAD_TIMES = 10
#: Groups of dead times that each send their best: one valley often hides another.
_GROUPS = 3
#: More of them for a structure with a zero, which can pass for dead time.
_MORE_WITH_ZERO = 2
#: Moves the grid looks at.
_COARSE_MOVES = 8
#: Relative size of what keeps a nearly singular two-by-two system solvable [1].
_RIDGE = 1e-10

Start = tuple["NDArray[np.float64]", float]


def coarse_starts(problem: Problem, structure: Structure) -> list[Start]:
    """Try a grid on a thinned record and keep the best from each group of dead times.

    Parameters
    ----------
    problem : Problem
    structure : Structure

    Returns
    -------
    list of ((k,) ndarray, float)
        Searched numbers and dead time [s], the most promising first.
    """
    coarse = problem.sketched(_COARSE_ROWS, _COARSE_MOVES)
    interval = problem.data.interval
    longest = max(0.8 * problem.longest_dead_time, 2.0 * interval)
    dead_times = np.concatenate([[0.3 * interval], np.geomspace(interval, longest, _DEAD_TIMES - 1)])
    searches = [np.asarray(q, dtype=float) for q in structure.starts(problem.data.span, interval)]
    costs = np.array([_costs_at_once(coarse, structure, q, dead_times) for q in searches])
    winners = np.argmin(costs, axis=0)
    lowest = costs.min(axis=0)
    groups = np.array_split(np.arange(_DEAD_TIMES), _GROUPS + _MORE_WITH_ZERO * (structure.gains - 1))
    best = sorted((int(group[np.argmin(lowest[group])]) for group in groups), key=lambda i: lowest[i])
    return [(searches[winners[i]], float(dead_times[i])) for i in best]


def _costs_at_once(
    problem: Problem, structure: Structure, search: NDArray[np.float64], dead_times: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Give the sum of squares at all dead times from one evaluation of the shapes."""
    held = problem.held
    tau = held.t - held.at[:, None] - dead_times[:, None, None]
    weight = (tau > 0.0) * held.size[:, None]
    value = structure.shapes(np.maximum(tau, 0.0), search).value
    regressors = np.einsum("djn,rdjn->drn", weight, value)
    if held.settling_from is not None:
        before = structure.shapes(held.t - held.settling_from, search).value[:1]
        regressors = np.concatenate(
            [regressors, np.broadcast_to(before, (dead_times.size, *before.shape))], axis=1
        )
    regressors = problem.without_level(regressors)
    size = np.sqrt(np.einsum("drn,drn->dr", regressors, regressors))
    regressors /= np.maximum(size, 1e-300)[..., None]
    right = regressors @ problem.pv
    gram = regressors @ regressors.swapaxes(1, 2) + _RIDGE * np.eye(regressors.shape[1])
    factors = np.linalg.solve(gram, right[..., None])[..., 0]
    return np.asarray(problem.pv @ problem.pv - np.einsum("dr,dr->d", factors, right))
