"""Gains that single criteria forbid, read off a frequency sweep: bars on the ln-gain axis."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial
from typing import TYPE_CHECKING

import numpy as np

from pipeline.loop.search import minima, roots
from pipeline.loop.sweep import Sweep, past_at, phase_crossings

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from pipeline.tuning.types import Criteria

    Reals = NDArray[np.float64]
    Rows = NDArray[np.intp]

#: Half a gap's least width [ln gain]: narrower ones are rounding.
SLIT = 1e-7
#: Stand-in for no limit [ln gain].
FAR = 300.0

#: Rows, and the lower and upper ends of the gains forbidden in them [ln gain].
Bars = tuple["Rows", "Reals", "Reals"]


def no_bars() -> Bars:
    """Forbid nothing."""
    return np.zeros(0, dtype=np.intp), np.zeros(0), np.zeros(0)


def phase_bars(s: Sweep, criteria: Criteria, exact: bool) -> Bars:
    """Forbid gains whose crossover falls where the phase is too near -180 degrees.

    Parameters
    ----------
    s : Sweep
        Of loops at gain one.
    criteria : Criteria
    exact : bool
        Refine every end to double precision.
    """
    if criteria.phase_margin is None:
        return no_bars()
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
        np.concatenate([np.maximum(low, high), np.full(late.size, FAR)]),
    )


def _outer(s: Sweep, bad: NDArray[np.bool_]) -> list[tuple[Rows, int, Reals]]:
    """Give, for bars that reach an end of the grid, the ln-gain at zero or infinite frequency."""
    with np.errstate(divide="ignore"):
        at_zero = np.clip(-np.log(np.abs(s.loops.static())), -FAR, FAR)
        at_infinity = np.clip(-np.log(np.abs(s.loops.direct())), -FAR, FAR)
    first, last = np.flatnonzero(bad[:, 0]), np.flatnonzero(bad[:, -1] & (s.loops.delay == 0.0))
    return [(first, 0, at_zero[first]), (last, -1, at_infinity[last])]


def gain_bars(s: Sweep, criteria: Criteria) -> Bars:
    """Forbid gains too near, up or down, to one that puts L on -1; without a criterion just those.

    Parameters
    ----------
    s : Sweep
        Of loops at gain one.
    criteria : Criteria
    """
    width = max(np.log(criteria.gain_margin or 1.0), SLIT)
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
    high.append(np.where(late[top], FAR, edge + width))
    return np.concatenate(rows).astype(np.intp), np.concatenate(low), np.concatenate(high)


def peak_bars(s: Sweep, limit: float | None, exact: bool, *, complementary: bool = False) -> Bars:
    """Forbid gains for which the peak of S, or of T, passes its limit.

    Parameters
    ----------
    s : Sweep
        Of loops at gain one.
    limit : float or None
        Above one: 1 + k L must stay 1 / limit away from zero, or 1 + 1 / (k L) must.
    exact : bool
        Refine every end to double precision.
    complementary : bool
        The peak of T instead of S.
    """
    if limit is None:
        return no_bars()
    keep = 1.0 - 1.0 / limit**2
    lower, upper = _touch(s.past, keep, complementary)
    low, high = lower - s.log_gain, upper - s.log_gain
    hit = np.isfinite(low) & np.isfinite(high)
    row, k = np.nonzero(hit[:, :-1] & hit[:, 1:])
    parts = [(row, np.minimum(low[row, k], low[row, k + 1]), np.maximum(high[row, k], high[row, k + 1]))]
    if exact:
        x = np.log(s.omega)

        def end(z: Reals, rows: Rows, way: float) -> Reals:
            response = s.loops.response(np.exp(z), rows)
            pair = _touch(np.angle(-response), keep, complementary)
            value = (pair[0] if way > 0 else pair[1]) - np.log(np.abs(response))
            return np.asarray(np.where(np.isfinite(value), way * value, FAR), dtype=float)

        for value, way in ((low, 1.0), (high, -1.0)):
            v = np.where(hit, way * value, FAR)
            dip = (v[:, 1:-1] <= v[:, :-2]) & (v[:, 1:-1] <= v[:, 2:]) & hit[:, 1:-1]
            row, k = np.nonzero(dip)
            if row.size:
                _, best = minima(partial(_at_rows, end, row, way), x[k], x[k + 2])
                seen = value[row, k + 1]
                best = way * np.minimum(best, way * seen)
                parts.append((row, np.minimum(best, seen), np.maximum(best, seen)))
    # On the negative real axis |1 + k L| = 1/limit at these sizes of k L; T has their inverses.
    near, beyond = 1.0 - 1.0 / limit, 1.0 + 1.0 / limit
    if complementary:
        near, beyond = 1.0 / beyond, 1.0 / near
    direct = s.loops.direct()
    late = np.flatnonzero((s.loops.delay > 0.0) & (direct != 0.0))
    parts.append((late, np.log(near / np.abs(direct[late])), np.full(late.size, FAR)))
    for ends, column, to in _outer(s, hit):
        parts.append((ends, np.minimum(low[ends, column], to), np.maximum(high[ends, column], to)))
    static = s.loops.static()
    flat = np.flatnonzero((static < 0.0) & np.isfinite(static))
    parts.append((flat, np.log(near / -static[flat]), np.log(beyond / -static[flat])))
    rows, lo, hi = (np.concatenate([p[j] for p in parts]) for j in range(3))
    return rows.astype(np.intp), lo, hi


def speed_bars(s: Sweep, most: float | Reals | None) -> Bars:
    """Forbid gains with which the loop crosses over too high.

    Parameters
    ----------
    s : Sweep
        Of loops at gain one.
    most : float, (m,) ndarray or None
        Highest gain crossover [rad/s].
    """
    if most is None:
        return no_bars()
    rows = np.arange(len(s.loops))
    at = np.broadcast_to(np.asarray(most, dtype=float), rows.shape)
    return rows, -np.log(np.abs(s.loops.response(at, rows))), np.full(rows.size, FAR)


def noise_bars(noise: Reals, limit: float | None) -> Bars:
    """Forbid gains that shake the output more than asked.

    Parameters
    ----------
    noise : (m,) ndarray
        Noise gain of each row's controller at gain one [CO unit / PV unit].
    limit : float or None
        Most noise gain [CO unit / PV unit].
    """
    if limit is None:
        return no_bars()
    rows = np.flatnonzero(noise > 0.0)
    return rows, np.log(limit / noise[rows]), np.full(rows.size, FAR)


def _touch(past: Reals, keep: float, complementary: bool) -> tuple[Reals, Reals]:
    """Give ln(k |L|) where the peak is at its limit, lower and upper, nan where the ray misses the circle."""
    c = np.cos(past)
    with np.errstate(invalid="ignore", divide="ignore"):
        root = np.sqrt(np.where(c > 0.0, c * c - keep, np.nan))
        lower, upper = np.log(np.maximum(c - root, 1e-300)), np.log(c + root)
    return (-upper, -lower) if complementary else (lower, upper)


def _log_size(s: Sweep, row: Rows, way: float, z: Reals, i: Rows) -> Reals:
    """Give -way ln |L| at ln-frequencies z of the chosen rows."""
    return np.asarray(-way * np.log(np.abs(s.loops.response(np.exp(z), row[i]))), dtype=float)


def _at_rows(end: Callable[[Reals, Rows, float], Reals], row: Rows, way: float, z: Reals, i: Rows) -> Reals:
    return end(z, row[i], way)
