"""Unit-step shapes of the elements that low-order processes are made of, with their derivatives."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from scipy.special import gammainc, gammaln

from fitters.structures.base import Shapes

if TYPE_CHECKING:
    from collections.abc import Iterator

    from numpy.typing import NDArray


def lag_starts(span: float, interval: float, count: int) -> Iterator[float]:
    """Give logarithms of lags from near the log interval to beyond the record.

    Parameters
    ----------
    span, interval : float
        Length and spacing of the record [s].
    count : int
        How many.
    """
    yield from np.linspace(np.log(max(1.0 * interval, span / 1000.0)), np.log(2.0 * span), count)


def lag(tau: NDArray[np.float64], log_lag: Any) -> Shapes:
    """Evaluate 1 / (T s + 1), searched by log T.

    Parameters
    ----------
    tau : (...) ndarray
        Time after the step [s], zero or more.
    log_lag : float or ndarray
        Natural logarithm of T in seconds.
    """
    lag_s = np.exp(log_lag)
    decay = np.exp(-tau / lag_s)
    by_time = decay / lag_s
    return Shapes((1.0 - decay)[None], by_time[None], (-tau * by_time)[None, None])


def integrator(tau: NDArray[np.float64]) -> Shapes:
    """Evaluate 1 / s.

    Parameters
    ----------
    tau : (...) ndarray
        Time after the step [s], zero or more.
    """
    return Shapes(tau[None], np.ones_like(tau)[None], np.empty((0, 1, *tau.shape)))


def integrated_lag(tau: NDArray[np.float64], log_lag: Any) -> Shapes:
    """Evaluate 1 / (s (T s + 1)), searched by log T.

    Parameters
    ----------
    tau : (...) ndarray
        Time after the step [s], zero or more.
    log_lag : float or ndarray
        Natural logarithm of T in seconds.
    """
    lag_s = np.exp(log_lag)
    decay = np.exp(-tau / lag_s)
    value = tau - lag_s * (1.0 - decay)
    by_log = -lag_s * (1.0 - decay) + tau * decay
    return Shapes(value[None], (1.0 - decay)[None], by_log[None, None])


def double_integrator(tau: NDArray[np.float64]) -> Shapes:
    """Evaluate 1 / s**2.

    Parameters
    ----------
    tau : (...) ndarray
        Time after the step [s], zero or more.
    """
    return Shapes((0.5 * tau**2)[None], tau[None], np.empty((0, 1, *tau.shape)))


def twice_integrated_lag(tau: NDArray[np.float64], log_lag: Any) -> Shapes:
    """Evaluate 1 / (s**2 (T s + 1)), searched by log T.

    Parameters
    ----------
    tau : (...) ndarray
        Time after the step [s], zero or more.
    log_lag : float or ndarray
        Natural logarithm of T in seconds.
    """
    lag_s = np.exp(log_lag)
    decay = np.exp(-tau / lag_s)
    slope = tau - lag_s * (1.0 - decay)
    value = 0.5 * tau**2 - lag_s * slope
    by_log = -lag_s * slope - lag_s * (-lag_s * (1.0 - decay) + tau * decay)
    return Shapes(value[None], slope[None], by_log[None, None])


def equal_lags(tau: NDArray[np.float64], log_lag: Any, count: int) -> Shapes:
    """Evaluate 1 / (T s + 1)**n, searched by log T: the regularised incomplete gamma function.

    Parameters
    ----------
    tau : (...) ndarray
        Time after the step [s], zero or more.
    log_lag : float or ndarray
        Natural logarithm of T in seconds.
    count : int
        Number of lags n.
    """
    x = tau * np.exp(-log_lag)
    value = gammainc(count, x)
    with np.errstate(divide="ignore"):
        density = np.exp((count - 1) * np.log(x) - x - gammaln(count))
    return Shapes(value[None], (density * np.exp(-log_lag))[None], (-x * density)[None, None])


def pair(tau: NDArray[np.float64], log_time: Any, log_damping: float) -> Shapes:
    """Evaluate 1 and s over (tau0**2 s**2 + 2 zeta tau0 s + 1): two shapes.

    Parameters
    ----------
    tau : (...) ndarray
        Time after the step [s], zero or more.
    log_time : float or ndarray
        Natural logarithm of tau0 = 1 / natural frequency in seconds.
    log_damping : float
        Natural logarithm of the damping zeta.

    Notes
    -----
    With x = t / tau0, C = cosh(w x) and S = sinh(w x) / w, w**2 = zeta**2 - 1, the step
    response is 1 - exp(-zeta x) (C + zeta S). C and S are even in w, so real, equal and
    complex poles are one formula; near w = 0 their series is used.
    """
    time_s = np.exp(log_time)
    zeta = np.exp(log_damping)
    x = tau / time_s
    even, odd = _even_and_odd(x, zeta)
    odd_by_square = _odd_by_square(x, zeta, even, odd)
    step = 1.0 - (even + zeta * odd)
    rate = odd  # d(step)/dx: the impulse response
    rate_by_x = even - zeta * odd
    # zeta enters as the decay, as the factor of S, and through w**2 with d(w**2) = 2 zeta d(zeta);
    # dC/d(w**2) = x S / 2.
    even_by_zeta = -x * even + zeta * x * odd
    odd_by_zeta = -x * odd + 2.0 * zeta * odd_by_square
    step_by_zeta = -(even_by_zeta + odd + zeta * odd_by_zeta)
    value = np.empty((2, *x.shape))
    by_time = np.empty_like(value)
    by_search = np.empty((2, 2, *x.shape))
    value[0] = step
    value[1] = by_time[0] = rate / time_s
    by_time[1] = rate_by_x / time_s**2
    by_search[0, 0] = -x * rate
    by_search[0, 1] = -(rate + x * rate_by_x) / time_s
    by_search[1, 0] = step_by_zeta * zeta
    by_search[1, 1] = odd_by_zeta * (zeta / time_s)
    return Shapes(value, by_time, by_search)


def pair_values(tau: NDArray[np.float64], log_time: Any, log_damping: float) -> NDArray[np.float64]:
    """Evaluate the two shapes of `pair` without their derivatives.

    Parameters
    ----------
    tau : (...) ndarray
        Time after the step [s], zero or more.
    log_time : float or ndarray
        Natural logarithm of 1 / natural frequency in seconds.
    log_damping : float
        Natural logarithm of the damping.

    Returns
    -------
    (2, ...) ndarray
    """
    time_s = np.exp(log_time)
    zeta = np.exp(log_damping)
    even, odd = _even_and_odd(tau / time_s, zeta)
    value = np.empty((2, *even.shape))
    value[0] = 1.0 - (even + zeta * odd)
    value[1] = odd / time_s
    return value


#: This near w = 0 the series are used [1]: w x is small there wherever exp(-x) still matters.
_NEAR_CRITICAL = 1e-4


def _even_and_odd(x: NDArray[np.float64], zeta: float) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Give exp(-zeta x) times C and S, safe from overflow and from w = 0."""
    square = zeta * zeta - 1.0
    if abs(square) < _NEAR_CRITICAL:  # four terms reach 1e-12
        decay = np.exp(-zeta * x)
        z = square * x * x
        even = decay * (1 + z / 2 * (1 + z / 12 * (1 + z / 30)))
        odd = decay * x * (1 + z / 6 * (1 + z / 20 * (1 + z / 42)))
        return even, odd
    if square > 0:
        w = np.sqrt(square)
        slow = np.exp(-x / (zeta + w))  # zeta - w without cancellation
        fast = np.exp(-(zeta + w) * x)
        return 0.5 * (slow + fast), 0.5 * (slow - fast) / w
    w = np.sqrt(-square)
    decay = np.exp(-zeta * x)
    return decay * np.cos(w * x), decay * np.sin(w * x) / w


def _odd_by_square(
    x: NDArray[np.float64], zeta: float, even: NDArray[np.float64], odd: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Give exp(-zeta x) times dS/d(w**2)."""
    square = zeta * zeta - 1.0
    if abs(square) < _NEAR_CRITICAL:
        z = square * x * x
        return np.asarray(np.exp(-zeta * x) * x**3 / 6 * (1 + z / 10 * (1 + z / 28)))
    return (x * even - odd) / (2.0 * square)
