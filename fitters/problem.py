"""A test made ready for fitting: the rows that count, the linear part solved on the way.

The search runs over the few numbers that enter non-linearly; the numerator, the offset and
the drift follow by linear least squares at every step (variable projection: Golub and
Pereyra 1973, with the simplified derivative of Kaufman 1975).
"""

from __future__ import annotations

from dataclasses import replace
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np

from fitters.noise import WHITE, Whitener
from fitters.response import HeldInput, respond

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from fitters.fit import BumpData
    from fitters.noise import Noise
    from fitters.response import Response
    from fitters.structures.base import Structure

#: Searched logarithms beyond these leave the shapes without meaning: exp(+-40).
_LOG_LIMIT = 40.0
#: Rows and moves of the sketch; enough to tell good starts from bad ones.
_SKETCHED_ROWS = 64
_SKETCHED_MOVES = 8
#: A regressor this small against its own size before projection tells nothing new [1].
_NOTHING_NEW = 1e-12


class Problem:
    """A test prepared for fitting: rows in use, level and drift projected out.

    Parameters
    ----------
    data : BumpData
    used : (n,) bool ndarray
        Rows that count.
    drift : bool
        Fit a straight-line drift besides the level.
    settling : bool
        Fit what was left of an earlier move when the record began.
    noise : Noise
        Colour that the rows are freed of before they are fitted.

    Attributes
    ----------
    t, weight, pv : (m,) ndarray
        Times [s], logged rows per row [1], and PV whitened, without level and drift, in
        spreads of the PV, at the used rows.
    held, held_all : HeldInput
        The CO seen at the used rows, and at all of them.
    spread : float
        Standard deviation of the PV [PV unit].
    levels, levels_all : (m, 1 or 2), (n, 1 or 2) ndarray
        Columns of offset and, if fitted, drift.
    longest_dead_time : float
        Dead times beyond this leave too few rows to see an answer [s].
    """

    def __init__(
        self,
        data: BumpData,
        used: NDArray[np.bool_],
        *,
        drift: bool,
        settling: bool,
        noise: Noise = WHITE,
    ) -> None:
        self.data = data
        self.used = used
        self.drift = drift
        self.settling = settling
        self.noise = noise
        self.held_all = HeldInput.from_data(data, settling=settling)
        self.held = self.held_all.at_rows(used)
        self.t = data.t[used]
        self.weight = data.weight[used]
        self.levels = _levels(self.t - data.t[0], drift=drift)
        self.levels_all = _levels(data.t - data.t[0], drift=drift)
        self.plain = noise.slow_share <= 0.0 and bool(np.all(self.weight == 1.0))
        self._whitener = Whitener(self.t, noise, self.weight)
        self._level_basis = np.linalg.qr(self.whiten(self.levels.T).T)[0]
        self.level = float(np.mean(data.pv[used]))
        self.spread = float(np.std(data.pv[used])) or 1.0
        self.pv = self.without_level((data.pv[used] - self.level) / self.spread)
        moved_at = float(self.held.at[0]) if self.held.at.size else float(data.t[0])
        self.longest_dead_time = max(float(data.t[-1]) - moved_at - 4.0 * data.interval, data.interval)

    def changed(
        self,
        *,
        data: BumpData | None = None,
        used: NDArray[np.bool_] | None = None,
        drift: bool | None = None,
        settling: bool | None = None,
        noise: Noise | None = None,
    ) -> Problem:
        """Give the same problem with something changed.

        Parameters
        ----------
        data : BumpData or None
        used : (n,) bool ndarray or None
        drift, settling : bool or None
        noise : Noise or None
        """
        return Problem(
            self.data if data is None else data,
            self.used if used is None else used,
            drift=self.drift if drift is None else drift,
            settling=self.settling if settling is None else settling,
            noise=self.noise if noise is None else noise,
        )

    def whiten(self, rows: NDArray[np.float64]) -> NDArray[np.float64]:
        """Make the noise in rows of values white and of one size.

        Parameters
        ----------
        rows : (..., m) ndarray
        """
        return rows if self.plain else self._whitener(rows)

    def without_level(self, rows: NDArray[np.float64]) -> NDArray[np.float64]:
        """Whiten rows of values and take offset and drift out of them.

        Parameters
        ----------
        rows : (..., m) ndarray
        """
        rows = self.whiten(rows)
        flat = rows.reshape(-1, rows.shape[-1])  # one product, not a stack of small ones
        return np.asarray(rows - ((flat @ self._level_basis) @ self._level_basis.T).reshape(rows.shape))

    @cached_property
    def sketch(self) -> Problem:
        """A smaller problem alike, for a first look: few rows, chatter merged, the first moves only."""
        held, until = self.held.condensed(_SKETCHED_MOVES)
        inside = np.flatnonzero(self.used & (self.data.t < until))
        if inside.size < _SKETCHED_ROWS:
            inside = np.flatnonzero(self.used)
        kept = np.zeros(self.used.size, dtype=bool)
        kept[inside[:: max(1, inside.size // _SKETCHED_ROWS)]] = True
        sketch = self.changed(used=kept)
        sketch.held = replace(held, t=sketch.t)
        return sketch

    def project(
        self, structure: Structure, search: NDArray[np.float64], dead_time: float
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Give the residual with the linear part solved, and its slopes.

        Parameters
        ----------
        structure : Structure
        search : (k,) ndarray
        dead_time : float
            [s].

        Returns
        -------
        residual : (m,) ndarray
            In spreads of the PV.
        slopes : (k + 1, m) ndarray
            Kaufman's derivative of the residual by the searched numbers and the dead time.
        """
        response, basis, factors, residual = self._solved(structure, search, dead_time)
        change = np.empty((structure.searched + 1, residual.size))
        change[:-1] = np.einsum("r,krn->kn", factors, response.by_search)
        change[-1] = factors @ response.by_dead_time
        change = self.without_level(change)
        change -= (change @ basis.T) @ basis
        return residual, -change

    def factors(
        self, structure: Structure, search: NDArray[np.float64], dead_time: float
    ) -> NDArray[np.float64]:
        """Give the linear factors at one point, in spreads of the PV.

        Parameters
        ----------
        structure : Structure
        search : (k,) ndarray
        dead_time : float
            [s].

        Returns
        -------
        (r,) ndarray
        """
        return self._solved(structure, search, dead_time)[2]

    def costs(
        self, structure: Structure, search: NDArray[np.float64], dead_times: NDArray[np.float64]
    ) -> NDArray[np.float64]:
        """Give the sum of squares at several dead times, the linear part solved.

        Parameters
        ----------
        structure : Structure
        search : (k,) ndarray
        dead_times : (d,) ndarray
            [s].

        Returns
        -------
        (d,) ndarray
            In squared spreads of the PV.
        """
        out = np.empty(dead_times.size)
        for i, dead_time in enumerate(dead_times):
            residual = self._solved(structure, search, float(dead_time))[3]
            out[i] = residual @ residual
        return out

    def _solved(
        self, structure: Structure, search: NDArray[np.float64], dead_time: float
    ) -> tuple[Response, NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
        """Give the response, its orthonormal basis, the linear factors and what they leave over."""
        response = respond(structure, self.held, limited(search), dead_time)
        basis, factors = _orthonormal(self.without_level(response.value), self.pv)
        return response, basis, factors, self.pv - (basis @ self.pv) @ basis


def limited(search: NDArray[np.float64]) -> NDArray[np.float64]:
    """Keep searched logarithms where their exponentials are finite.

    Parameters
    ----------
    search : (k,) ndarray
    """
    return np.clip(search, -_LOG_LIMIT, _LOG_LIMIT)


def _levels(elapsed: NDArray[np.float64], *, drift: bool) -> NDArray[np.float64]:
    columns = [np.ones_like(elapsed)]
    if drift:
        columns.append(elapsed)
    return np.column_stack(columns)


def _orthonormal(
    rows: NDArray[np.float64], pv: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Make a few rows orthonormal by hand, faster than a general QR, and solve for the PV.

    Returns the (r, m) basis, zero rows where a regressor tells nothing new, and the (r,) factors.
    """
    count = rows.shape[0]
    basis = np.zeros_like(rows)
    triangle = np.zeros((count, count))
    right = np.zeros(count)
    for i in range(count):
        rest = rows[i]
        size = float(np.sqrt(rest @ rest))
        for _ in range(2 if i else 0):  # twice: one pass leaves rounding behind (Kahan's rule)
            shared = basis[:i] @ rest
            rest = rest - shared @ basis[:i]
            triangle[:i, i] += shared
        left = float(np.sqrt(rest @ rest))
        if left > _NOTHING_NEW * size:
            basis[i] = rest / left
            triangle[i, i] = left
            right[i] = basis[i] @ pv
    factors = np.zeros(count)
    for i in reversed(range(count)):
        if triangle[i, i] > 0.0:
            factors[i] = (right[i] - triangle[i, i + 1 :] @ factors[i + 1 :]) / triangle[i, i]
    return basis, factors
