"""A long log made short without losing what it tells.

Rows are replaced by the means of ever longer runs of rows as the last move falls behind:
single rows where the answer begins, longer means where it only creeps. The mean of k rows
carries their information on anything that hardly bends within the run, and stands in the fit
with their weight.
"""

from __future__ import annotations

from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np

from fitters.fit import BumpData

if TYPE_CHECKING:
    from numpy.typing import NDArray

#: Logs up to this many rows are left as they are.
_ROWS_LEFT_ALONE = 3000
#: A run is this share of the time since the last move, in rows [1]: short against any lag or
#: dead time that began with the move. The first share that keeps the rows few enough is taken.
_SHARES = (0.01, 0.02, 0.04, 0.08)
#: Runs before the first move, where nothing happens.
_BASELINE_RUNS = 200
#: A CO that changes at more than this share of the rows is averaged with the PV over even runs [1].
_BUSY = 0.02
#: Deviations from their neighbours' median, in robust standard deviations, that keep a row out of a mean [1].
_SPIKE = 6.0
_MAD_TO_SD = 1.4826


def thinned(data: BumpData) -> BumpData:
    """Replace the rows of a long log by means of runs; a short one is returned as it is.

    Parameters
    ----------
    data : BumpData

    Returns
    -------
    BumpData
        At most a few thousand rows, each with the number of logged rows it stands for.
    """
    count = data.t.size
    if count <= _ROWS_LEFT_ALONE:
        return data
    if data.co_times.size > _BUSY * count:
        return _evenly(data)
    moves = np.searchsorted(data.t, data.co_times[1:])
    firsts = _runs(count, moves[(moves > 0) & (moves < count)])
    t, pv, weight = _means(data, firsts)
    return BumpData(t=t, pv=pv, co_times=data.co_times, co_values=data.co_values, weight=weight)


def _runs(count: int, moves: NDArray[np.intp]) -> NDArray[np.intp]:
    """Give the first row of each run; a run never reaches across a move."""
    edges = np.unique(np.concatenate([[0], moves, [count]]))
    for share in _SHARES:
        parts = [np.arange(0, edges[1], max(1, int(edges[1]) // _BASELINE_RUNS))]
        for start, end in pairwise(edges[1:]):
            parts.append(start + _growing(int(end - start), share))
        firsts = np.concatenate(parts)
        if firsts.size <= _ROWS_LEFT_ALONE:
            break
    return firsts


def _growing(length: int, share: float) -> NDArray[np.intp]:
    """Give firsts of runs that grow with the rows behind them: single ones, then geometric."""
    singles = np.arange(min(length, int(2.0 / share)))
    if singles.size == length:
        return singles
    steps = int(np.log(length / singles.size) / np.log1p(share)) + 1
    later = singles.size * (1.0 + share) ** np.arange(steps)
    return np.unique(np.concatenate([singles, later.astype(np.intp)]))


def _means(
    data: BumpData, firsts: NDArray[np.intp]
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Give mean time, mean PV and number of rows of each run, spikes left out of the longer ones."""
    length = np.diff(np.append(firsts, data.t.size))
    good = _without_spikes(data.pv) | np.repeat(length == 1, length)
    kept = np.add.reduceat(good.astype(float), firsts)
    some = kept > 0
    t = np.add.reduceat(np.where(good, data.t, 0.0), firsts)[some] / kept[some]
    pv = np.add.reduceat(np.where(good, data.pv, 0.0), firsts)[some] / kept[some]
    return t, pv, kept[some]


def _without_spikes(pv: NDArray[np.float64]) -> NDArray[np.bool_]:
    """Tell the rows that do not jump away from both neighbours and back."""
    before, after = np.diff(pv, prepend=pv[:1]), np.diff(pv, append=pv[-1:])
    jump = np.where(before * after < 0.0, np.minimum(np.abs(before), np.abs(after)), 0.0)
    typical = _MAD_TO_SD * float(np.median(np.abs(before[1:])))
    return np.asarray(jump <= _SPIKE * max(typical, np.finfo(float).tiny))


def _evenly(data: BumpData) -> BumpData:
    """Average PV and CO over runs of equal length: a linear process answers means with means."""
    firsts = np.arange(0, data.t.size, int(np.ceil(data.t.size / _ROWS_LEFT_ALONE)))
    t, pv, weight = _means(data, firsts)
    held = data.co_values[np.searchsorted(data.co_times, data.t, side="right") - 1]
    length = np.diff(np.append(firsts, data.t.size))
    co = np.add.reduceat(held, firsts) / length
    return BumpData(t=t, pv=pv, co_times=data.t[firsts], co_values=co, weight=weight)
