"""A load that changed by itself during the test: found, so that the part before it can be fitted.

A step of load answers through the process too. Such an answer is tried from every time of
the record; the best one must explain what is left over far better than slow noise does.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from fitters.noise import Whitener, deviance, whitened_covariance

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from fitters.estimate import Estimate
    from fitters.noise import Noise
    from fitters.problem import Problem

#: Times tried over the record.
_TIMES = 200
#: A load step must lower twice the negative log likelihood by this much beyond what slow noise
#: explains: searched for unasked, at any time, it would else be found in any wandering PV.
_SURE = 40.0
#: Less will do where it stands out of the noise seen before it by so many standard errors [1].
_LIKELY = 12.0
_STANDS_OUT = 10.0
#: ... and move the PV by at least this share of its whole range [1].
_SEEN = 0.05
#: So near a move, in lags besides the dead time, it cannot be told from the move's own answer [1].
_NEAR_A_MOVE = 0.7
#: Its time is known to about this many lags [1].
_UNSURE = 0.3
#: The part before it must show a move's answer for so many lags besides the dead time [1].
_LAGS_BEFORE = 1.5


@dataclass(frozen=True, slots=True, kw_only=True)
class LoadStep:
    """A change of the PV that no move of the CO explains.

    Attributes
    ----------
    at : float
        When [s].
    clean_until : float
        Rows before this are surely free of it [s].
    size : float
        How far it moved the PV by the end of the record [PV unit].
    leaves_enough : bool
        The part before it holds a move with enough of its answer.
    cost : float
        Sum of squares with the step allowed for [PV unit squared].
    """

    at: float
    clean_until: float
    size: float
    leaves_enough: bool
    cost: float


def load_step(problem: Problem, estimate: Estimate, before: Noise | None = None) -> LoadStep | None:
    """Look for a load step in what an estimate leaves over.

    Parameters
    ----------
    problem : Problem
    estimate : Estimate
    before : Noise or None
        Noise of the part before; a first look, which does without, returns the best it finds.

    Returns
    -------
    LoadStep or None
        None where slow noise explains the residual as well.
    """
    lag = max(estimate.slowest, 2.0 * problem.data.interval)
    times = _times(problem, estimate.dead_time, lag)
    if times.size == 0:
        return None
    root = np.sqrt(problem.weight)
    residual = root * estimate.residual[problem.used]
    basis = np.linalg.qr(root[:, None] * estimate.jacobian)[0]
    residual -= basis @ (basis.T @ residual)  # lags taken from a part do not fit the whole best
    tau = problem.t - times[:, None]
    values = estimate.structure.values(np.maximum(tau, 0.0), list(estimate.search))[0]
    answers = root * np.where(tau > 0.0, values, 0.0)
    fresh = answers - (answers @ basis) @ basis.T
    power = np.einsum("dn,dn->d", fresh, fresh)
    told = power > 1e-6 * np.einsum("dn,dn->d", answers, answers)
    gained = np.where(told, (fresh @ residual) ** 2 / np.where(told, power, 1.0), 0.0)
    best = int(np.argmax(gained))
    if gained[best] <= 0.0:
        return None
    factor = float(fresh[best] @ residual) / power[best]
    size = factor * float(answers[best, -1] / root[-1])
    if abs(size) < _SEEN * float(np.ptp(problem.data.pv)):
        return None
    left = (residual - factor * fresh[best]) / root
    wider = np.column_stack([estimate.jacobian, answers[best] / root])
    without = deviance(residual / root, problem.t, estimate.jacobian, problem.weight)
    sure = without - deviance(left, problem.t, wider, problem.weight)
    if before is not None and sure < (_LIKELY if _stands_out(problem, wider, factor, before) else _SURE):
        return None
    at = float(times[best])
    firsts = problem.held.at[problem.held.at < at]
    enough = firsts.size > 0 and at - float(firsts[0]) > estimate.dead_time + _LAGS_BEFORE * lag
    return LoadStep(
        at=at,
        clean_until=at - min(_UNSURE * lag, 0.5 * (at - float(np.max(firsts, initial=problem.t[0])))),
        size=float(size),
        leaves_enough=bool(enough),
        cost=float(residual @ residual - gained[best]),
    )


def _stands_out(problem: Problem, wider: NDArray[np.float64], factor: float, before: Noise) -> bool:
    """Hold the step, the last column's factor, against the noise seen before it."""
    if before.sd == 0.0:
        return False
    whitened = Whitener(problem.t, before, problem.weight)(wider.T).T
    variance = whitened_covariance(whitened, before)[-1, -1]
    return bool(abs(factor) > _STANDS_OUT * np.sqrt(variance))


def _times(problem: Problem, dead_time: float, lag: float) -> NDArray[np.float64]:
    """Give the times at which a load step would not be taken for a move's own answer."""
    rows = problem.t[2 : -max(3, problem.t.size // 50) : max(1, problem.t.size // _TIMES)]
    since = rows - problem.held.at[:, None]
    near = np.abs(since - dead_time) < _NEAR_A_MOVE * lag + 3.0 * problem.data.interval
    near |= (since >= 0.0) & (since < dead_time)
    return np.asarray(rows[~np.any(near, axis=0)])
