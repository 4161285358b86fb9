"""A closed loop with exact dead time as one linear recursion on an even grid."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Reals = NDArray[np.float64]


@dataclass(frozen=True, kw_only=True)
class Recursion:
    """z[n+1] = step z[n], PV[n] = read z[n], on a grid that starts when the change arrives.

    Attributes
    ----------
    step : (k, k) ndarray
    read : (k,) ndarray
    start : (k,) ndarray
    h : float
        Grid interval [s].
    jump : float
        PV's immediate jump, above zero only where the process answers at once [PV unit].
    direct : float
        L's direct term [1].
    line : int
        Grid intervals in the loop's dead time.
    """

    step: Reals
    read: Reals
    start: Reals
    h: float
    jump: float
    direct: float
    line: int

    def run(self, n: int) -> Reals:
        """Give the first n values of the PV.

        Notes
        -----
        read step**j for j below the square root of n, and every such power of the state,
        give all values by one matrix product: the recursion's work without its loop.
        """
        span = max(int(np.sqrt(n)), 1)
        rows = np.empty((span, self.read.size))
        rows[0] = self.read
        for j in range(1, span):
            rows[j] = rows[j - 1] @ self.step
        stride = np.linalg.matrix_power(self.step, span)
        count = -(-n // span)
        states = np.empty((self.read.size, count))
        states[:, 0] = self.start
        for k in range(1, count):
            states[:, k] = stride @ states[:, k - 1]
        return np.ascontiguousarray((rows @ states).T).reshape(-1)[:n]

    def staircase(self, n: int) -> Reals:
        """Give the part of the PV that jumps at multiples of the dead time, zero without jumps."""
        if self.jump == 0.0:
            return np.zeros(n)
        if self.line == 0:
            return np.full(n, self.jump / (1.0 + self.direct))
        passes = np.arange(n) // self.line + 1
        if self.direct == -1.0:
            return np.asarray(self.jump * passes, dtype=float)
        return np.asarray(self.jump * (1.0 - (-self.direct) ** passes) / (1.0 + self.direct), dtype=float)


def exponential(a: Reals) -> Reals:
    """Give the matrix exponential of a small matrix.

    Parameters
    ----------
    a : (n, n) ndarray

    Returns
    -------
    (n, n) ndarray

    Notes
    -----
    Scaling and squaring with a Taylor series: at norm one half, fourteen terms leave 1e-17.
    scipy's own hands matrices of this size to threads, which costs a hundred times the work.

    References
    ----------
    Moler and Van Loan (2003), SIAM Review 45, method 3.
    """
    size = max(float(np.abs(a).sum(axis=0).max(initial=0.0)), 1e-300)
    squarings = max(0, int(np.ceil(np.log2(size))) + 1)
    scaled = a / 2.0**squarings
    term = np.eye(a.shape[0])
    total = term.copy()
    for k in range(1, 15):
        term = term @ scaled / k
        total += term
    for _ in range(squarings):
        total = total @ total
    return np.asarray(total, dtype=float)


def realise(num: Reals, den: Reals, h: float) -> tuple[Reals, Reals, Reals, float]:
    """Give A h, B h, C, D of a proper ratio of polynomials, time scaled so that A is balanced.

    Parameters
    ----------
    num, den : (n,) ndarray
        Descending powers of s.
    h : float
        Grid interval [s].

    Returns
    -------
    a, b, c : ndarray
    d : float
    """
    den = np.trim_zeros(np.asarray(den, dtype=float), "f")
    num = np.trim_zeros(np.asarray(num, dtype=float), "f")
    order = den.size - 1
    poles = np.abs(np.roots(den))
    speed = float(poles.max(initial=0.0)) or 1.0 / h
    # s = speed p: coefficients in p, whose roots lie within the unit circle.
    q = den * speed ** np.arange(order, -1, -1.0)
    p = np.zeros(order + 1)
    p[order + 1 - num.size :] = num * speed ** np.arange(num.size - 1, -1, -1.0)
    p, q = p / q[0], q / q[0]
    d = float(p[0])
    a = np.zeros((order, order))
    if order:
        a[0] = -q[1:]
        a[1:, :-1] = np.eye(order - 1)
    b = np.zeros(order)
    b[:1] = 1.0
    return a * speed * h, b * speed * h, p[1:] - d * q[1:], d


def closed_loop(
    loop: tuple[Reals, Reals],
    forcing: tuple[Reals, Reals],
    *,
    delay: float,
    h: float,
) -> Recursion:
    """Close a loop around a step that comes in through its own path.

    PV = F 1(t) - L PV, with F the path from the step to the PV and L the loop.

    Parameters
    ----------
    loop, forcing : pair of (n,) ndarray
        Numerator and denominator of L and F, descending powers, dead time left out.
    delay : float
        The loop's dead time [s].
    h : float
        Grid interval [s]. Where the PV jumps it must divide the dead time.

    Returns
    -------
    Recursion
        Its grid starts at the moment the step arrives at the PV.

    Notes
    -----
    F's response is exact. L's rational part is exact for a PV that is straight between grid
    points, so the error is of second order in h; jumps of the PV are carried apart and held,
    not joined by lines. A dead time of less than one interval is met by interpolation.
    """
    la, lb, lc, ld = realise(*loop, h)
    fa, fb, fc, fd = realise(*forcing, h)
    nl, nf = lb.size, fb.size
    hold = np.zeros((nl + 2, nl + 2))
    hold[:nl, :nl], hold[:nl, nl], hold[nl, nl + 1] = la, lb, 1.0
    grown = exponential(hold)
    phi, g1 = grown[:nl, :nl], grown[:nl, nl + 1]
    g0 = grown[:nl, nl] - g1
    force = np.zeros((nf + 1, nf + 1))
    force[:nf, :nf], force[:nf, nf] = fa, fb
    force = exponential(force)

    ratio = delay / h
    d = round(ratio) if abs(ratio - round(ratio)) < 1e-9 * max(ratio, 1.0) else int(ratio)
    part = 0.0 if abs(ratio - d) < 1e-9 * max(ratio, 1.0) else ratio - d
    stairs = fd != 0.0 and d >= 1
    size_y, size_q = d + (part > 0.0), d if stairs else 0
    n = nl + nf + 1 + size_y + size_q
    ix, ik = slice(0, nl), slice(nl, nl + nf + 1)
    iy, iq = nl + nf + 1, nl + nf + 1 + size_y
    one = nl + nf

    def taps(at: int, of: int) -> Reals:
        """Row that reads the delayed signal from the line that starts at `at`."""
        row = np.zeros(n)
        if of >= 1:
            row[at + of - 1] += 1.0 - part
        if part > 0.0:
            row[at + of] += part
        return row

    read = np.zeros(n)
    read[ix], read[nl:one], read[one] = -lc, fc, fd
    step = np.zeros((n, n))
    step[ik, ik] = force
    if d >= 1:
        read -= ld * taps(iy, d)
        now = taps(iy, d)
        _shift(step, iy, size_y, read)
        soon = taps(iy, d) @ step
        cont_now, cont_soon, stair = now, soon, np.zeros(n)
        if stairs:
            born = np.zeros(n)
            born[one] = fd
            stair = np.zeros(n)
            stair[iq + d - 1] = 1.0
            born -= ld * stair
            _shift(step, iq, size_q, born)
            cont_now, cont_soon = now - stair, soon - stair @ step
        step[ix] += np.outer(g0, cont_now) + np.outer(g1, cont_soon) + np.outer(g0 + g1, stair)
        step[ix, ix] += phi
    else:
        # v = (1 - part) PV[n] + part PV[n-1], so PV[n] is on both sides: solve for it.
        share = 1.0 - part
        if part > 0.0:
            read[iy] -= ld * part
        read /= 1.0 + ld * share
        now = read * share
        if part > 0.0:
            now[iy] += part
            step[iy] = read
        rest = np.zeros((nl, n))
        rest[:, ix] = phi
        rest += np.outer(g0, now)
        ahead = np.zeros(n)
        ahead[ik] = read[ik] @ force
        carry = share * ahead + (share * read[iy] + part) * read if part > 0.0 else share * ahead
        rest += np.outer(g1, carry)
        step[ix] = np.linalg.solve(np.eye(nl) - share * np.outer(g1, read[ix]), rest)
    start = np.zeros(n)
    start[one] = 1.0
    return Recursion(step=step, read=read, start=start, h=h, jump=fd, direct=ld, line=d)


def _shift(step: Reals, at: int, size: int, born: Reals) -> None:
    """Write a delay line: the newest value enters at `at`, the others move on."""
    step[at] = born
    for j in range(1, size):
        step[at + j, at + j - 1] = 1.0


def spectral_radius(loop: tuple[Reals, Reals], *, delay: float, h: float) -> float:
    """Give the largest growth factor of the closed loop over one grid interval [1].

    Parameters
    ----------
    loop : pair of (n,) ndarray
        Numerator and denominator of L, descending powers, dead time left out.
    delay, h : float
        Dead time and grid interval [s].

    Returns
    -------
    float
        Above one: the loop's free response grows.
    """
    nothing = (np.zeros(1), np.ones(1))
    rec = closed_loop(loop, nothing, delay=delay, h=h)
    # The forcing's own state is a held constant, eigenvalue one, and is left out.
    keep = np.arange(rec.read.size) != loop[1].size - 1 - int(np.argmax(np.asarray(loop[1]) != 0.0))
    return float(np.max(np.abs(np.linalg.eigvals(rec.step[np.ix_(keep, keep)])), initial=0.0))
