"""One structure fitted to one test: the search, and what it found.

Every structure is first screened by a few damped steps from its most promising starts. For
those that stay in the running lmfit runs the search to its end, with analytic derivatives,
over the few numbers that enter non-linearly, and from several dead times.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import lmfit
import numpy as np

from fitters.problem import limited
from fitters.response import respond
from fitters.starts import Start, coarse_starts

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from fitters.problem import Problem
    from fitters.structures.base import Structure

#: Up to this many searched numbers and gains one start will do to screen a structure.
_SIMPLE = 2
#: Two refined costs this close, relatively, are the same answer [1].
_SAME_COST = 1e-3
#: A minimum this close to the deepest one is a rival to be named [1].
_RIVAL_COST = 0.02
#: Evaluations after which a search is given up; it needs 10 to 30.
_MOST_EVALUATIONS = 100
#: Relative change of cost and of parameters at which a search has settled [1].
_SETTLED_TOLERANCE = 1e-7
#: The approach: steps at most, relative gain at which it is content, damping and its changes [1].
_APPROACH_STEPS = 10
_APPROACH_TOLERANCE = 3e-3
_FIRST_DAMPING = 1e-3
_HARDER = 10.0
_EASIER = 5.0
#: Keeps a direction without slope from a division by nothing, in squared spreads of the PV [1].
_TINY = 1e-20
#: A searched logarithm moves at most this far in one step: a factor of about four.
_LONGEST_LOG_STEP = 1.4
#: Costs per row below this, in squared spreads of the PV, are all a perfect fit [1].
_PERFECT = 1e-16
#: Flat stretches of the cost looked at for a pure dead time.
_FLAT_STRETCHES = 200


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
    cost : float
        Sum of squares over the used rows [PV unit squared].
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
    cost: float
    converged: bool
    starts: int
    starts_agreeing: int
    rival_dead_times: tuple[float, ...]
    dead_time_fixed: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class Screened:
    """A structure after its first, quick look.

    Attributes
    ----------
    structure : Structure
    end : Start
        Searched numbers and dead time it came to.
    cost : float
        Sum of squares there, in squared spreads of the PV [1].
    starts : tuple of Start
        Starting points found, the one already used first.
    """

    structure: Structure
    end: Start
    cost: float
    starts: tuple[Start, ...]


@dataclass(frozen=True, slots=True)
class _End:
    search: NDArray[np.float64]
    dead_time: float
    cost: float
    converged: bool


def screen(problem: Problem, structure: Structure) -> Screened:
    """Fit a structure roughly, to see whether it is worth more.

    Parameters
    ----------
    problem : Problem
    structure : Structure

    Returns
    -------
    Screened
    """
    starts = tuple(coarse_starts(problem, structure))
    if not structure.has_dead_time_search:
        dead_time = _best_lookup(problem, structure, starts)
        cost = float(problem.costs(structure, np.empty(0), np.array([dead_time]))[0])
        return Screened(structure=structure, end=(np.empty(0), dead_time), cost=cost, starts=starts)
    many = structure.searched + structure.gains > _SIMPLE
    ends = [_approach(problem, structure, start) for start in (starts if many else starts[:1])]
    end = min(ends, key=lambda e: _rank(problem, structure, e))
    return Screened(structure=structure, end=(end.search, end.dead_time), cost=end.cost, starts=starts)


def settle(problem: Problem, screened: Screened, *, several: bool = True) -> Estimate:
    """Find the parameters of a structure that explain the PV best.

    Parameters
    ----------
    problem : Problem
    screened : Screened
    several : bool
        Start from the other promising dead times too; False trusts the screening.

    Returns
    -------
    Estimate
    """
    structure = screened.structure
    if not structure.has_dead_time_search:
        only = _End(np.empty(0), screened.end[1], screened.cost, True)
        return _collect(problem, structure, only, [only], hold=True)
    ends = [_refine(problem, structure, screened.end)]
    if several:
        for start in screened.starts[1:]:
            rough = _approach(problem, structure, start)
            if _rank(problem, structure, rough) < (False, ends[0].cost * (1.0 - _SAME_COST)):
                rough = _refine(problem, structure, (rough.search, rough.dead_time))
            ends.append(rough)
        ends.sort(key=lambda end: _rank(problem, structure, end))
    best = ends[0]
    if best.dead_time < 0.0:
        held = _refine(problem, structure, (best.search, 0.0), hold=True)
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
    end = _End(screened.end[0], screened.end[1], screened.cost, True)
    return _collect(problem, screened.structure, end, [end], hold=end.dead_time < 0.0)


def _rank(problem: Problem, structure: Structure, end: _End) -> tuple[bool, float]:
    """Order ends by cost, those that are not what the structure stands for last."""
    factors = problem.factors(structure, end.search, max(end.dead_time, 0.0))
    return not structure.admits(factors[: structure.gains]), end.cost


def _approach(problem: Problem, structure: Structure, start: Start) -> _End:
    """Take a few damped Gauss-Newton steps (Levenberg 1944, Marquardt 1963): enough to rank a structure."""
    point = np.append(start[0], start[1])
    residual, slopes = problem.project(structure, point[:-1], float(point[-1]))
    cost = float(residual @ residual)
    damping = _FIRST_DAMPING
    for _ in range(_APPROACH_STEPS):
        curvature = slopes @ slopes.T
        diagonal = np.diagonal(curvature) + _TINY
        step = np.linalg.solve(curvature + np.diag(damping * diagonal), -(slopes @ residual))
        step[:-1] = np.clip(step[:-1], -_LONGEST_LOG_STEP, _LONGEST_LOG_STEP)
        trial = point + step
        new_residual, new_slopes = problem.project(structure, trial[:-1], float(trial[-1]))
        new_cost = float(new_residual @ new_residual)
        if not new_cost < cost:
            damping *= _HARDER
            continue
        settled = new_cost > cost * (1.0 - _APPROACH_TOLERANCE)
        point, residual, slopes, cost = trial, new_residual, new_slopes, new_cost
        damping /= _EASIER
        if settled:
            break
    return _End(limited(point[:-1]), float(point[-1]), cost, True)


def _refine(problem: Problem, structure: Structure, start: Start, *, hold: bool = False) -> _End:
    """Run lmfit's Levenberg-Marquardt from one start; `hold` keeps the dead time."""
    names = [f"q{k}" for k in range(structure.searched)]
    if hold and not names:
        cost = float(problem.costs(structure, start[0], np.array([start[1]]))[0])
        return _End(start[0], start[1], cost, True)
    parameters = lmfit.Parameters()
    for name, value in zip(names, start[0], strict=True):
        parameters.add(name, value=float(value))
    parameters.add("dead_time", value=float(start[1]), vary=not hold)
    seen: dict[bytes, tuple[NDArray[np.float64], NDArray[np.float64]]] = {}
    best = _End(start[0], start[1], np.inf, False)

    def evaluate(values: Any) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        point = np.array([values[name].value for name in (*names, "dead_time")])
        key = point.tobytes()
        if key not in seen:
            nonlocal best
            seen.clear()
            seen[key] = residual, _ = problem.project(structure, point[:-1], float(point[-1]))
            cost = float(residual @ residual)
            if cost < best.cost:
                best = _End(limited(point[:-1]), float(point[-1]), cost, False)
        return seen[key]

    def slopes_of(values: Any) -> NDArray[np.float64]:
        slopes = evaluate(values)[1]
        return slopes[:-1] if hold else slopes

    result = lmfit.Minimizer(
        lambda values: evaluate(values)[0], parameters, calc_covar=False, nan_policy="propagate"
    ).leastsq(
        Dfun=slopes_of,
        col_deriv=True,
        max_nfev=_MOST_EVALUATIONS,
        ftol=_SETTLED_TOLERANCE,
        xtol=_SETTLED_TOLERANCE,
        gtol=0.0,
    )
    if result.success:
        return replace(best, converged=True)
    # The cost has a kink wherever the dead time passes a row; a minimum in a kink never meets
    # lmfit's tolerances. It is settled all the same when further steps gain nothing.
    further = _approach(problem, structure, (best.search, best.dead_time)) if not hold else best
    return replace(best, converged=further.cost >= best.cost * (1.0 - _APPROACH_TOLERANCE))


