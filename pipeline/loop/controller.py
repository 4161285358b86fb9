"""A controller's frequency response, and the loop it closes."""

from __future__ import annotations

from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    from fitters.process import ProcessModel
    from pipeline.loop.types import Action, Controller

    Polynomial = NDArray[np.float64]

#: Controllers whose polynomials are remembered [1]: a search asks for the same ones many times over.
_KEPT = 1024


def sign(action: Action) -> float:
    """Give +1 for reverse action, -1 for direct.

    Parameters
    ----------
    action : {"reverse", "direct"}

    Returns
    -------
    float
        Sign of the controller's gain in the equation.
    """
    return 1.0 if action == "reverse" else -1.0


def extra_dead_time(controller: Controller) -> float:
    """Give the dead time a scanned controller adds to its loop.

    Parameters
    ----------
    controller : Controller

    Returns
    -------
    float
        Half the scan, for the held output, and the compute delay [s].

    References
    ----------
    Åström and Wittenmark (1997), Computer-Controlled Systems: the phase of a zero-order
    hold is exactly -omega h / 2.
    """
    return 0.5 * controller.scan + controller.compute_delay


def product(p: ArrayLike, q: ArrayLike) -> Polynomial:
    """Multiply two polynomials.

    Parameters
    ----------
    p, q : (n,), (m,) array_like
        Coefficients in descending powers of s.

    Returns
    -------
    (n + m - 1,) ndarray
    """
    out = np.convolve(np.asarray(p, dtype=float), np.asarray(q, dtype=float))
    return out if out[0] != 0.0 else np.trim_zeros(out, "f") if out.any() else np.zeros(1)


@lru_cache(maxsize=_KEPT)
def feedback_path(controller: Controller) -> tuple[Polynomial, Polynomial]:
    """Give the path from PV to CO as a ratio of polynomials, sign of the feedback left out.

    Parameters
    ----------
    controller : Controller

    Returns
    -------
    numerator, denominator : (n,) ndarray
        Descending powers of s [CO unit / PV unit], the PV filter included.
    """
    num, den = _terms(controller, 1.0, 1.0)
    if controller.pv_filter > 0.0:
        den = product(den, [controller.pv_filter, 1.0])
    return _frozen(num), _frozen(den)


@lru_cache(maxsize=_KEPT)
def setpoint_path(controller: Controller) -> tuple[Polynomial, Polynomial]:
    """Give the path from SP to CO as a ratio of polynomials.

    Parameters
    ----------
    controller : Controller

    Returns
    -------
    numerator, denominator : (n,) ndarray
        Descending powers of s [CO unit / PV unit].
    """
    num, den = _terms(controller, controller.setpoint_weight, controller.derivative_setpoint_weight)
    return _frozen(num), _frozen(den)


def _frozen(polynomial: Polynomial) -> Polynomial:
    polynomial.flags.writeable = False
    return polynomial


def _terms(c: Controller, proportional: float, derivative: float) -> tuple[Polynomial, Polynomial]:
    """Sum the three terms over their common denominator Ti s (1 + Tf s)."""
    k = sign(c.action) * c.gain
    if c.kind == "I":
        return np.array([k]), np.array([c.integral_time, 0.0])
    num, den = np.array([k * proportional]), np.array([1.0])
    if c.kind in ("PI", "PID") and np.isfinite(c.integral_time):
        num = np.array([k * proportional * c.integral_time, k])
        den = np.array([c.integral_time, 0.0])
    if c.kind in ("PD", "PID") and c.derivative_time > 0.0:
        lag = np.array([c.derivative_filter, 1.0]) if c.derivative_filter > 0.0 else np.array([1.0])
        lead = np.array([k * derivative * c.derivative_time, 0.0])
        num, lead = np.convolve(num, lag), np.convolve(lead, den)
        num, lead = (np.pad(x, (max(num.size, lead.size) - x.size, 0)) for x in (num, lead))
        num, den = num + lead, np.convolve(den, lag)
    return num, den


def controller_response(
    controller: Controller, omega: ArrayLike
) -> tuple[NDArray[np.complex128], NDArray[np.complex128]]:
    """Evaluate the feedback path and the set-point path at j omega.

    Parameters
    ----------
    controller : Controller
    omega : array_like of shape (n,)
        Angular frequencies [rad/s], above zero.

    Returns
    -------
    feedback, setpoint : ndarray of shape (n,)
        Complex gains [CO unit / PV unit], each with the scan's extra dead time.
    """
    s = 1j * np.asarray(omega, dtype=float)
    late = np.exp(-extra_dead_time(controller) * s)
    paths = []
    for num, den in (feedback_path(controller), setpoint_path(controller)):
        paths.append(np.asarray(np.polyval(num, s) / np.polyval(den, s) * late, dtype=complex))
    return paths[0], paths[1]


def loop_response(model: ProcessModel, controller: Controller, omega: ArrayLike) -> NDArray[np.complex128]:
    """Evaluate the loop L(j omega): feedback path times process, dead time exact.

    Parameters
    ----------
    model : ProcessModel
    controller : Controller
    omega : array_like of shape (n,)
        Angular frequencies [rad/s], above zero.

    Returns
    -------
    ndarray of shape (n,)
        Complex loop gain [1]; the closed loop is 1 / (1 + L).
    """
    feedback, _ = controller_response(controller, omega)
    return np.asarray(feedback * model.frequency_response(omega), dtype=complex)
