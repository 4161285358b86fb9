"""Whether every move of the CO was answered with the same gain, and what to do if not.

A valve's curve, a process that changes with its level, or a dead band on reversal give each
move its own gain. One gain forced on all of them spoils lags and dead time too. So the moves
are scaled to what they achieved, the largest gain standing for one: the model's gain is then
the largest seen, which is the safe one to tune for.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from fitters.noise import colour, covariance
from fitters.response import HeldInput, respond

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from fitters.estimate import Estimate
    from fitters.fit import BumpData
    from fitters.problem import Problem

#: Moves looked at one by one; more are taken in two groups, up and down.
_ONE_BY_ONE = 8
#: Gains differ when the largest and the smallest are this far apart, as a share of their mean [1] ...
_APART = 0.10
#: ... by this many standard errors, or explaining what was left over down to this share [1].
_SURE = 4.0
_EXPLAINED = 2.0
#: A drift must explain what unequal gains leave over down to one part in this to be believed beside them [1].
_NO_DRIFT = 1.5
#: Gains this share of the lost part away from what a dead band would give are not explained by it [1].
_DEAD_BAND_FITS = 0.25
#: A move with less than this share of the typical gain, or of the other sign, was not answered at all [1].
_SEEN = 0.2


@dataclass(frozen=True, slots=True, kw_only=True)
class GainsByMove:
    """The gain each move showed.

    Attributes
    ----------
    scale : (g,) ndarray
        Gain of each move, or of each direction (down, up), over the largest one [1].
    differ : bool
        They differ by more than the log's uncertainty.
    dead_band : float
        Dead band that would explain it: what every reversal lost of the CO [CO unit]; zero
        where it would not.
    cost : float
        Sum of squares with the gains of their own [PV unit squared].
    data : BumpData
        The same test with the moves scaled to what they achieved.
    """

    scale: NDArray[np.float64]
    differ: bool
    dead_band: float
    cost: float
    data: BumpData


def gains_by_move(problem: Problem, estimate: Estimate) -> GainsByMove:
    """Give each move a gain of its own, dynamics as estimated.

    Parameters
    ----------
    problem : Problem
    estimate : Estimate
        Of a structure with one gain; its lags and dead time are taken as they are.

    Returns
    -------
    GainsByMove
    """
    held = problem.held
    group = _groups(held)
    count = int(group.max()) + 1
    columns = [
        respond(estimate.structure, _only(held, group == g), estimate.search, estimate.dead_time).value[0]
        for g in range(count)
    ]
    pv = problem.data.pv[problem.used] - problem.level
    root = np.sqrt(problem.weight)
    jacobian, factors, residual = _solve([*columns, problem.levels], pv, root)
    level_only = _solve([*columns, problem.levels[:, :1]], pv, root)
    if np.sum((root * level_only[2]) ** 2) < _NO_DRIFT * np.sum((root * residual) ** 2):
        jacobian, factors, residual = level_only  # drift and unequal gains imitate each other
    gains = factors[:count]
    typical = float(np.median(np.abs(gains)))
    known = (np.abs(gains) > _SEEN * typical) & (np.sign(gains) == np.sign(estimate.gains[0]))
    scale = np.ones(count)
    differ = False
    if count > 1 and np.count_nonzero(known) > 1:
        largest = float(np.max(np.abs(gains[known])))
        scale[known] = np.abs(gains[known]) / largest
        high = int(np.argmax(np.where(known, np.abs(gains), -np.inf)))
        low = int(np.argmin(np.where(known, np.abs(gains), np.inf)))
        gap = abs(gains[high]) - abs(gains[low])
        if gap > _APART * np.mean(np.abs(gains[known])):
            noise = colour(residual, problem.t, jacobian, problem.weight)
            cov = covariance(jacobian, problem.t, noise, problem.weight)
            between = float(np.sqrt(max(cov[high, high] + cov[low, low] - 2.0 * cov[high, low], 0.0)))
            explained = estimate.cost > _EXPLAINED * float(np.sum((root * residual) ** 2))
            differ = bool(gap > _SURE * between or explained)
    lost = 0.0
    if differ and count == held.at.size and bool(np.all(known)):
        lost, scale = _as_dead_band(held.size, np.abs(gains), scale)
    return GainsByMove(
        scale=scale,
        differ=differ,
        dead_band=lost,
        cost=float(np.sum((root * residual) ** 2)),
        data=_scaled(problem.data, held, scale[group]),
    )


def _as_dead_band(
    size: NDArray[np.float64], gains: NDArray[np.float64], scale: NDArray[np.float64]
) -> tuple[float, NDArray[np.float64]]:
    """Explain unequal gains by a dead band that every reversal has to cross first, if it can.

    The first move is taken to go where the valve last went. A move of size d achieves
    g (d - b) after a reversal and g d otherwise; g and b by least squares.
    """
    turned = np.concatenate([[False], np.sign(size[1:]) != np.sign(size[:-1])])
    moved = np.abs(size)
    columns = np.column_stack([moved, -turned.astype(float)])
    (gain, product), *_ = np.linalg.lstsq(columns, gains * moved, rcond=None)
    lost = float(product / gain)
    if not np.any(turned) or not 0.0 < lost < float(np.min(moved[turned])):
        return 0.0, scale
    explained = 1.0 - lost * turned / moved
    apart = np.abs(gains / gain - explained)
    if float(np.max(apart)) > _DEAD_BAND_FITS * lost / float(np.min(moved[turned])):
        return 0.0, scale
    return lost, explained


def _solve(
    columns: list[NDArray[np.float64]], pv: NDArray[np.float64], root: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Give the columns side by side, the factors, and what they leave over."""
    jacobian = np.column_stack(columns)
    factors = np.asarray(np.linalg.lstsq(root[:, None] * jacobian, root * pv, rcond=None)[0], dtype=float)
    return jacobian, factors, pv - jacobian @ factors


def _groups(held: HeldInput) -> NDArray[np.intp]:
    if held.at.size <= _ONE_BY_ONE:
        return np.arange(held.at.size)
    _, group = np.unique(np.sign(held.size), return_inverse=True)
    return np.asarray(group)


def _only(held: HeldInput, chosen: NDArray[np.bool_]) -> HeldInput:
    return replace(held, at=held.at[chosen], size=held.size[chosen], settling_from=None)


def _scaled(data: BumpData, held: HeldInput, scale: NDArray[np.float64]) -> BumpData:
    """Rebuild the CO from its moves, each as large as what it achieved."""
    values = data.co_values[0] + np.concatenate([[0.0], np.cumsum(held.size * scale)])
    times = np.concatenate([data.co_times[:1], held.at])
    return replace(data, co_times=times, co_values=values)
