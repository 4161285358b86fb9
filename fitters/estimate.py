"""One structure fitted to one test: the search, and what it found.

The search runs over the few numbers that enter non-linearly; the numerator, the offset and
the drift follow by linear least squares at every step (variable projection: Golub and
Pereyra 1973, with the simplified derivative of Kaufman 1975). lmfit runs the steps with
analytic derivatives.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import lmfit
import numpy as np

from fitters.response import HeldInput, respond

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from fitters.fit import BumpData
    from fitters.structures.base import Structure

#: Rows that the coarse search looks at; enough to tell good starts from bad ones.
_COARSE_ROWS = 120
#: Dead times tried, from none to most of the time left after the first move.
_COARSE_DEAD_TIMES = 11
#: Starts refined for each structure.
_STARTS = 3
#: Two refined costs this close, relatively, are the same answer [1].
_SAME_COST = 1e-3
#: Steps after which a search that has not settled is given up.
_MOST_EVALUATIONS = 120
#: Searched logarithms beyond these leave the shapes without meaning: exp(+-40).
_LOG_LIMIT = 40.0


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
    drift_fitted : bool
    residual : (n,) ndarray
        PV minus fit over all rows, set-aside ones included [PV unit].
    jacobian : (m, p) ndarray
        Derivatives of the fit at the used rows by searched numbers, dead time, gains,
        offset and, if fitted, drift, in this order.
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
    drift_fitted: bool
    residual: NDArray[np.float64]
    jacobian: NDArray[np.float64]
    cost: float
    converged: bool
    starts: int
    starts_agreeing: int
    rival_dead_times: tuple[float, ...]
    dead_time_fixed: bool


class Problem:
    """A test prepared for fitting: rows in use, level and drift projected out.

    Parameters
    ----------
    data : BumpData
    used : (n,) bool ndarray
        Rows that count.
    drift : bool
        Fit a straight-line drift besides the level.
    """

    def __init__(self, data: BumpData, used: NDArray[np.bool_], *, drift: bool) -> None:
        self.data = data
        self.used = used
        self.drift = drift
        self.held_all = HeldInput.from_data(data)
        self.held = self.held_all.at_rows(used)
        self.t = data.t[used]
        centre = data.t[0]
        self.levels = _levels(self.t - centre, drift=drift)
        self.levels_all = _levels(data.t - centre, drift=drift)
        self.level_basis = np.linalg.qr(self.levels)[0]
        self.level = float(np.mean(data.pv[used]))
        self.spread = max(float(np.std(data.pv[used])), 1e-300)
        self.pv = self._without_level(((data.pv[used] - self.level) / self.spread)[None])[0]
        moved_at = float(self.held.at[0]) if self.held.at.size else float(data.t[0])
        self.longest_dead_time = max(float(data.t[-1]) - moved_at - 4.0 * data.interval, data.interval)

    def _without_level(self, rows: NDArray[np.float64]) -> NDArray[np.float64]:
        return rows - (rows @ self.level_basis) @ self.level_basis.T

    def project(
        self, structure: Structure, search: NDArray[np.float64], dead_time: float, *, slopes: bool
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Give the residual with the linear part solved, and its slopes if asked.

        Parameters
        ----------
        structure : Structure
        search : (k,) ndarray
        dead_time : float
            [s].
        slopes : bool

        Returns
        -------
        residual : (m,) ndarray
            In spreads of the PV.
        slopes : (k + 1, m) ndarray
            Kaufman's derivative by the searched numbers and the dead time; empty unless asked.
        """
        response = respond(structure, self.held, _limited(search), dead_time)
        regressors = self._without_level(response.value)
        q, r = np.linalg.qr(regressors.T)
        gains = _solve_triangle(r, q.T @ self.pv)
        residual = self.pv - q @ (q.T @ self.pv)
        if not slopes:
            return residual, np.empty((0, residual.size))
        change = np.empty((structure.searched + 1, residual.size))
        change[:-1] = np.einsum("r,krn->kn", gains, response.by_search)
        change[-1] = gains @ response.by_dead_time
        change = self._without_level(change)
        change -= (change @ q) @ q.T
        return residual, -change


