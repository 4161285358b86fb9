"""Set-point responses of many loops at once, by numerical inversion of their transforms."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from pipeline.loop.controller import extra_dead_time, feedback_path, setpoint_path, sign

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from fitters.process import ProcessModel
    from pipeline.loop.types import Controller

    Reals = NDArray[np.float64]

#: Damping of the inversion line over one period [1]: a response that comes round from the
#: period before is weakened by exp(-9), 1e-4; more would magnify truncation at the far end.
_DAMPING = 9.0
#: Second difference above which a peak is a jump or a corner, not a parabola [share of the step].
_SMOOTH = 0.05


def batch_setpoint(
    models: Sequence[ProcessModel],
    controllers: Sequence[Controller],
    *,
    horizon: float | Reals,
    points: int = 512,
) -> tuple[Reals, Reals]:
    """Give unit set-point responses of stable loops.

    Parameters
    ----------
    models : sequence of ProcessModel
        All of one degree of numerator and denominator.
    controllers : sequence of Controller
        All of one kind; either sequence may hold one item, which then serves every row.
    horizon : float or (m,) ndarray
        Length of the responses, or of each [s].
    points : int
        Points of the grid.

    Returns
    -------
    t : (points,) or (m, points) ndarray
        Grid from zero, or one for each row [s].
    pv : (m, points) ndarray
        Responses [1]. Rows of unstable loops mean nothing.

    Notes
    -----
    The response is the Fourier series of its damped self over two horizons. What is not
    smooth is taken out first and put back exactly: the jumps of a process that answers at
    once, otherwise the corner at the end of the dead time, so the series ends fast.

    References
    ----------
    Dubner and Abate (1968), Journal of the ACM 15, 115-123.
    """
    sp_num, sp_den = (_stacked([setpoint_path(c)[i] for c in controllers]) for i in (0, 1))
    fb_num, fb_den = (_stacked([feedback_path(c)[i] for c in controllers]) for i in (0, 1))
    g_num, g_den = _stacked([g.numerator for g in models]), _stacked([g.denominator for g in models])
    delay = np.array([g.dead_time for g in models]) + np.array([extra_dead_time(c) for c in controllers])
    m = delay.size
    length = np.atleast_1d(np.asarray(horizon, dtype=float))[:, None]
    period = 2.0 * length
    count = 2 * points
    a = _DAMPING / period
    s = np.asarray(a + 2j * np.pi / period * np.arange(points + 1), dtype=complex)
    late = np.exp(-delay[:, None] * s)
    g = _at(g_num, s) / _at(g_den, s) * late
    forced = g * _at(sp_num, s) / _at(sp_den, s)
    y = forced / (s * (1.0 + g * _at(fb_num, s) / _at(fb_den, s)))

    t = period / count * np.arange(points)
    first, second, order = _leading(sp_num, sp_den, g_num, g_den)
    known = np.zeros((m, points))
    since = t - delay[:, None]
    stepped, cornered = order == 0, (order == 1) | (order == 2)
    if stepped.any():
        direct, _, loop_order = _leading(fb_num, fb_den, g_num, g_den)
        direct = np.where(loop_order == 0, direct, 0.0)
        y = y - np.where(stepped[:, None], first[:, None] * late / (s * (1.0 + direct[:, None] * late)), 0.0)
        known += np.where(stepped[:, None], _stairs(first, direct, delay, np.asarray(t, dtype=float)), 0.0)
    if cornered.any():
        power = np.where(cornered, order, 1)
        speed = np.where(-second / power > 0.0, -second / power, 10.0 / length[:, 0])
        part = first[:, None] * late / (s * (s + speed[:, None]) ** power[:, None])
        y = y - np.where(cornered[:, None], part, 0.0)
        # As the series has it: with its own echo from one period on, which may be no small part.
        shape = _rise(power[:, None], speed[:, None] * np.maximum(since, 0.0))
        shape += np.exp(-_DAMPING) * _rise(power[:, None], speed[:, None] * np.maximum(since + period, 0.0))
        known += np.where(cornered[:, None], (first / speed**power)[:, None] * shape, 0.0)
    # The last coefficient stands for both ends of the band.
    y[:, -1] *= 0.5
    series = np.fft.irfft(y, n=count, axis=1)[:, :points]
    response = series * (count / period) * np.exp(a * t) + known
    response[since < 0.0] = 0.0
    grid = np.asarray(np.broadcast_to(t, (length.shape[0], points)), dtype=float)
    return grid[0] if np.ndim(horizon) == 0 else grid, np.asarray(response, dtype=float)


def _rise(power: NDArray[np.int64], x: Reals) -> Reals:
    """Give the step response of one or two equal lags at x time constants."""
    return np.asarray(1.0 - np.exp(-x) * np.where(power == 1, 1.0, 1.0 + x), dtype=float)


def _stacked(polys: Sequence[Sequence[float] | Reals]) -> Reals:
    width = max(len(p) for p in polys)
    if all(len(p) == width for p in polys):
        return np.array(polys, dtype=float)
    out = np.zeros((len(polys), width))
    for i, p in enumerate(polys):
        out[i, width - len(p) :] = p
    return out


def batch_final(models: Sequence[ProcessModel], controllers: Sequence[Controller]) -> Reals:
    """Give where each loop's unit set-point step ends.

    Parameters
    ----------
    models : sequence of ProcessModel
        All of one number of integrators; their loops stable.
    controllers : sequence of Controller
        All of one kind; either sequence may hold one item, which then serves every row.

    Returns
    -------
    (m,) ndarray
        Final values [1]: one with integral action in the controller.
    """
    weight = np.array([c.setpoint_weight for c in controllers])
    every = np.ones(max(len(models), len(controllers)))
    c = controllers[0]
    if c.kind in ("I", "PI", "PID") and np.isfinite(c.integral_time):
        return every
    if models[0].integrators:
        return weight * every
    loop = np.array([sign(c.action) * c.gain for c in controllers]) * np.array([g.gain for g in models])
    return np.asarray(weight * loop / (1.0 + loop), dtype=float)


def _at(poly: Reals, s: NDArray[np.complex128]) -> NDArray[np.complex128]:
    if np.all(poly == poly[:1]):
        poly = poly[:1]
    out = np.broadcast_to(poly[:, :1], np.broadcast_shapes(poly[:, :1].shape, s.shape)).astype(complex)
    for k in range(1, poly.shape[1]):
        out = out * s + poly[:, k : k + 1]
    return out


def _leading(*polys: Reals) -> tuple[Reals, Reals, NDArray[np.int64]]:
    """Give c, c1 and r of (n1/d1)(n2/d2) = c s**-r (1 + c1/s + ...)."""
    c, c1, r = np.ones(1), np.zeros(1), np.zeros(1, dtype=np.int64)
    for i, poly in enumerate(polys):
        at = np.argmax(poly != 0.0, axis=1)
        rows = np.arange(poly.shape[0])
        lead = poly[rows, at]
        follow = np.where(at + 1 < poly.shape[1], poly[rows, np.minimum(at + 1, poly.shape[1] - 1)], 0.0)
        degree = poly.shape[1] - 1 - at
        way = 1 if i % 2 == 0 else -1
        with np.errstate(divide="ignore", invalid="ignore"):
            c = c * lead**way
            c1 = c1 + way * np.where(lead != 0.0, follow / lead, 0.0)
        r = r - way * degree
    return c, c1, r


def _stairs(first: Reals, direct: Reals, delay: Reals, t: Reals) -> Reals:
    with np.errstate(divide="ignore", invalid="ignore"):
        passes = np.where(delay[:, None] > 0.0, np.floor(t / delay[:, None] + 1e-9), np.inf)
    d = direct[:, None]
    with np.errstate(over="ignore", invalid="ignore"):
        held = np.where(np.isinf(passes), 1.0, 1.0 - (-d) ** np.where(np.isinf(passes), 0.0, passes))
    return np.asarray(first[:, None] * np.where(passes >= 1.0, held, 0.0) / (1.0 + d), dtype=float)


def batch_overshoot(pv: Reals, final: Reals) -> Reals:
    """Read overshoots off batch responses.

    Parameters
    ----------
    pv : (m, n) ndarray
        Responses.
    final : (m,) ndarray
        Their final values.

    Returns
    -------
    (m,) ndarray
        Peak above the final value [% of it], the peak between grid points by a parabola;
        inf without a finite final value other than zero.
    """
    share = pv / np.where(final == 0.0, np.nan, final)[:, None]
    k = np.clip(np.argmax(np.nan_to_num(share, nan=-np.inf), axis=1), 1, pv.shape[1] - 2)
    rows = np.arange(pv.shape[0])
    left, mid, right = share[rows, k - 1], share[rows, k], share[rows, k + 1]
    bend = left - 2.0 * mid + right
    with np.errstate(divide="ignore", invalid="ignore"):
        # A jump is no parabola: only a well resolved peak is lifted.
        smooth = (bend < 0.0) & (bend > -_SMOOTH)
        lift = np.where(smooth, -((right - left) ** 2) / (8.0 * bend), 0.0)
    over = 100.0 * (np.maximum(mid + lift, share.max(axis=1)) - 1.0)
    return np.where(np.isfinite(final) & (final != 0.0), np.maximum(over, 0.0), np.inf)
