"""Where to start the search: a grid over the searched numbers and the dead time."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from fitters.problem import Problem
    from fitters.structures.base import Structure

#: Dead times tried, from none to most of the time left after the first move.
_DEAD_TIMES = 10
#: Groups of dead times that each send their best: one valley often hides another.
_GROUPS = 3
#: More of them for a structure with a zero, which can pass for dead time.
_MORE_WITH_ZERO = 2
#: Relative size of what keeps a nearly singular two-by-two system solvable [1].
_RIDGE = 1e-10

Start = tuple["NDArray[np.float64]", float]


def coarse_starts(problem: Problem, structure: Structure) -> tuple[list[Start], float]:
    """Try a grid on a thinned record and keep the best from each group of dead times.

    Parameters
    ----------
    problem : Problem
    structure : Structure

    Returns
    -------
    list of ((k,) ndarray, float)
        Searched numbers and dead time [s], the most promising first.
    float
        Mean square the first of them leaves, in squared spreads of the PV [1].
    """
    coarse = problem.sketch
    interval = problem.data.interval
    longest = max(0.8 * problem.longest_dead_time, 2.0 * interval)
    dead_times = np.concatenate([[0.3 * interval], np.geomspace(interval, longest, _DEAD_TIMES - 1)])
    searches = [np.asarray(q, dtype=float) for q in structure.starts(problem.data.span, interval)]
    costs = np.concatenate(
        [_costs_at_once(coarse, structure, alike, dead_times) for alike in _alike(searches)]
    )
    winners = np.argmin(costs, axis=0)
    lowest = costs.min(axis=0)
    groups = np.array_split(np.arange(_DEAD_TIMES), _GROUPS + _MORE_WITH_ZERO * (structure.gains - 1))
    best = sorted((int(group[np.argmin(lowest[group])]) for group in groups), key=lambda i: lowest[i])
    starts = [(searches[winners[i]], float(dead_times[i])) for i in best]
    return starts, float(lowest[best[0]]) / coarse.pv.size


def _alike(searches: list[NDArray[np.float64]]) -> list[list[NDArray[np.float64]]]:
    """Group consecutive searched numbers that differ in the first one only: a scale of time."""
    groups: list[list[NDArray[np.float64]]] = []
    for search in searches:
        if groups and np.array_equal(groups[-1][0][1:], search[1:]):
            groups[-1].append(search)
        else:
            groups.append([search])
    return groups


def _costs_at_once(
    problem: Problem,
    structure: Structure,
    alike: list[NDArray[np.float64]],
    dead_times: NDArray[np.float64],
) -> NDArray[np.float64]:
    """Give the (s, d) sums of squares at all time scales and dead times from one evaluation of the shapes."""
    held = problem.held
    tau = held.t - held.at[:, None] - dead_times[:, None, None]
    weight = (tau > 0.0) * held.size[:, None]
    search = [np.array([q[0] for q in alike])[:, None, None, None], *alike[0][1:]] if alike[0].size else []
    value = structure.values(np.maximum(tau, 0.0), search)
    value = np.broadcast_to(value, (value.shape[0], len(alike), *tau.shape))
    regressors = np.einsum("djn,rsdjn->sdrn", weight, value)
    if held.settling_from is not None:
        since = held.t - held.settling_from
        before = structure.values(since, [q[..., 0] if np.ndim(q) else q for q in search])[0]
        before = np.broadcast_to(before[..., None, :], (*regressors.shape[:2], 1, since.size))
        regressors = np.concatenate([regressors, before], axis=2)
    regressors = problem.without_level(regressors)
    size = np.sqrt(np.einsum("sdrn,sdrn->sdr", regressors, regressors))
    regressors /= np.maximum(size, 1e-300)[..., None]
    right = regressors @ problem.pv
    gram = regressors @ regressors.swapaxes(2, 3) + _RIDGE * np.eye(regressors.shape[2])
    factors = np.linalg.solve(gram, right[..., None])[..., 0]
    return np.asarray(problem.pv @ problem.pv - np.einsum("sdr,sdr->sd", factors, right))
