"""Which gains keep every criterion: all of them from one frequency sweep."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np

from pipeline.loop.sweep import Grid, Sweep, frequency_grid, sweep, unstable_roots
from pipeline.tuning import bars
from pipeline.tuning.bars import FAR, SLIT

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from pipeline.loop.stack import LoopStack
    from pipeline.tuning.types import Criteria

    Reals = NDArray[np.float64]

#: Criteria by number, as the record names them.
NAMES = (
    "phase_margin",
    "gain_margin",
    "max_sensitivity",
    "max_complementary",
    "closed_loop_time",
    "crossover",
    "noise_gain",
)
#: Gains beyond this, up or down, are nobody's [ln gain].
_ABSURD = 60.0
#: Where to test a gap that has no end [ln gain].
_BEYOND = 0.7


@dataclass(frozen=True, kw_only=True)
class GainRange:
    """Gains at which one loop is stable and keeps every criterion; the uppermost such range.

    Attributes
    ----------
    low, high : (m,) ndarray
        Ends [1]; zero and inf where nothing limits, nan in a row without such a gain.
    low_by, high_by : (m,) ndarray of int
        Criterion (index into `NAMES`) that sets each end, -1 where nothing does.
    """

    low: Reals
    high: Reals
    low_by: NDArray[np.int64]
    high_by: NDArray[np.int64]


def gain_range(
    loops: LoopStack,
    criteria: Criteria,
    grid: Grid,
    *,
    noise: Reals | None = None,
    exact: bool = False,
) -> GainRange:
    """Find the uppermost range of gains that keeps every criterion a frequency response can judge.

    Parameters
    ----------
    loops : LoopStack
        Loops at gain one.
    criteria : Criteria
    grid : Grid
        Of the sweep.
    noise : (m,) ndarray, optional
        Noise gain of each row's controller at gain one; needed for a limit on it [CO unit / PV unit].
    exact : bool
        Refine every end to double precision.

    Returns
    -------
    GainRange

    Notes
    -----
    Each frequency forbids gains. Phase margin: the gain that puts the crossover there, if
    the phase is too near -180 degrees. Gain margin: gains within the margin of a phase
    crossing's own. Ms: gains for which |1 + k L| < 1/Ms, between the roots of a quadratic
    in k; Mt likewise with 1/L for L. The union of all these bars on the ln-gain axis leaves gaps; every limit of
    stability lies in a bar, so a gap is stable throughout or nowhere.
    """
    m = len(loops)
    s = sweep(loops, frequency_grid(loops, grid))
    forbidden = [
        bars.phase_bars(s, criteria, exact),
        bars.gain_bars(s, criteria),
        bars.peak_bars(s, criteria.max_sensitivity, exact),
        bars.peak_bars(s, criteria.max_complementary, exact, complementary=True),
        bars.speed_bars(s, _fastest(loops, criteria.closed_loop_time)),
        bars.speed_bars(s, criteria.crossover),
        bars.no_bars() if noise is None else bars.noise_bars(noise, criteria.noise_gain),
    ]
    rows, low, high = (np.concatenate([b[j] for b in forbidden]) for j in range(3))
    kind = np.concatenate([np.full(b[0].size, i) for i, b in enumerate(forbidden)])
    order = np.lexsort((low, rows))
    low, high, kind = low[order], high[order], kind[order]
    ends = np.searchsorted(rows[order], np.arange(m + 1))
    found = GainRange(
        low=np.full(m, np.nan),
        high=np.full(m, np.nan),
        low_by=np.full(m, -1, dtype=np.int64),
        high_by=np.full(m, -1, dtype=np.int64),
    )
    own = [slice(a, b) for a, b in pairwise(ends)]
    gaps = [_gaps(low[i], high[i], kind[i]) for i in own]
    flat = [(i, g) for i, row in enumerate(gaps) for g in row if abs(g[4]) < _ABSURD]
    if not flat:
        return found
    at = np.array([i for i, _ in flat], dtype=np.intp)
    middle = np.array([g[4] for _, g in flat])
    # The tests of stability share one sweep: scaling N needs no new evaluation.
    gain = np.exp(middle)[:, None]
    picked = loops.scaled(gain, at)
    tested = (
        sweep(picked, frequency_grid(picked, grid))
        if exact
        else Sweep(
            loops=picked,
            omega=s.omega,
            top=s.top[at] * gain,
            bottom=s.bottom[at],
            log_gain=s.log_gain[at] + middle[:, None],
            past=s.past[at],
            resolved=s.resolved[at],
        )
    )
    stable = unstable_roots(tested) < 0.5
    for (i, g), good in zip(flat, stable, strict=True):
        if good:
            found.low[i], found.high[i] = np.exp(g[0]), np.exp(g[1]) if g[1] < FAR else np.inf
            found.low_by[i], found.high_by[i] = g[2], g[3]
            if g[0] <= -FAR:
                found.low[i] = 0.0
    return found


def _fastest(loops: LoopStack, closed_loop_time: float | None) -> Reals | None:
    """Give the crossover at which a loop of an integrator and a dead time has that time constant.

    Skogestad (2003), J. Process Control 13, 291-309, asks for such a loop: its crossover is at
    1 / (closed-loop time constant + dead time).
    """
    return None if closed_loop_time is None else 1.0 / (closed_loop_time + loops.delay)


def _gaps(low: Reals, high: Reals, kind: NDArray[np.int64]) -> list[tuple[float, float, int, int, float]]:
    """Give the gaps between bars, rising: ends, the criteria at them, a gain inside."""
    if low.size == 0:
        return [(-FAR, FAR, -1, -1, 0.0)]
    reach = np.maximum.accumulate(high)
    holder = np.where(high >= reach, np.arange(high.size), 0)
    holder = np.maximum.accumulate(holder)
    out = []
    if low[0] > -FAR:
        out.append((-FAR, float(low[0]), -1, int(kind[0]), float(low[0]) - _BEYOND))
    for j in np.flatnonzero(low[1:] > reach[:-1] + 2.0 * SLIT):
        a, b = float(reach[j]), float(low[j + 1])
        out.append((a, b, int(kind[holder[j]]), int(kind[j + 1]), 0.5 * (a + b)))
    if reach[-1] < FAR:
        out.append((float(reach[-1]), FAR, int(kind[holder[-1]]), -1, float(reach[-1]) + _BEYOND))
    return out
