"""One quick look at all moves together: a common response, a gain for each move, and what is left over.

It is a look and not the fit that gains are taken from: it serves to tell what does not belong to the
moves. Every move is answered by the same lag or two equal lags behind one dead time; gains, offset, drift
and the rest of an earlier answer are linear and solved exactly.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from pipeline.bumps import Bump

#: Bumps looked at, rows near the moves and rows elsewhere: enough for the shape, few enough for no time.
_MOST_BUMPS, _NEAR_ROWS, _FAR_ROWS = 12, 240, 120
#: How long after a move rows count as near it, in rises [1].
_NEAR_RISES = 4.0
#: Grids of the lag and of the dead time, in rises [1]; the last lag stands for an integrator.
_LAGS = np.array([0.1, 0.2, 0.35, 0.6, 1.0, 1.7, 3.0, 6.0, 40.0])
_DEAD_TIMES = np.array([0.0, 0.1, 0.2, 0.35, 0.5, 0.7, 0.9])
#: Rounds in which the grid closes in on the best point, by this factor each [1].
_ROUNDS, _CLOSER = 4, 0.5
#: Share added to the diagonal so that columns that vanish do no harm [1].
_RIDGE = 1e-9
#: Noise sizes from which a row stands out from the median of its neighbours as a spike [1].
_SPIKE = 6.0
#: From the median absolute deviation to the standard deviation of a normal variable [1].
_MAD_TO_SD = 1.4826


@dataclass(frozen=True, slots=True, kw_only=True)
class Shape:
    """What the quick look found.

    Attributes
    ----------
    t, seen, left : (n,) ndarray
        Rows looked at [s], the PV there about its mean, and what the moves do not explain of it [PV unit].
    dead_time_s, lag_s : float
        Of the common response [s].
    order : {1, 2}
        One lag, or two equal ones.
    gains, errors : (m,) ndarray
        Gain of each bump and its standard error [PV unit / CO unit].
    sizes : (m,) ndarray
        CO change of each bump [CO unit].
    explained : float
        Share of the PV's variance that the moves explain [1].
    """

    t: NDArray[np.float64]
    seen: NDArray[np.float64]
    left: NDArray[np.float64]
    dead_time_s: float
    lag_s: float
    order: int
    gains: NDArray[np.float64]
    errors: NDArray[np.float64]
    sizes: NDArray[np.float64]
    explained: float


def unit_response(since: NDArray[np.float64], lag: float, order: int) -> NDArray[np.float64]:
    """Give the response of one lag, or two equal ones, to a unit step.

    Parameters
    ----------
    since : ndarray
        Time since the step [s]; nothing happens before it.
    lag : float
        Each lag [s].
    order : {1, 2}
        How many lags.
    """
    x = np.maximum(since, 0.0) / lag
    return np.asarray(-np.expm1(-x) if order == 1 else 1.0 - (1.0 + x) * np.exp(-x))


def spikes(pv: NDArray[np.float64], noise: float) -> NDArray[np.bool_]:
    """Find rows that stand out from the median of the five around them and are left again at once.

    Parameters
    ----------
    pv : (n,) ndarray
        Rows that hold a PV [PV unit].
    noise : float
        Standard deviation of its noise [PV unit].

    Returns
    -------
    (n,) bool ndarray
    """
    if pv.size < 5 or noise <= 0.0:
        return np.zeros(pv.size, dtype=bool)
    padded = np.concatenate([pv[:2][::-1], pv, pv[-2:][::-1]])
    windows = np.lib.stride_tricks.sliding_window_view(padded, 5)
    middle = np.median(windows, axis=1)
    # on a steep rise neighbours lie far from their median too
    spread = np.median(np.abs(windows - middle[:, None]), axis=1)
    return np.asarray(np.abs(pv - middle) > _SPIKE * np.maximum(noise, _MAD_TO_SD * spread))


def look(
    t: NDArray[np.float64],
    pv: NDArray[np.float64],
    bumps: Sequence[Bump],
    *,
    noise: float,
    rise_s: float,
) -> Shape | None:
    """Explain the PV by all moves together.

    Parameters
    ----------
    t, pv : (n,) ndarray
        Rows that hold a PV [s, PV unit].
    bumps : sequence of Bump
        Those in use, one after the other.
    noise : float
        Standard deviation of the PV's noise [PV unit].
    rise_s : float
        Usual time from a move to 63 % of its answer [s].

    Returns
    -------
    Shape or None
        None where there is too little to look at.
    """
    used = list(bumps[:_MOST_BUMPS])
    if not used or rise_s <= 0.0:
        return None
    rows = _rows(t, pv, used, noise, rise_s)
    if rows.size < 3 * (len(used) + 3):
        return None
    t, y = t[rows], pv[rows]
    centred = y - y.mean()
    whole = float(centred @ centred)
    if whole <= 0.0:
        return None

    def squares(lag: float, dead: float, order: int) -> float:
        design = _design(t, used, lag, dead, order)
        square = design.T @ design
        square[np.diag_indices_from(square)] *= 1.0 + _RIDGE
        aimed = design.T @ centred
        return max(whole - float(aimed @ np.linalg.solve(square, aimed)), 0.0)

    left_squares, lag, dead, order = _search(squares, rise_s)
    design = _design(t, used, lag, dead, order)
    solved, *_ = np.linalg.lstsq(design, centred, rcond=None)
    left = centred - design @ solved
    free = max(t.size - design.shape[1], 1)
    inverse = np.linalg.pinv(design.T @ design)
    errors = np.sqrt(np.maximum(np.diag(inverse), 0.0) * float(left @ left) / free)
    m = len(used)
    return Shape(
        t=t,
        seen=centred,
        left=left,
        dead_time_s=dead,
        lag_s=lag,
        order=order,
        gains=solved[:m],
        errors=errors[:m],
        sizes=np.array([b.moves[-1].after - b.moves[0].before for b in used]),
        explained=1.0 - left_squares / whole,
    )


def _rows(
    t: NDArray[np.float64], pv: NDArray[np.float64], bumps: Sequence[Bump], noise: float, rise_s: float
) -> NDArray[np.intp]:
    inside = (t >= bumps[0].start_s) & (t <= bumps[-1].end_s) & ~spikes(pv, noise)
    near = np.zeros(t.size, dtype=bool)
    for bump in bumps:
        near |= (t >= bump.moves[0].at_s - rise_s) & (t < bump.moves[-1].at_s + _NEAR_RISES * rise_s)
    kept = []
    for part, most in ((inside & near, _NEAR_ROWS), (inside & ~near, _FAR_ROWS)):
        found = np.flatnonzero(part)
        kept.append(found[:: max(1, -(-found.size // most))])
    return np.sort(np.concatenate(kept))


def _design(
    t: NDArray[np.float64], bumps: Sequence[Bump], lag: float, dead: float, order: int
) -> NDArray[np.float64]:
    columns = [
        sum(
            (move.after - move.before) * unit_response(t - move.at_s - dead, lag, order)
            for move in bump.moves
        )
        for bump in bumps
    ]
    start = t - t[0]
    columns.extend((np.ones(t.size), start / max(float(start[-1]), 1e-300), np.exp(-start / lag)))
    return np.column_stack(columns)


def _search(squares: Callable[[float, float, int], float], rise_s: float) -> tuple[float, float, float, int]:
    """Search the grid, then closer and closer around its best point."""
    best = min(
        (squares(lag * rise_s, dead * rise_s, order), lag * rise_s, dead * rise_s, order)
        for order in (1, 2)
        for lag in _LAGS
        for dead in _DEAD_TIMES
    )
    ratio, step = 1.6, 0.1 * rise_s
    for _ in range(_ROUNDS):
        _, lag, dead, order = best
        around = [
            (squares(near, at, order), near, at, order)
            for near in (lag / ratio, lag, lag * ratio)
            for at in (max(dead - step, 0.0), dead, dead + step)
        ]
        best = min([best, *around])
        ratio, step = ratio**_CLOSER, step * _CLOSER
    return best
