"""One structure fitted to one test: the search, and what it found.

Every structure is first screened by a few damped steps from its most promising starts. For
those that stay in the running lmfit runs the search to its end, with analytic derivatives,
over the few numbers that enter non-linearly, and from several dead times.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from fitters.response import respond
from fitters.search import End, approach, best_lookup, refine
from fitters.starts import Start, coarse_starts

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from fitters.problem import Problem
    from fitters.structures.base import Structure

#: Up to this many searched numbers and gains one start will do to screen a structure.
_SIMPLE = 2
#: Two refined costs this close, relatively, are the same answer [1].
_SAME_COST = 1e-3
#: Relative gain of a step at which an estimate that moved a little has settled again [1].
_RESETTLED = 1e-7
#: A minimum this close to the deepest one is a rival to be named [1].
_RIVAL_COST = 0.02
#: A structure whose cost is forecast above this many times the lowest is left there [1].
_HOPELESS = 2.0
#: So is a further start of one structure above this many times what an earlier one reached [1].
_NO_BETTER = 1.1
#: Mean squares below this are no measure of what is hopeless: forecasts are not that good [1].
_NEARLY_PERFECT = 1e-3
#: Costs per row below this, in squared spreads of the PV, are all a perfect fit [1].
_PERFECT = 1e-16


@dataclass(frozen=True, slots=True, kw_only=True)
class Estimate:
    """Where the search ended.

    Attributes
    ----------
    structure : Structure
    search : (k,) ndarray
        Searched numbers.
    dead_time : float
        Dead time [s]; below zero if the PV seemed to answer before the move.
    gains : (r,) ndarray
        Linear factors of the shapes.
    offset : float
        PV before the first move [PV unit].
    drift : float
        Drift [PV unit/s], zero when not fitted.
    residual : (n,) ndarray
        PV minus fit over all rows, set-aside ones included [PV unit].
    jacobian : (m, p) ndarray
        Derivatives of the fit at the used rows by searched numbers, dead time, gains, what
        was left of an earlier move (if fitted), offset and drift (if fitted), in this order.
    whitened : (m, p) ndarray
        The same with the noise's colour taken out.
    cost : float
        Sum of squares over the used rows, whitened [PV unit squared].
    converged : bool
    starts, starts_agreeing : int
    rival_dead_times : tuple of float
        Dead times of other minima nearly as deep [s].
    dead_time_fixed : bool
        The dead time was held and not searched.
    """

    structure: Structure
    search: NDArray[np.float64]
    dead_time: float
    gains: NDArray[np.float64]
    offset: float
    drift: float
    residual: NDArray[np.float64]
    jacobian: NDArray[np.float64]
    whitened: NDArray[np.float64]
    cost: float
    converged: bool
    starts: int
    starts_agreeing: int
    rival_dead_times: tuple[float, ...]
    dead_time_fixed: bool

    @property
    def slowest(self) -> float:
        """Sum of the lags; the dead time where there are none [s]."""
        poles = self.structure.model(self.search, self.gains, 0.0).poles
        slow = np.abs(poles[poles != 0.0])
        return float(np.sum(1.0 / slow)) if slow.size else max(self.dead_time, 0.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class Screened:
    """A structure after its first, quick look.

    Attributes
    ----------
    structure : Structure
    tried : tuple of End
        Where the starts looked at so far led, the best first.
    untried : tuple of Start
        Starting points left for later.
    """

    structure: Structure
    tried: tuple[End, ...]
    untried: tuple[Start, ...]

    @property
    def cost(self) -> float:
        """Sum of squares at the best point so far, in squared spreads of the PV [1]."""
        return self.tried[0].cost


def screen(problem: Problem, structures: Sequence[Structure]) -> list[Screened]:
    """Fit structures roughly, to see which are worth more.

    Parameters
    ----------
    problem : Problem
    structures : sequence of Structure

    Returns
    -------
    list of Screened
        Closest to the log first.
    """
    begun = [(structure, *coarse_starts(problem, structure)) for structure in structures]
    out: list[Screened] = []
    lowest = np.inf
    for structure, starts, _ in sorted(begun, key=lambda b: b[2]):
        out.append(_screen_one(problem, structure, starts, _HOPELESS * lowest))
        lowest = max(min(lowest, out[-1].cost), _NEARLY_PERFECT * problem.pv.size)
    return sorted(out, key=lambda s: s.cost)


def _screen_one(problem: Problem, structure: Structure, starts: list[Start], hopeless: float) -> Screened:
    if not structure.has_dead_time_search:
        dead_time = best_lookup(problem, structure, starts)
        cost = float(problem.costs(structure, np.empty(0), np.array([dead_time]))[0])
        only = End(np.empty(0), dead_time, cost, True)
        return Screened(structure=structure, tried=(only,), untried=())
    many = structure.searched + structure.gains > _SIMPLE
    now = len(starts) if many else 1
    ends: list[End] = []
    for start in starts[:now]:
        ends.append(approach(problem, structure, start, hopeless))
        reached = max(ends[-1].cost, _NEARLY_PERFECT * problem.pv.size)
        hopeless = min(hopeless, _NO_BETTER * reached)
    return Screened(structure=structure, tried=_ranked(problem, structure, ends), untried=tuple(starts[now:]))


def settle(problem: Problem, screened: Screened) -> Estimate:
    """Find the parameters of a structure that explain the PV best, from all promising starts.

    Parameters
    ----------
    problem : Problem
    screened : Screened

    Returns
    -------
    Estimate
    """
    structure = screened.structure
    if not structure.has_dead_time_search:
        return _collect(problem, structure, screened.tried[0], list(screened.tried), hold=True)
    first, *others = screened.tried
    ends = [refine(problem, structure, (first.search, first.dead_time))]
    others += [approach(problem, structure, start) for start in screened.untried]
    for end in others:
        better = _rank(problem, structure, end) < (False, ends[0].cost * (1.0 - _SAME_COST))
        ends.append(refine(problem, structure, (end.search, end.dead_time)) if better else end)
    return _not_before_the_move(problem, structure, list(_ranked(problem, structure, ends)))


def resettle(problem: Problem, estimate: Estimate) -> Estimate:
    """Settle an estimate again on a problem that differs a little, from where it was.

    Parameters
    ----------
    problem : Problem
    estimate : Estimate

    Returns
    -------
    Estimate
        With the first search's starts and rivals.
    """
    structure = estimate.structure
    if structure.has_dead_time_search:
        start = (estimate.search, estimate.dead_time)
        end = approach(problem, structure, start, tolerance=_RESETTLED)
        if not end.converged:
            end = refine(problem, structure, (end.search, end.dead_time))
        again = _not_before_the_move(problem, structure, [end])
    else:
        end = End(estimate.search, estimate.dead_time, 0.0, True)
        again = _collect(problem, structure, end, [end], hold=True)
    return replace(
        again,
        starts=estimate.starts,
        starts_agreeing=estimate.starts_agreeing,
        rival_dead_times=estimate.rival_dead_times,
    )


def _not_before_the_move(problem: Problem, structure: Structure, ends: list[End]) -> Estimate:
    """Collect the best end; with the dead time held at zero where it would be less."""
    best = ends[0]
    if best.dead_time < 0.0:
        held = refine(problem, structure, (best.search, 0.0), hold=True)
        return _collect(problem, structure, held, ends, hold=True)
    return _collect(problem, structure, best, ends, hold=False)


def as_screened(problem: Problem, screened: Screened) -> Estimate:
    """Take the quick look for the answer, for a structure that is out of the running.

    Parameters
    ----------
    problem : Problem
    screened : Screened

    Returns
    -------
    Estimate
    """
    end = replace(screened.tried[0], converged=True)
    return _collect(problem, screened.structure, end, [end], hold=end.dead_time < 0.0)


def at_point(
    problem: Problem, structure: Structure, search: NDArray[np.float64], dead_time: float
) -> Estimate:
    """Take searched numbers and dead time as they are and solve for the linear part.

    Parameters
    ----------
    problem : Problem
    structure : Structure
    search : (k,) ndarray
    dead_time : float
        [s].

    Returns
    -------
    Estimate
    """
    end = End(search, dead_time, 0.0, True)
    return _collect(problem, structure, end, [end], hold=False)


def _ranked(problem: Problem, structure: Structure, ends: list[End]) -> tuple[End, ...]:
    if len(ends) == 1:
        return tuple(ends)
    return tuple(sorted(ends, key=lambda end: _rank(problem, structure, end)))


def _rank(problem: Problem, structure: Structure, end: End) -> tuple[bool, float]:
    """Order ends by cost, those that are not what the structure stands for last."""
    if structure.gains == 1:
        return False, end.cost
    factors = problem.factors(structure, end.search, max(end.dead_time, 0.0))
    return not structure.admits(factors[: structure.gains]), end.cost


def _collect(problem: Problem, structure: Structure, end: End, ends: list[End], *, hold: bool) -> Estimate:
    """Solve for the linear part at the end point and collect the whole Jacobian."""
    dead_time = max(end.dead_time, 0.0)
    response = respond(structure, problem.held, end.search, dead_time)
    linear = np.column_stack([response.value.T, problem.levels])
    scale = np.linalg.norm(linear, axis=0)
    scale[scale == 0.0] = 1.0
    pv = problem.data.pv[problem.used] - problem.level
    whitened = problem.whiten((linear / scale).T).T
    factors = np.linalg.lstsq(whitened, problem.whiten(pv), rcond=None)[0] / scale
    shaped = response.value.shape[0]
    weights, levels = factors[:shaped], factors[shaped:]
    everywhere = response
    if not problem.used.all():
        everywhere = respond(structure, problem.held_all, end.search, dead_time)
    residual = problem.data.pv - problem.level - weights @ everywhere.value - problem.levels_all @ levels
    by_search = np.einsum("r,krn->kn", weights, response.by_search)
    by_dead_time = weights @ response.by_dead_time
    jacobian = np.column_stack([by_search.T, by_dead_time, linear])
    left_over = problem.whiten(residual[problem.used])
    agreeing, rivals = _agreement(ends, problem)
    return Estimate(
        structure=structure,
        search=end.search,
        dead_time=dead_time,
        gains=weights[: structure.gains],
        offset=float(levels[0] + problem.level),
        drift=float(levels[1]) if problem.drift else 0.0,
        residual=residual,
        jacobian=jacobian,
        whitened=jacobian if problem.plain else problem.whiten(jacobian.T).T,
        cost=float(left_over @ left_over),
        converged=end.converged,
        starts=len(ends),
        starts_agreeing=agreeing,
        rival_dead_times=rivals,
        dead_time_fixed=hold,
    )


def _agreement(ends: list[End], problem: Problem) -> tuple[int, tuple[float, ...]]:
    """Count the starts that came to the best answer, and name other dead times nearly as good."""
    best = ends[0]
    floor = _PERFECT * problem.pv.size
    apart = max(problem.data.interval, 0.05 * abs(best.dead_time))
    away = [end for end in ends if abs(end.dead_time - best.dead_time) > apart]
    rivals = tuple(
        end.dead_time
        for end in away
        if end.dead_time > 0.0 and end.cost <= best.cost * (1.0 + _RIVAL_COST) + floor
    )
    return len(ends) - len(away), rivals
