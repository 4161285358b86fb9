"""The exact response of a structure to the logged CO.

The CO is held between its logged times, never joined by lines; dead time is a real number;
rows may come at any times. With few moves the unit-step shapes are added up. A CO that
changes at nearly every row is propagated instead through the exact state recursion, whose
cost grows with the rows and not with rows times moves.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
from scipy.linalg import expm
from scipy.linalg.blas import dtbsv

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from fitters.fit import BumpData
    from fitters.structures.base import Structure

#: Above this many (move, row) pairs the recursion is the cheaper way; measured near 1e5.
_PAIRS_FOR_SUPERPOSITION = 100_000
#: Up to this many moves superposition is cheaper whatever the number of rows.
_FEW_MOVES = 8
#: Changes that add up to less than this share of the CO's range are chatter to a first look [1].
_CHATTER = 0.1
#: Steps of the recursion closer than this share of the longest are one and the same.
_SAME_STEP = 1e-11


@dataclass(frozen=True, slots=True)
class HeldInput:
    """A CO held between its changes, seen at the logged times.

    Attributes
    ----------
    t : (n,) ndarray
        Times at which the response is wanted [s].
    at : (m,) ndarray
        Times of the changes [s].
    size : (m,) ndarray
        Change of the CO at each of them [CO unit].
    settling_from : float or None
        Where the PV was still on its way when the record began, that time [s]: a last
        regressor then stands for what came before, of unknown size. None: it was at rest.
    """

    t: NDArray[np.float64]
    at: NDArray[np.float64]
    size: NDArray[np.float64]
    settling_from: float | None = None

    @classmethod
    def from_data(cls, data: BumpData, *, settling: bool) -> HeldInput:
        """Take the changes out of a bump's CO; the first value has always been there.

        Parameters
        ----------
        data : BumpData
        settling : bool
            The PV may still have been on its way at the start.
        """
        size = np.diff(data.co_values)
        moved = size != 0.0
        start = float(data.t[0]) if settling else None
        return cls(data.t, data.co_times[1:][moved], size[moved], start)

    def at_rows(self, rows: NDArray[np.bool_] | NDArray[np.intp]) -> HeldInput:
        """Give the same input seen at some of the rows only.

        Parameters
        ----------
        rows : (n,) bool or (k,) int ndarray
        """
        return HeldInput(self.t[rows], self.at, self.size, self.settling_from)

    def condensed(self, count: int) -> tuple[HeldInput, float]:
        """Merge chatter into the moves it adds up to, and keep the first of them.

        Parameters
        ----------
        count : int
            Moves to keep at most.

        Returns
        -------
        HeldInput
        float
            Time until which the kept moves are all there are [s].
        """
        if self.at.size <= count:
            return self, np.inf
        smallest = _CHATTER * float(np.ptp(np.cumsum(self.size)))
        at, size, pending = [], [], 0.0
        for time, change in zip(self.at.tolist(), self.size.tolist(), strict=True):
            pending += change
            if abs(pending) >= smallest:
                at.append(time)
                size.append(pending)
                pending = 0.0
        until = at[count] if len(at) > count else np.inf
        return replace(self, at=np.array(at[:count]), size=np.array(size[:count])), until


@dataclass(frozen=True, slots=True)
class Response:
    """Responses per linear factor and their derivatives at n logged times.

    The rows are the structure's own, then one more if the PV was still settling.

    Attributes
    ----------
    value : (r, n) ndarray
    by_search : (k, r, n) ndarray
    by_dead_time : (r, n) ndarray
    """

    value: NDArray[np.float64]
    by_search: NDArray[np.float64]
    by_dead_time: NDArray[np.float64]


def respond(structure: Structure, held: HeldInput, search: NDArray[np.float64], dead_time: float) -> Response:
    """Give the exact response of a structure to a held CO.

    Parameters
    ----------
    structure : Structure
    held : HeldInput
    search : (k,) ndarray
        The structure's searched numbers.
    dead_time : float
        Dead time [s]; a negative one answers before the move, which only the search uses.

    Returns
    -------
    Response
        PV per unit of each linear factor.
    """
    few = held.at.size <= _FEW_MOVES or held.at.size * held.t.size <= _PAIRS_FOR_SUPERPOSITION
    answer = (_superpose if few else _recur)(structure, held, search, dead_time)
    if held.settling_from is None:
        return answer
    before = structure.shapes(held.t - held.settling_from, list(search))
    return Response(
        value=np.concatenate([answer.value, before.value[:1]]),
        by_search=np.concatenate([answer.by_search, before.by_search[:, :1]], axis=1),
        by_dead_time=np.concatenate([answer.by_dead_time, np.zeros((1, held.t.size))]),
    )


def _superpose(
    structure: Structure, held: HeldInput, search: NDArray[np.float64], dead_time: float
) -> Response:
    tau = held.t - (held.at[:, None] + dead_time)
    on = tau > 0.0 if structure.has_dead_time_search else tau >= 0.0
    weight = on * held.size[:, None]
    shapes = structure.shapes(np.maximum(tau, 0.0), list(search))
    return Response(
        value=np.einsum("jn,rjn->rn", weight, shapes.value),
        by_search=np.einsum("jn,krjn->krn", weight, shapes.by_search),
        by_dead_time=-np.einsum("jn,rjn->rn", weight, shapes.by_time),
    )


def _recur(structure: Structure, held: HeldInput, search: NDArray[np.float64], dead_time: float) -> Response:
    """Propagate one state through which every response and derivative can be read.

    All of them are polynomials over D(s)**2, D being the structure's denominator, since
    d(N/D)/dq = -N (dD/dq) / D**2.
    """
    if structure.searched == 0 and structure.integrators == 0:
        return _look_up(structure, held, search, dead_time)
    unit = float(np.median(np.diff(held.t)))  # the recursion's own time unit keeps numbers near one
    numerators, denominator, slopes = _polynomials(structure, search, unit)
    square = np.polymul(denominator, denominator)
    order = square.size - 1
    rows = [np.polymul(n, denominator) for n in numerators]
    rows += [-np.polymul(n, slope) for slope in slopes for n in numerators]
    lead = square[0]
    read_out = np.zeros((len(rows), order))
    for i, row in enumerate(rows):
        read_out[i, order - row.size :] = row / lead
    a = np.zeros((order, order))
    a[0] = -square[1:] / lead
    a[1:, :-1] = np.eye(order - 1)

    state, level = _propagate(a, (held.t - dead_time) / unit, held.at / unit, held.size)
    outputs = read_out @ state
    count = len(numerators)
    slope_of_value = read_out[:count] @ (a @ state) + read_out[:count, :1] * level
    return Response(
        value=outputs[:count],
        by_search=outputs[count:].reshape(len(slopes), count, held.t.size),
        by_dead_time=-slope_of_value / unit,
    )


def _polynomials(
    structure: Structure, search: NDArray[np.float64], unit: float
) -> tuple[list[NDArray[np.float64]], NDArray[np.float64], list[NDArray[np.float64]]]:
    """Give numerators, denominator and its slopes by the searched numbers, in the time unit."""

    def scaled(coefficients: tuple[float, ...]) -> NDArray[np.float64]:
        powers = np.arange(len(coefficients))[::-1]
        return np.asarray(np.asarray(coefficients) / unit**powers)

    def denominator_at(q: NDArray[np.float64]) -> NDArray[np.float64]:
        return scaled(structure.model(q, np.ones(structure.gains), 0.0).denominator)

    eye = np.eye(structure.gains)
    numerators = [scaled(structure.model(search, row, 0.0).numerator) for row in eye]
    slopes = []
    step = 1e-5  # central differences of a low polynomial in exp(q): good to 1e-10
    for k in range(structure.searched):
        shift = np.zeros(structure.searched)
        shift[k] = step
        slopes.append((denominator_at(search + shift) - denominator_at(search - shift)) / (2.0 * step))
    return numerators, denominator_at(search), slopes


def _propagate(
    a: NDArray[np.float64],
    wanted: NDArray[np.float64],
    at: NDArray[np.float64],
    size: NDArray[np.float64],
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Solve x' = A x + e1 u exactly at the wanted times, u stepping by `size` at `at`.

    The steps between events form one block-bidiagonal triangular system, solved in one
    call to the banded triangular solver.
    """
    order = a.shape[0]
    events = np.concatenate([at, wanted])
    is_row = np.concatenate([np.zeros(at.size, bool), np.ones(wanted.size, bool)])
    index = np.argsort(events, kind="stable")
    events, is_row = events[index], is_row[index]
    change = np.concatenate([size, np.zeros(wanted.size)])[index]
    level = np.cumsum(change)
    steps = np.diff(events)
    quantum = _SAME_STEP * max(float(steps.max(initial=0.0)), 1e-300)
    unique, which = np.unique(np.round(steps / quantum), return_inverse=True)
    block = np.zeros((order + 1, order + 1))
    block[:order, :order] = a
    block[0, order] = 1.0
    grown = expm(block * (unique * quantum)[:, None, None])
    phi = grown[which, :order, :order]
    drive = grown[which, :order, order] * level[:-1, None]

    count = events.size
    banded = np.zeros((2 * order, count * order))
    banded[0] = 1.0
    for row in range(order):
        for column in range(order):
            below = order + row - column
            banded[below, column : (count - 1) * order : order] = -phi[:, row, column]
    right = np.zeros((count, order))
    right[1:] = drive
    solved = dtbsv(2 * order - 1, np.asfortranarray(banded), right.ravel(), lower=1, diag=1)
    state = solved.reshape(count, order)
    unsorted = np.empty((wanted.size, order))
    levels = np.empty(wanted.size)
    place = index[is_row] - at.size
    unsorted[place] = state[is_row]
    levels[place] = level[is_row]
    return unsorted.T, levels


def _look_up(
    structure: Structure, held: HeldInput, search: NDArray[np.float64], dead_time: float
) -> Response:
    """Pure dead time with a busy CO: its value some time ago, looked up."""
    del search
    seen = np.searchsorted(held.at, held.t - dead_time, side="right")
    level = np.concatenate([[0.0], np.cumsum(held.size)])[seen]
    empty = np.zeros((0, structure.gains, held.t.size))
    return Response(value=level[None], by_search=empty, by_dead_time=np.zeros((1, held.t.size)))
