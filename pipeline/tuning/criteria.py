"""Which gains keep every criterion: all of them from one frequency sweep."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import partial
from typing import TYPE_CHECKING

import numpy as np

from pipeline.loop.search import minima, roots
from pipeline.loop.sweep import Sweep, past_at, phase_crossings, sweep, unstable_roots

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from pipeline.loop.stack import LoopStack
    from pipeline.tuning.types import Criteria

    Reals = NDArray[np.float64]
    Rows = NDArray[np.intp]

#: Criteria by number, as they are named to the reader.
NAMES = ("phase_margin", "gain_margin", "max_sensitivity")
#: Half a gap's least width [ln gain]: narrower ones are rounding.
_SLIT = 1e-7
#: Where to test a gap that has no end [ln gain].
_BEYOND = 0.7
#: Stand-in for no limit [ln gain].
_FAR = 300.0


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
    loops: LoopStack, criteria: Criteria, *, per_decade: int, floor: float, exact: bool = False
) -> GainRange:
    """Find the uppermost range of gains that keeps phase margin, gain margin and Ms.

    Parameters
    ----------
    loops : LoopStack
        Loops at gain one.
    criteria : Criteria
    per_decade, floor
        The sweep's grid, see `pipeline.loop.sweep.frequency_grid`.
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
    in k. The union of all these bars on the ln-gain axis leaves gaps; every limit of
    stability lies in a bar, so a gap is stable throughout or nowhere.
    """
    s = sweep(loops, per_decade=per_decade, floor=floor)
    bars = [_phase_bars(s, criteria, exact), _gain_bars(s, criteria), _peak_bars(s, criteria, exact)]
    m = len(loops)
    rows = np.concatenate([b[0] for b in bars])
    low = np.concatenate([b[1] for b in bars])
    high = np.concatenate([b[2] for b in bars])
    kind = np.concatenate([np.full(b[0].size, i) for i, b in enumerate(bars)])
    order = np.lexsort((low, rows))
    rows, low, high, kind = rows[order], low[order], high[order], kind[order]
    found = GainRange(
        low=np.full(m, np.nan),
        high=np.full(m, np.nan),
        low_by=np.full(m, -1, dtype=np.int64),
        high_by=np.full(m, -1, dtype=np.int64),
    )
    gaps = [_gaps(low[rows == i], high[rows == i], kind[rows == i]) for i in range(m)]
    flat = [(i, g) for i, row in enumerate(gaps) for g in row]
    if not flat:
        return found
    at = np.array([i for i, _ in flat], dtype=np.intp)
    middle = np.array([g[4] for _, g in flat])
    # The tests of stability share one sweep: scaling N needs no new evaluation.
    gain = np.exp(middle)[:, None]
    picked = loops.scaled(gain, at)
    tested = (
        sweep(picked, per_decade=per_decade, floor=floor)
        if exact
        else Sweep(
            loops=picked,
            omega=s.omega,
            top=s.top[at] * gain,
            bottom=s.bottom[at],
            log_gain=s.log_gain[at] + middle[:, None],
            past=s.past[at],
            resolved=s.resolved,
        )
    )
    stable = unstable_roots(tested) < 0.5
    for (i, g), good in zip(flat, stable, strict=True):
        if good:
            found.low[i], found.high[i] = np.exp(g[0]), np.exp(g[1]) if g[1] < _FAR else np.inf
            found.low_by[i], found.high_by[i] = g[2], g[3]
            if g[0] <= -_FAR:
                found.low[i] = 0.0
    return found


def _gaps(low: Reals, high: Reals, kind: NDArray[np.int64]) -> list[tuple[float, float, int, int, float]]:
    """Give the gaps between bars, rising: ends, the criteria at them, a gain inside."""
    if low.size == 0:
        return [(-_FAR, _FAR, -1, -1, 0.0)]
    reach = np.maximum.accumulate(high)
    holder = np.where(high >= reach, np.arange(high.size), 0)
    holder = np.maximum.accumulate(holder)
    out = []
    if low[0] > -_FAR:
        out.append((-_FAR, float(low[0]), -1, int(kind[0]), float(low[0]) - _BEYOND))
    for j in np.flatnonzero(low[1:] > reach[:-1] + 2.0 * _SLIT):
        a, b = float(reach[j]), float(low[j + 1])
        out.append((a, b, int(kind[holder[j]]), int(kind[j + 1]), 0.5 * (a + b)))
    if reach[-1] < _FAR:
        out.append((float(reach[-1]), _FAR, int(kind[holder[-1]]), -1, float(reach[-1]) + _BEYOND))
    return out


Bars = tuple["Rows", "Reals", "Reals"]


def _phase_bars(s: Sweep, criteria: Criteria, exact: bool) -> Bars:
    """Forbid gains whose crossover falls where the phase is too near -180 degrees."""
    if criteria.phase_margin is None:
        return np.zeros(0, dtype=np.intp), np.zeros(0), np.zeros(0)
    asked = np.radians(criteria.phase_margin)
    short = np.abs(s.past) - asked
    gain = -s.log_gain
    bad = (short < 0.0) & np.isfinite(gain)
    row, k = np.nonzero(bad[:, :-1] & bad[:, 1:])
    parts = [(row, gain[row, k], gain[row, k + 1])]
    # Where the phase passes the limit between two points.
    edge = (bad[:, :-1] != bad[:, 1:]) & np.isfinite(gain[:, :-1]) & np.isfinite(gain[:, 1:])
    edge &= s.resolved | (np.abs(s.past[:, :-1] - s.past[:, 1:]) < 1.0)
    row, k = np.nonzero(edge)
    inside = np.where(bad[row, k], k, k + 1)
    x = np.log(s.omega)
    if exact:
        at = roots(lambda z, i: np.abs(past_at(s.loops, np.exp(z), row[i])) - asked, x[k], x[k + 1])
        end = -np.log(np.abs(s.loops.response(np.exp(at), row)))
    else:
        share = short[row, k] / (short[row, k] - short[row, k + 1])
        end = gain[row, k] + share * (gain[row, k + 1] - gain[row, k])
    parts.append((row, gain[row, inside], end))
    if exact:
        # |L| may turn within the forbidden phases: its extreme value ends the bar.
        mid = gain[:, 1:-1]
        for way in (1.0, -1.0):
            dip = bad[:, 1:-1] & (way * mid <= way * gain[:, :-2]) & (way * mid <= way * gain[:, 2:])
            row, k = np.nonzero(dip & np.isfinite(gain[:, :-2]) & np.isfinite(gain[:, 2:]))
            if row.size:
                _, best = minima(partial(_log_size, s, row, way), x[k], x[k + 2])
                parts.append((row, mid[row, k], way * best))
    parts += [(r, gain[r, k], to) for r, k, to in _outer(s, bad)]
    rows, low, high = (np.concatenate([p[j] for p in parts]) for j in range(3))
    direct = np.abs(s.loops.direct())
    late = np.flatnonzero((s.loops.delay > 0.0) & (direct > 0.0))
    return (
        np.concatenate([rows, late]).astype(np.intp),
        np.concatenate([np.minimum(low, high), -np.log(direct[late])]),
        np.concatenate([np.maximum(low, high), np.full(late.size, _FAR)]),
    )


def _outer(s: Sweep, bad: NDArray[np.bool_]) -> list[tuple[Rows, int, Reals]]:
    """Give, for bars that reach an end of the grid, the ln-gain at zero or infinite frequency."""
    with np.errstate(divide="ignore"):
        at_zero = np.clip(-np.log(np.abs(s.loops.static())), -_FAR, _FAR)
        at_infinity = np.clip(-np.log(np.abs(s.loops.direct())), -_FAR, _FAR)
    first, last = np.flatnonzero(bad[:, 0]), np.flatnonzero(bad[:, -1] & (s.loops.delay == 0.0))
    return [(first, 0, at_zero[first]), (last, -1, at_infinity[last])]


def _gain_bars(s: Sweep, criteria: Criteria) -> Bars:
    """Forbid gains too near, up or down, to one that puts L on -1; without a criterion just those."""
    width = max(np.log(criteria.gain_margin or 1.0), _SLIT)
    c = phase_crossings(s)
    static, direct = s.loops.static(), s.loops.direct()
    rows, low, high = [c.row], [-c.log_gain - width], [-c.log_gain + width]
    at_zero = np.flatnonzero((static < 0.0) & np.isfinite(static))
    rows.append(at_zero)
    low.append(-np.log(-static[at_zero]) - width)
    high.append(-np.log(-static[at_zero]) + width)
    late = s.loops.delay > 0.0
    top = np.flatnonzero((direct != 0.0) & (late | (direct < 0.0)))
    rows.append(top)
    edge = -np.log(np.abs(direct[top]))
    low.append(edge - width)
    high.append(np.where(late[top], _FAR, edge + width))
    return np.concatenate(rows).astype(np.intp), np.concatenate(low), np.concatenate(high)


def _peak_bars(s: Sweep, criteria: Criteria, exact: bool) -> Bars:
    """Forbid gains for which 1 + k L comes within 1/Ms of zero."""
    if criteria.max_sensitivity is None:
        return np.zeros(0, dtype=np.intp), np.zeros(0), np.zeros(0)
    keep = 1.0 - 1.0 / criteria.max_sensitivity**2
    lower, upper = _touch(s.past, keep)
    low, high = lower - s.log_gain, upper - s.log_gain
    hit = np.isfinite(low) & np.isfinite(high)
    row, k = np.nonzero(hit[:, :-1] & hit[:, 1:])
    parts = [(row, np.minimum(low[row, k], low[row, k + 1]), np.maximum(high[row, k], high[row, k + 1]))]
    if exact:
        x = np.log(s.omega)

        def end(z: Reals, rows: Rows, way: float) -> Reals:
            response = s.loops.response(np.exp(z), rows)
            pair = _touch(np.angle(-response), keep)
            value = (pair[0] if way > 0 else pair[1]) - np.log(np.abs(response))
            return np.asarray(np.where(np.isfinite(value), way * value, _FAR), dtype=float)

        for value, way in ((low, 1.0), (high, -1.0)):
            v = np.where(hit, way * value, _FAR)
            dip = (v[:, 1:-1] <= v[:, :-2]) & (v[:, 1:-1] <= v[:, 2:]) & hit[:, 1:-1]
            row, k = np.nonzero(dip)
            if row.size:
                _, best = minima(partial(_at_rows, end, row, way), x[k], x[k + 2])
                seen = value[row, k + 1]
                best = way * np.minimum(best, way * seen)
                parts.append((row, np.minimum(best, seen), np.maximum(best, seen)))
    direct = s.loops.direct()
    late = np.flatnonzero((s.loops.delay > 0.0) & (direct != 0.0))
    parts.append(
        (
            late,
            np.log((1.0 - 1.0 / criteria.max_sensitivity) / np.abs(direct[late])),
            np.full(late.size, _FAR),
        )
    )
    static = s.loops.static()
    flat = np.flatnonzero((static < 0.0) & np.isfinite(static))
    for ends, column, to in _outer(s, hit):
        parts.append((ends, np.minimum(low[ends, column], to), np.maximum(high[ends, column], to)))
    near = 1.0 / criteria.max_sensitivity
    parts.append((flat, np.log((1.0 - near) / -static[flat]), np.log((1.0 + near) / -static[flat])))
    rows, lo, hi = (np.concatenate([p[j] for p in parts]) for j in range(3))
    return rows.astype(np.intp), lo, hi


def _touch(past: Reals, keep: float) -> tuple[Reals, Reals]:
    """Give ln(k |L|) where |1 + k L| = 1/Ms, lower and upper, nan where the ray misses the circle."""
    c = np.cos(past)
    with np.errstate(invalid="ignore", divide="ignore"):
        root = np.sqrt(np.where(c > 0.0, c * c - keep, np.nan))
        return np.log(np.maximum(c - root, 1e-300)), np.log(c + root)


def _log_size(s: Sweep, row: Rows, way: float, z: Reals, i: Rows) -> Reals:
    """Give -way ln |L| at ln-frequencies z of the chosen rows."""
    return np.asarray(-way * np.log(np.abs(s.loops.response(np.exp(z), row[i]))), dtype=float)


def _at_rows(end: Callable[[Reals, Rows, float], Reals], row: Rows, way: float, z: Reals, i: Rows) -> Reals:
    return end(z, row[i], way)