def fit_structure(
    problem: Problem, structure: Structure, *, starts: list[tuple[NDArray[np.float64], float]] | None = None
) -> Estimate:
    """Find the parameters of a structure that explain the PV best.

    Parameters
    ----------
    problem : Problem
    structure : Structure
    starts : list of ((k,) ndarray, float) or None
        Searched numbers and dead times to start from; None looks for them.

    Returns
    -------
    Estimate
    """
    if starts is None:
        starts = _coarse_starts(problem, structure)
    if not structure.has_dead_time_search:
        return _finish(problem, structure, np.empty(0), _best_lookup(problem, structure, starts), [], True)
    ends = [_refine(problem, structure, search, dead_time, hold=False) for search, dead_time in starts]
    ends.sort(key=lambda end: end.cost)
    best = ends[0]
    if best.dead_time < 0.0:
        at_zero = _refine(problem, structure, best.search, 0.0, hold=True)
        return _finish(problem, structure, at_zero.search, 0.0, ends, at_zero.converged, free=best.dead_time)
    return _finish(problem, structure, best.search, best.dead_time, ends, best.converged)


@dataclass(frozen=True, slots=True)
class _End:
    search: NDArray[np.float64]
    dead_time: float
    cost: float
    converged: bool


def _refine(
    problem: Problem, structure: Structure, search: NDArray[np.float64], dead_time: float, *, hold: bool
) -> _End:
    """Run lmfit's Levenberg-Marquardt from one start."""
    names = [f"q{k}" for k in range(structure.searched)]
    parameters = lmfit.Parameters()
    for name, value in zip(names, search, strict=True):
        parameters.add(name, value=float(value))
    parameters.add("dead_time", value=float(dead_time), vary=not hold)
    if hold and not names:
        residual, _ = problem.project(structure, search, dead_time, slopes=False)
        return _End(search, dead_time, float(residual @ residual), True)
    seen: dict[bytes, tuple[NDArray[np.float64], NDArray[np.float64]]] = {}

    def evaluate(values: Any) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        point = np.array([values[name].value for name in (*names, "dead_time")])
        key = point.tobytes()
        if key not in seen:
            seen.clear()
            seen[key] = problem.project(structure, point[:-1], float(point[-1]), slopes=True)
        return seen[key]

    def slopes_of(values: Any) -> NDArray[np.float64]:
        slopes = evaluate(values)[1]
        return slopes[:-1] if hold else slopes

    result = lmfit.Minimizer(
        lambda values: evaluate(values)[0], parameters, calc_covar=False, nan_policy="propagate"
    ).leastsq(
        Dfun=slopes_of, col_deriv=True, max_nfev=_MOST_EVALUATIONS, ftol=1e-12, xtol=1e-12, gtol=0.0
    )
    end = np.array([result.params[name].value for name in names])
    residual = result.residual
    return _End(
        _limited(end), float(result.params["dead_time"].value), float(residual @ residual), bool(result.success)
    )


def _finish(
    problem: Problem,
    structure: Structure,
    search: NDArray[np.float64],
    dead_time: float,
    ends: list[_End],
    converged: bool,
    free: float | None = None,
) -> Estimate:
    """Solve for the linear part at the end point and collect the whole Jacobian."""
    response = respond(structure, problem.held, search, dead_time)
    linear = np.column_stack([response.value.T, problem.levels])
    scale = np.linalg.norm(linear, axis=0)
    scale[scale == 0.0] = 1.0
    pv = problem.data.pv[problem.used] - problem.level
    factors = np.linalg.lstsq(linear / scale, pv, rcond=None)[0] / scale
    gains, levels = factors[: structure.gains], factors[structure.gains :]
    everywhere = respond(structure, problem.held_all, search, dead_time)
    residual = problem.data.pv - problem.level - gains @ everywhere.value - problem.levels_all @ levels
    by_search = np.einsum("r,krn->kn", gains, response.by_search)
    by_dead_time = gains @ response.by_dead_time
    jacobian = np.column_stack([by_search.T, by_dead_time, linear])
    used_residual = residual[problem.used]
    best_cost = ends[0].cost if ends else 0.0
    floor = 1e-16 * problem.pv.size  # costs below this are all a perfect fit
    near = [end for end in ends if end.cost <= best_cost * (1.0 + _SAME_COST) + floor]
    anchor = dead_time if free is None else free
    apart = max(problem.data.interval, 0.05 * abs(anchor))
    return Estimate(
        structure=structure,
        search=search,
        dead_time=dead_time,
        gains=gains,
        offset=float(levels[0] + problem.level),
        drift=float(levels[1]) if problem.drift else 0.0,
        drift_fitted=problem.drift,
        residual=residual,
        jacobian=jacobian,
        cost=float(used_residual @ used_residual),
        converged=converged,
        starts=max(len(ends), 1),
        starts_agreeing=sum(abs(end.dead_time - anchor) <= apart for end in near) if near else 1,
        rival_dead_times=tuple(
            end.dead_time
            for end in ends
            if abs(end.dead_time - anchor) > apart and end.cost <= best_cost * 1.02 + floor
        ),
        dead_time_fixed=free is not None or not structure.has_dead_time_search,
    )


