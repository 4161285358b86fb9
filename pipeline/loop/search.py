"""Roots and extremes of many one-variable functions at once."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Reals = NDArray[np.float64]
    Rows = NDArray[np.intp]
    Function = Callable[[Reals, Rows], Reals]

#: Golden section: share of the bracket kept by each step [1].
_GOLDEN = (np.sqrt(5.0) - 1.0) / 2.0


def roots(f: Function, lo: Reals, hi: Reals, *, steps: int = 60) -> Reals:
    """Find one root in each bracket.

    Parameters
    ----------
    f : callable
        f(x, which) evaluates problem `which[i]` at x[i].
    lo, hi : (k,) ndarray
        Brackets: f has opposite signs at their ends.
    steps : int
        Most iterations.

    Returns
    -------
    (k,) ndarray
        Roots to the resolution of double precision.

    References
    ----------
    Chandrupatla (1997), Advances in Engineering Software 28, 145-149: inverse quadratic
    interpolation where it is safe, bisection elsewhere.
    """
    which = np.arange(lo.size)
    a, b = hi.astype(float).copy(), lo.astype(float).copy()
    fa, fb = f(a, which), f(b, which)
    c, fc = a.copy(), fa.copy()
    best = np.where(np.abs(fa) < np.abs(fb), a, b)
    t = np.full(lo.size, 0.5)
    # An end that is a root to rounding leaves no change of sign: that end is the answer.
    alive = which[np.sign(fa) * np.sign(fb) < 0.0]
    for _ in range(steps):
        if alive.size == 0:
            break
        i = alive
        x = a[i] + t[i] * (b[i] - a[i])
        fx = f(x, i)
        same = np.sign(fx) == np.sign(fa[i])
        c[i], fc[i] = np.where(same, a[i], b[i]), np.where(same, fa[i], fb[i])
        b[i], fb[i] = np.where(same, b[i], a[i]), np.where(same, fb[i], fa[i])
        a[i], fa[i] = x, fx
        best[i] = np.where(np.abs(fa[i]) < np.abs(fb[i]), a[i], b[i])
        width = np.abs(b[i] - a[i])
        tol = 2e-16 * np.abs(best[i]) + 1e-15
        with np.errstate(divide="ignore", invalid="ignore"):
            xi = (a[i] - b[i]) / (c[i] - b[i])
            phi = (fa[i] - fb[i]) / (fc[i] - fb[i])
            al = (c[i] - a[i]) / (b[i] - a[i])
            step = fa[i] / (fb[i] - fa[i]) * fc[i] / (fb[i] - fc[i]) + al * fa[i] / (fc[i] - fa[i]) * fb[
                i
            ] / (fc[i] - fb[i])
        safe = (phi**2 < xi) & ((1.0 - phi) ** 2 < 1.0 - xi) & np.isfinite(step)
        edge = np.minimum(0.5, tol / np.maximum(width, 1e-300))
        t[i] = np.clip(np.where(safe, step, 0.5), edge, 1.0 - edge)
        alive = i[(width > 2.0 * tol) & (fx != 0.0)]
    return best


def minima(f: Function, lo: Reals, hi: Reals, *, steps: int = 34) -> tuple[Reals, Reals]:
    """Find the minimum in each bracket, the function having one dip there.

    Parameters
    ----------
    f : callable
        As in `roots`.
    lo, hi : (k,) ndarray
        Brackets.
    steps : int
        Golden-section steps; 34 leave 1e-7 of the bracket, where a smooth minimum's value
        is good to about 1e-14 of its curvature.

    Returns
    -------
    x, value : (k,) ndarray
    """
    which = np.arange(lo.size)
    a, b = lo.astype(float).copy(), hi.astype(float).copy()
    x1, x2 = b - _GOLDEN * (b - a), a + _GOLDEN * (b - a)
    f1, f2 = f(x1, which), f(x2, which)
    for _ in range(steps):
        left = f1 < f2
        b, a = np.where(left, x2, b), np.where(left, a, x1)
        fresh = np.where(left, b - _GOLDEN * (b - a), a + _GOLDEN * (b - a))
        value = f(fresh, which)
        x1, f1, x2, f2 = (
            np.where(left, fresh, x2),
            np.where(left, value, f2),
            np.where(left, x1, fresh),
            np.where(left, f1, value),
        )
    first = f1 < f2
    return np.where(first, x1, x2), np.where(first, f1, f2)
