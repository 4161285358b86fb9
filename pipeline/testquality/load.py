"""One load step beside the moves: does it explain the PV better than a gain of its own for each move."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from pipeline.testquality.shape import unit_response

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from pipeline.bumps import Bump

#: Times at which a load step is tried, and the lags and dead times of the moves' answer, in rises [1].
_PLACES = 80
_LAGS = np.array([0.3, 0.45, 0.65, 0.95, 1.4, 40.0])
_DEAD_TIMES = np.array([0.0, 0.15, 0.3, 0.6])


@dataclass(frozen=True, slots=True, kw_only=True)
class LoadStep:
    """The load step that explains most.

    Attributes
    ----------
    at_s : float
        When it came [s].
    size : float
        What it did to the PV within three rises [PV unit].
    squares : float
        Sum of squares left over with it and one gain for all moves.
    """

    at_s: float
    size: float
    squares: float


def find_load(
    t: NDArray[np.float64], pv: NDArray[np.float64], bumps: Sequence[Bump], rise_s: float
) -> LoadStep | None:
    """Explain the PV by moves of one gain and one load step answered with the same lag.

    Parameters
    ----------
    t, pv : (n,) ndarray
        Rows [s, PV unit].
    bumps : sequence of Bump
    rise_s : float
        Usual time from a move to 63 % of its answer [s].

    Returns
    -------
    LoadStep or None
        None where no step differs from what the moves do.
    """
    # at the very start a step is the rest of an earlier answer, at the very end nothing shows it
    places = np.linspace(t[0] + rise_s, t[-1] - 0.5 * rise_s, _PLACES)
    if places[-1] <= places[0]:
        return None
    best: LoadStep | None = None
    for order in (1, 2):
        for lag in _LAGS * rise_s / order:
            tried = np.column_stack([unit_response(t - place, lag, order) for place in places])
            for dead in _DEAD_TIMES * rise_s:
                found = _with_one(t, pv, bumps, tried, (lag, dead, order))
                if found is not None and (best is None or found[2] < best.squares):
                    reach = float(unit_response(np.array([3.0 * rise_s]), lag, order)[0])
                    best = LoadStep(at_s=float(places[found[0]]), size=found[1] * reach, squares=found[2])
    return best


def _with_one(
    t: NDArray[np.float64],
    pv: NDArray[np.float64],
    bumps: Sequence[Bump],
    tried: NDArray[np.float64],
    form: tuple[float, float, int],
) -> tuple[int, float, float] | None:
    """Index and amplitude of the best step, and the squares left, for one form of answer."""
    lag, dead, order = form
    moved = sum(
        ((m.after - m.before) * unit_response(t - m.at_s - dead, lag, order) for b in bumps for m in b.moves),
        np.zeros(t.size),
    )
    since = t - t[0]
    base, _ = np.linalg.qr(np.column_stack([moved, np.ones(t.size), since, np.exp(-since / lag)]))
    left = pv - base @ (base.T @ pv)
    own = tried - base @ (base.T @ tried)
    energy = np.einsum("ij,ij->j", own, own)
    # a step that the rest can imitate says nothing
    usable = energy > 1e-3 * t.size * np.maximum(np.max(tried, axis=0) ** 2, 1e-300)
    if not np.any(usable):
        return None
    aimed = left @ own
    gained = np.where(usable, aimed**2 / np.maximum(energy, 1e-300), 0.0)
    k = int(np.argmax(gained))
    return k, float(aimed[k] / energy[k]), float(left @ left) - float(gained[k])