def _coarse_starts(problem: Problem, structure: Structure) -> list[tuple[NDArray[np.float64], float]]:
    """Try a grid on a thinned record and keep the best start for each of a few dead times."""
    stride = max(1, problem.t.size // _COARSE_ROWS)
    rows = np.flatnonzero(problem.used)[::stride]
    kept = np.zeros(problem.used.size, dtype=bool)
    kept[rows] = True
    coarse = Problem(problem.data, kept, drift=problem.drift)
    shortest = problem.data.interval
    longest = max(0.8 * problem.longest_dead_time, 2.0 * shortest)
    dead_times = np.concatenate([[0.3 * shortest], np.geomspace(shortest, longest, _COARSE_DEAD_TIMES - 1)])
    searches = [np.asarray(q, dtype=float) for q in structure.starts(problem.data.span, problem.data.interval)]
    best: list[tuple[float, NDArray[np.float64], float]] = []
    for dead_time in dead_times:
        costs = []
        for search in searches:
            residual, _ = coarse.project(structure, search, float(dead_time), slopes=False)
            costs.append(float(residual @ residual))
        winner = int(np.argmin(costs))
        best.append((costs[winner], searches[winner], float(dead_time)))
    best.sort(key=lambda entry: entry[0])
    return [(search, dead_time) for _, search, dead_time in best[:_STARTS]]


def _best_lookup(
    problem: Problem, structure: Structure, starts: list[tuple[NDArray[np.float64], float]]
) -> float:
    """Find the dead time of a structure whose cost is flat between rows: the flat part's middle."""
    nothing = np.empty(0)

    def cost(dead_time: float) -> float:
        residual, _ = problem.project(structure, nothing, dead_time, slopes=False)
        return float(residual @ residual)

    anchor = min((start[1] for start in starts), key=cost)
    edges = np.unique(np.round((problem.held.t[:, None] - problem.held.at[None, :8]).ravel(), 9))
    edges = np.concatenate([[0.0], edges[edges > 0.0]])
    middles = 0.5 * (edges[1:] + edges[:-1])
    reach = max(0.6 * anchor, 4.0 * problem.data.interval)
    near = middles[np.abs(middles - anchor) <= reach]
    if near.size > 200:
        near = near[:: near.size // 200]
    costs = [cost(float(m)) for m in near]
    return float(near[int(np.argmin(costs))]) if near.size else anchor


def _levels(elapsed: NDArray[np.float64], *, drift: bool) -> NDArray[np.float64]:
    columns = [np.ones_like(elapsed)]
    if drift:
        columns.append(elapsed)
    return np.column_stack(columns)


def _limited(search: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.clip(search, -_LOG_LIMIT, _LOG_LIMIT)


def _solve_triangle(r: NDArray[np.float64], right: NDArray[np.float64]) -> NDArray[np.float64]:
    """Solve R x = b, giving zero to what the rows cannot tell."""
    diagonal = np.abs(np.diag(r))
    if diagonal.size and np.all(diagonal > 1e-12 * max(float(diagonal.max()), 1e-300)):
        return np.asarray(np.linalg.solve(r, right))
    return np.asarray(np.linalg.lstsq(r, right, rcond=1e-12)[0])
