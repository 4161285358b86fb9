"""A frequency sweep of many loops: grid, crossings, peaks, and the count of unstable roots."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from pipeline.loop.search import minima, roots

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from pipeline.loop.stack import LoopStack

    Reals = NDArray[np.float64]
    Rows = NDArray[np.intp]

#: Phase the dead time may turn between two grid points [rad]: below a third of a half turn,
#: so a crossing is never stepped over and a winding never aliased.
_TURN = 0.35
#: Turn of the dead time that is followed whatever the gain [rad]: four turns.
ALWAYS_FOLLOWED = 8.0 * np.pi
#: Most grid points spent on resolving the dead time [1].
_MOST_LINEAR = 6000
#: Rows whose poles and zeros set a shared grid [1]; the others of one structure lie among them.
_SCALE_ROWS = 12
#: A near miss is looked at closely: log-magnitude or phase this close to a crossing [1 or rad].
_NEAR = 0.5
#: Phase steps of D + N larger than this are subdivided when windings are counted [rad].
_CLOSE = 1.0
#: Polynomials above this at the end of the grid are taken by their angles: high powers of a frequency.
_HUGE = 1e120
#: A phase read from rounding alone is no crossing [rad].
_ROUNDING = 1e-11


@dataclass(frozen=True, kw_only=True)
class Sweep:
    """Loops evaluated on one shared grid.

    Attributes
    ----------
    loops : LoopStack
    omega : (n,) ndarray
        Grid [rad/s].
    top, bottom : (m, n) ndarray
        N exp(-j omega delay) and D.
    log_gain : (m, n) ndarray
        ln |L|.
    past : (m, n) ndarray
        Angle of -L in (-pi, pi]: the phase beyond -180 degrees, the phase margin where |L| is one [rad].
    resolved : (m, n - 1) ndarray of bool
        Intervals in which each loop's dead time turns little enough to be followed.
    """

    loops: LoopStack
    omega: Reals
    top: NDArray[np.complex128]
    bottom: NDArray[np.complex128]
    log_gain: Reals
    past: Reals
    resolved: NDArray[np.bool_]


@dataclass(frozen=True, slots=True, kw_only=True)
class Grid:
    """How fine a frequency grid is.

    Attributes
    ----------
    per_decade : int
        Points a decade of the logarithmic part.
    floor : float
        The dead time is resolved up to the last frequency where |L| exceeds this [1], and
        always through its first four turns.
    reach : float
        How far the grid goes below the lowest and above the highest of the loops' own
        frequencies [1].
    """

    per_decade: int
    floor: float
    reach: float = 1e3


#: Of one loop whose answer is shown: crossings and peaks are refined from here to rounding.
FINE = Grid(per_decade=80, floor=0.02)


def frequency_grid(loops: LoopStack, grid: Grid) -> Reals:
    """Build a grid on the loops' own scale.

    Parameters
    ----------
    loops : LoopStack
    grid : Grid

    Returns
    -------
    (n,) ndarray
        Rising frequencies [rad/s] from well below to well above every pole, zero,
        asymptotic crossover and inverse dead time, denser at resonances.
    """
    m = len(loops)
    delay = float(loops.delay.max(initial=0.0))
    pick = np.unique(
        np.concatenate(
            [
                np.linspace(0, m - 1, min(m, _SCALE_ROWS)).astype(int),
                [int(np.argmin(loops.delay)), int(np.argmax(loops.delay))],
            ]
        )
    )
    marks = [1.0 / loops.delay[loops.delay > 0.0]]
    dense = []
    for i in pick:
        num, den = np.trim_zeros(loops.numerator[i], "b"), np.trim_zeros(loops.denominator[i], "b")
        for poly in (num, den):
            inner = np.trim_zeros(poly, "f")
            r = np.roots(inner[::-1])
            size = np.abs(r)
            marks.append(size[size > 0.0])
            light = r[(r.imag > 0.0) & (np.abs(r.real) < 0.3 * size)]
            for root in light:
                spread = np.sinh(np.linspace(-6.0, 6.0, 61 if m == 1 else 13)) * max(
                    abs(root.real), 1e-6 * abs(root)
                )
                dense.append(root.imag + spread)
        marks.append(_asymptotes(num, den))
    scale = np.concatenate(marks)
    scale = scale[np.isfinite(scale) & (scale > 0.0)]
    if scale.size == 0:
        scale = np.ones(1)
    low, high = scale.min() / grid.reach, scale.max() * grid.reach
    omega = np.geomspace(low, high, int(np.log10(high / low) * grid.per_decade) + 2)
    if dense:
        near = np.concatenate(dense)
        omega = np.union1d(omega, near[(near > low) & (near < high)])
    if delay > 0.0:
        bare = np.abs(_bare(loops, pick, omega)).max(axis=0)
        audible = np.flatnonzero(bare > grid.floor)
        shortest = float(loops.delay[loops.delay > 0.0].min())
        top = max(omega[audible[-1]] if audible.size else 0.0, ALWAYS_FOLLOWED / delay)
        start = _TURN / delay
        if ALWAYS_FOLLOWED / shortest > top:
            # Shorter dead times turn later: these steps follow each through its first four turns.
            steps = np.log(ALWAYS_FOLLOWED / shortest / top) * ALWAYS_FOLLOWED / (2.0 * _TURN)
            later = np.geomspace(top, ALWAYS_FOLLOWED / shortest, int(min(steps, _MOST_LINEAR)) + 2)
            omega = np.union1d(omega, later)
        count = int(min((top - start) * delay / _TURN, _MOST_LINEAR))
        if count > 1:
            omega = np.union1d(omega, start + _TURN / delay * np.arange(count))
    return omega


def _bare(loops: LoopStack, rows: Rows, omega: Reals) -> NDArray[np.complex128]:
    from dataclasses import replace

    part = replace(
        loops, numerator=loops.numerator[rows], denominator=loops.denominator[rows], delay=np.zeros(rows.size)
    )
    return part.response(omega)


def _asymptotes(num: Reals, den: Reals) -> Reals:
    """Give where the low- and high-frequency asymptotes of |L| cross one."""
    out = []
    i, k = int(np.argmax(num != 0.0)), int(np.argmax(den != 0.0))
    if i != k and num.any():
        out.append(abs(num[i] / den[k]) ** (1.0 / (k - i)))
    p, q = num.size - 1, den.size - 1
    if p != q and num.any():
        out.append(abs(num[p] / den[q]) ** (1.0 / (q - p)))
    return np.array(out)


def sweep(loops: LoopStack, omega: Reals) -> Sweep:
    """Evaluate loops on a shared grid.

    Parameters
    ----------
    loops : LoopStack
    omega : (n,) ndarray
        Rising frequencies [rad/s], as from `frequency_grid`.

    Returns
    -------
    Sweep
    """
    top, bottom = loops.parts(omega)
    with np.errstate(divide="ignore"):
        log_gain = np.log(np.abs(top)) - np.log(np.abs(bottom))
    past = np.angle(-_moderate(top) * _moderate(bottom).conj())
    return Sweep(
        loops=loops,
        omega=omega,
        top=top,
        bottom=bottom,
        log_gain=log_gain,
        past=past,
        resolved=np.diff(omega)[None, :] * loops.delay[:, None] < 4.0 * _TURN,
    )


def _moderate(z: NDArray[np.complex128]) -> NDArray[np.complex128]:
    """Give numbers whose products cannot overflow: their angles alone where they grow huge."""
    if z.size == 0 or float(np.max(np.abs(z[..., -1]))) < _HUGE:
        return z
    size = np.abs(z)
    return np.asarray(z / np.where(size > 0.0, size, 1.0), dtype=complex)


@dataclass(frozen=True, kw_only=True)
class Crossings:
    """Crossings of many loops, refined: row, frequency [rad/s], ln |L|, phase beyond -180 degrees [rad]."""

    row: Rows
    omega: Reals
    log_gain: Reals
    past: Reals


def log_gain_at(loops: LoopStack, omega: Reals, rows: Rows) -> Reals:
    """Give ln |L| at one frequency a row.

    Parameters
    ----------
    loops : LoopStack
    omega : (n,) ndarray
        [rad/s].
    rows : (n,) ndarray of int
    """
    return np.asarray(np.log(np.abs(loops.response(omega, rows))), dtype=float)


def past_at(loops: LoopStack, omega: Reals, rows: Rows) -> Reals:
    """Give the phase beyond -180 degrees, in (-pi, pi], at one frequency a row [rad].

    Parameters
    ----------
    loops : LoopStack
    omega : (n,) ndarray
        [rad/s].
    rows : (n,) ndarray of int
    """
    return np.asarray(np.angle(-loops.response(omega, rows)), dtype=float)


def gain_crossings(s: Sweep) -> Crossings:
    """Find every frequency where |L| is one, near misses of the grid included."""
    return _crossings(s, s.log_gain, log_gain_at, np.ones((1, s.omega.size - 1), dtype=bool))


def phase_crossings(s: Sweep) -> Crossings:
    """Find every frequency where L is real and negative, as far as the grid follows the dead time."""
    return _crossings(s, np.where(np.abs(s.past) < _ROUNDING, np.nan, s.past), past_at, s.resolved)


def _crossings(s: Sweep, value: Reals, f: object, valid: NDArray[np.bool_]) -> Crossings:
    assert callable(f)
    x = np.log(s.omega)
    with np.errstate(invalid="ignore"):
        flips = (value[:, :-1] * value[:, 1:] < 0.0) & (np.abs(value[:, :-1] - value[:, 1:]) < np.pi)
        if f is log_gain_at:
            flips = value[:, :-1] * value[:, 1:] <= 0.0
            flips[:, 1:] &= ~((value[:, 1:-1] == 0.0) & flips[:, 1:] & flips[:, :-1])
        flips &= valid
        mid = value[:, 1:-1]
        up, down = mid - value[:, :-2], mid - value[:, 2:]
        dip = ((up > 0) & (down > 0) & (mid < 0) & (mid > -_NEAR)) | (
            (up < 0) & (down < 0) & (mid > 0) & (mid < _NEAR)
        )
        dip &= valid[:, :-1] & valid[:, 1:]
    row, k = np.nonzero(flips)
    lo, hi = x[k], x[k + 1]
    drow, dk = np.nonzero(dip)
    if drow.size:
        side = np.sign(value[drow, dk + 1])
        at, best = minima(lambda z, i: side[i] * f(s.loops, np.exp(z), drow[i]), x[dk], x[dk + 2])
        hit = best < 0.0
        row = np.concatenate([row, drow[hit], drow[hit]])
        lo = np.concatenate([lo, x[dk[hit]], at[hit]])
        hi = np.concatenate([hi, at[hit], x[dk[hit] + 2]])
    z = roots(lambda z, i: f(s.loops, np.exp(z), row[i]), lo, hi)
    omega = np.exp(z)
    order = np.lexsort((omega, row))
    row, omega = row[order].astype(np.intp), omega[order]
    response = s.loops.response(omega, row)
    return Crossings(row=row, omega=omega, log_gain=np.log(np.abs(response)), past=np.angle(-response))


def unstable_roots(s: Sweep) -> NDArray[np.float64]:
    """Count the closed loop's roots in the right half-plane, by the argument principle.

    Parameters
    ----------
    s : Sweep

    Returns
    -------
    (m,) ndarray
        Number of roots of D + N exp(-s delay) with positive real part; inf for a loop with
        dead time whose gain does not fall below one, and where a root lies on the axis.

    Notes
    -----
    The function followed is f = D (1 + L). It has no poles, so integrators and poles on the
    axis need no indentation and open-loop unstable poles no separate count; for degree n,
    f has n/2 - (its turn from omega = 0 to infinity) / pi roots on the right. Beyond the
    frequency after which |L| stays below one, 1 + L cannot leave the right half-plane and
    only D turns, so the dead time need not be followed there.

    References
    ----------
    Mikhailov's criterion; for dead time see Stépán (1989), Retarded Dynamical Systems, ch. 2.
    """
    loops = s.loops
    m, n = s.top.shape
    n_coef, n_deg, d_coef, d_deg = loops.leading()
    direct = np.abs(loops.direct())
    late = loops.delay > 0.0
    f = s.bottom + s.top
    f = _moderate(f)
    step = np.angle(f[:, 1:] * f[:, :-1].conj())

    quiet = np.where(late, 0.5 * (1.0 + np.minimum(direct, 1.0)), -1.0)
    loud = s.log_gain > np.log(np.maximum(quiet, 1e-300))[:, None]
    last = n - 1 - np.argmax(loud[:, ::-1], axis=1)
    end = np.where(loud.any(axis=1), np.minimum(last + 1, n - 1), 0)
    end = np.where(late, end, n - 1)
    # Loud beyond where the dead time is followed, hundreds of turns up: far past any stability.
    followed = np.where(s.resolved.all(axis=1), n - 1, np.argmin(s.resolved, axis=1))
    runaway = late & ((end > followed) | (direct >= 1.0))
    counted = (np.arange(n - 1)[None, :] < end[:, None]) & ~runaway[:, None]
    lost = _refine(s, step, counted) | runaway

    f0 = loops.numerator[:, 0] + loops.denominator[:, 0]
    start = np.angle(f[:, 0] * np.where(f0 == 0.0, 1.0, np.sign(f0)))
    turned = start + np.sum(np.where(counted, step, 0.0), axis=1)

    rows = np.arange(m)
    d = _moderate(s.bottom)
    d_step = np.angle(d[:, 1:] * d[:, :-1].conj())
    tail = np.sum(np.where(counted, 0.0, d_step), axis=1)
    ahead = np.angle(d_coef[:, None][:, 0] * 1j**d_deg * d[:, -1].conj())
    closed = np.angle(f[rows, end] * d[rows, end].conj())
    with_delay = turned - closed + tail + ahead

    degree = np.maximum(n_deg, d_deg)
    lead = np.where(n_deg > d_deg, n_coef, np.where(n_deg < d_deg, d_coef, n_coef + d_coef))
    rational = turned + np.angle(lead * 1j**degree * f[:, -1].conj())

    total = np.where(late, with_delay, rational)
    order = np.where(late, d_deg, degree)
    count = np.maximum(np.round((order - 2.0 * total / np.pi) / 2.0), 0.0)
    never = (f0 == 0.0) | lost | (~late & (lead == 0.0))
    return np.where(never, np.inf, count)


def _refine(s: Sweep, step: Reals, counted: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Follow large turns of f through subdivided intervals, in place; tell rows that stay unclear."""
    lost = np.zeros(len(s.loops), dtype=bool)
    row, k = np.nonzero(counted & (np.abs(step) > _CLOSE))
    if row.size == 0:
        return lost
    job = np.arange(row.size)
    owner, lo, hi = job, np.log(s.omega[k]), np.log(s.omega[k + 1])
    total = np.zeros(row.size)
    parts = 12
    for depth in range(8):
        x = np.linspace(lo, hi, parts + 1, axis=1)
        flat = np.repeat(row[owner], parts + 1)
        top, bottom = s.loops.parts(np.exp(x.ravel()), flat)
        f = (top + bottom).reshape(x.shape)
        inc = np.angle(f[:, 1:] * f[:, :-1].conj())
        big = np.abs(inc) > _CLOSE
        if depth == 7:
            lost[row[owner[big.any(axis=1)]]] = True
            big[:] = False
        np.add.at(total, owner, np.where(big, 0.0, inc).sum(axis=1))
        i, j = np.nonzero(big)
        if i.size == 0:
            break
        owner, lo, hi = owner[i], x[i, j], x[i, j + 1]
    step[row, k] = total
    return lost