def _collect(problem: Problem, structure: Structure, end: _End, ends: list[_End], *, hold: bool) -> Estimate:
    """Solve for the linear part at the end point and collect the whole Jacobian."""
    dead_time = max(end.dead_time, 0.0)
    response = respond(structure, problem.held, end.search, dead_time)
    linear = np.column_stack([response.value.T, problem.levels])
    scale = np.linalg.norm(linear, axis=0)
    scale[scale == 0.0] = 1.0
    pv = problem.data.pv[problem.used] - problem.level
    factors = np.linalg.lstsq(linear / scale, pv, rcond=None)[0] / scale
    shaped = response.value.shape[0]
    weights, levels = factors[:shaped], factors[shaped:]
    everywhere = respond(structure, problem.held_all, end.search, dead_time)
    residual = problem.data.pv - problem.level - weights @ everywhere.value - problem.levels_all @ levels
    by_search = np.einsum("r,krn->kn", weights, response.by_search)
    by_dead_time = weights @ response.by_dead_time
    used_residual = residual[problem.used]
    agreeing, rivals = _agreement(ends, problem)
    return Estimate(
        structure=structure,
        search=end.search,
        dead_time=dead_time,
        gains=weights[: structure.gains],
        offset=float(levels[0] + problem.level),
        drift=float(levels[1]) if problem.drift else 0.0,
        residual=residual,
        jacobian=np.column_stack([by_search.T, by_dead_time, linear]),
        cost=float(used_residual @ used_residual),
        converged=end.converged,
        starts=len(ends),
        starts_agreeing=agreeing,
        rival_dead_times=rivals,
        dead_time_fixed=hold,
    )


def _agreement(ends: list[_End], problem: Problem) -> tuple[int, tuple[float, ...]]:
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


def _best_lookup(problem: Problem, structure: Structure, starts: tuple[Start, ...]) -> float:
    """Find the dead time of a structure whose cost is flat between rows: the flat part's middle."""
    nothing = np.empty(0)
    candidates = np.array([start[1] for start in starts])
    anchor = float(candidates[int(np.argmin(problem.costs(structure, nothing, candidates)))])
    edges = np.unique(np.round((problem.held.t[:, None] - problem.held.at[None, :8]).ravel(), 9))
    edges = np.concatenate([[0.0], edges[edges > 0.0]])
    middles = 0.5 * (edges[1:] + edges[:-1])
    reach = max(0.6 * anchor, 4.0 * problem.data.interval)
    near = middles[np.abs(middles - anchor) <= reach]
    near = near[:: max(1, near.size // _FLAT_STRETCHES)]
    if near.size == 0:
        return anchor
    return float(near[int(np.argmin(problem.costs(structure, nothing, near)))])
