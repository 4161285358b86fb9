"""The search from one starting point: a quick approach, and lmfit to the end.

Both run over the few numbers that enter non-linearly, with analytic derivatives; the linear
part is solved on the way.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import lmfit
import numpy as np

from fitters.problem import limited

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from fitters.problem import Problem
    from fitters.starts import Start
    from fitters.structures.base import Structure

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
#: After so many steps the straight-line forecast of the cost is believed.
_FAIR_TRIAL = 3
#: Keeps a direction without slope from a division by nothing, in squared spreads of the PV [1].
_TINY = 1e-20
#: A searched logarithm moves at most this far in one step: a factor of about four.
_LONGEST_LOG_STEP = 1.4
#: Flat stretches of the cost looked at for a pure dead time.
_FLAT_STRETCHES = 200


@dataclass(frozen=True, slots=True)
class End:
    """Where a search from one start came to.

    Attributes
    ----------
    search : (k,) ndarray
        Searched numbers.
    dead_time : float
        [s].
    cost : float
        Sum of squares there, in squared spreads of the PV [1].
    converged : bool
    """

    search: NDArray[np.float64]
    dead_time: float
    cost: float
    converged: bool


def approach(
    problem: Problem,
    structure: Structure,
    start: Start,
    hopeless: float = np.inf,
    held: int | None = None,
    tolerance: float = _APPROACH_TOLERANCE,
) -> End:
    """Take a few damped Gauss-Newton steps (Levenberg 1944, Marquardt 1963): enough to rank a structure.

    Parameters
    ----------
    problem : Problem
    structure : Structure
    start : ((k,) ndarray, float)
        Searched numbers and dead time [s].
    hopeless : float
        The steps end early where even the straight-line forecast of the cost stays above this,
        in squared spreads of the PV [1].
    held : int or None
        Place of a number that stays as it is: a searched one, or one past them for the dead time.
    tolerance : float
        Relative gain of a step at which it is content [1].

    Returns
    -------
    End
    """
    point = np.append(start[0], start[1])
    residual, slopes = problem.project(structure, point[:-1], float(point[-1]))
    cost = float(residual @ residual)
    damping, accepted, settled = _FIRST_DAMPING, 0, False
    for _ in range(_APPROACH_STEPS):
        curvature = slopes @ slopes.T
        gradient = slopes @ residual
        if held is not None:
            curvature[held, :] = curvature[:, held] = gradient[held] = 0.0
            curvature[held, held] = 1.0
        curvature.flat[:: point.size + 1] *= 1.0 + damping
        curvature.flat[:: point.size + 1] += _TINY
        step = -np.linalg.solve(curvature, gradient)
        if accepted >= _FAIR_TRIAL and cost + float(gradient @ step) > hopeless:
            break
        step[:-1] = np.clip(step[:-1], -_LONGEST_LOG_STEP, _LONGEST_LOG_STEP)
        trial = point + step
        new_residual, new_slopes = problem.project(structure, trial[:-1], float(trial[-1]))
        new_cost = float(new_residual @ new_residual)
        if not new_cost < cost:
            damping *= _HARDER
            continue
        settled = new_cost > cost * (1.0 - tolerance)
        point, residual, slopes, cost = trial, new_residual, new_slopes, new_cost
        accepted += 1
        damping /= _EASIER
        if settled:
            break
    return End(limited(point[:-1]), float(point[-1]), cost, settled)


def refine(problem: Problem, structure: Structure, start: Start, *, hold: bool = False) -> End:
    """Run lmfit's Levenberg-Marquardt from one start.

    Parameters
    ----------
    problem : Problem
    structure : Structure
    start : ((k,) ndarray, float)
        Searched numbers and dead time [s].
    hold : bool
        Keep the dead time.

    Returns
    -------
    End
    """
    names = [f"q{k}" for k in range(structure.searched)]
    if hold and not names:
        cost = float(problem.costs(structure, start[0], np.array([start[1]]))[0])
        return End(start[0], start[1], cost, True)
    parameters = lmfit.Parameters()
    for name, value in zip(names, start[0], strict=True):
        parameters.add(name, value=float(value))
    parameters.add("dead_time", value=float(start[1]), vary=not hold)
    seen: dict[bytes, tuple[NDArray[np.float64], NDArray[np.float64]]] = {}
    best = End(start[0], start[1], np.inf, False)

    def evaluate(values: Any) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        point = np.array([values[name].value for name in (*names, "dead_time")])
        key = point.tobytes()
        if key not in seen:
            nonlocal best
            seen.clear()
            seen[key] = residual, _ = problem.project(structure, point[:-1], float(point[-1]))
            cost = float(residual @ residual)
            if cost < best.cost:
                best = End(limited(point[:-1]), float(point[-1]), cost, False)
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
    further = approach(problem, structure, (best.search, best.dead_time)) if not hold else best
    return replace(best, converged=further.cost >= best.cost * (1.0 - _APPROACH_TOLERANCE))


def best_lookup(problem: Problem, structure: Structure, starts: list[Start]) -> float:
    """Find the dead time of a structure whose cost is flat between rows: the flat part's middle.

    Parameters
    ----------
    problem : Problem
    structure : Structure
        Without slopes by the dead time.
    starts : list of Start
        Dead times to begin from.

    Returns
    -------
    float
        [s].
    """
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
