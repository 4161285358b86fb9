"""A process as a transfer function with dead time: the model every later stage works on."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from math import isfinite
from typing import TYPE_CHECKING, Any

import numpy as np
from scipy.linalg import expm

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

#: A pole this close to zero against the largest one counts as an integrator's [1].
#: Products of lags keep their roots to about the square root of machine precision.
_ZERO_ROOT = 1e-9


@dataclass(frozen=True, kw_only=True)
class ProcessModel:
    """A rational transfer function times an exact dead time.

    G(s) = numerator(s) / denominator(s) * exp(-dead_time * s), PV units per CO unit.

    Attributes
    ----------
    numerator : tuple of float
        Coefficients in descending powers of s [PV unit / CO unit * s**k], gain included.
    denominator : tuple of float
        Coefficients in descending powers of s [s**k]; trailing zeros are integrators.
    dead_time : float
        Dead time [s], zero or more.

    Raises
    ------
    ValueError
        If the numerator outranks the denominator, a coefficient is not finite, the
        denominator leads with zero, or the dead time is negative.
    """

    numerator: tuple[float, ...]
    denominator: tuple[float, ...]
    dead_time: float = 0.0

    def __post_init__(self) -> None:
        # In plain Python: hundreds are drawn at a time, and arrays this small cost more to make.
        num = tuple(float(c) for c in self.numerator) or (0.0,)
        den = tuple(float(c) for c in self.denominator)
        first = next((i for i, c in enumerate(num) if c != 0.0), len(num) - 1)
        num = num[first:]
        if not den or den[0] == 0.0:
            raise ValueError("A denominator must lead with a coefficient other than zero.")
        if len(num) > len(den):
            raise ValueError("A process cannot have more zeros than poles.")
        if not all(isfinite(c) for c in (*num, *den)):
            raise ValueError("A process model needs finite coefficients.")
        if not (isfinite(self.dead_time) and self.dead_time >= 0.0):
            raise ValueError("Dead time must be zero or more, and finite.")
        object.__setattr__(self, "numerator", num)
        object.__setattr__(self, "denominator", den)
        object.__setattr__(self, "dead_time", float(self.dead_time))

    def scaled(self, gain: float, lags: float, dead_time: float) -> ProcessModel:
        """Give the process with its gain, lags and zeros, and dead time multiplied.

        Parameters
        ----------
        gain, lags, dead_time : float
            Positive factors [1].
        """
        inner = self.denominator[: len(self.denominator) - self.integrators]
        last, end = len(self.numerator) - 1, len(inner) - 1
        return ProcessModel(
            numerator=tuple(gain * c * lags ** (last - i) for i, c in enumerate(self.numerator)),
            denominator=(*(c * lags ** (end - i) for i, c in enumerate(inner)), *([0.0] * self.integrators)),
            dead_time=dead_time * self.dead_time,
        )

    @cached_property
    def integrators(self) -> int:
        """Number of poles at zero."""
        return next(i for i, c in enumerate(reversed(self.denominator)) if c != 0.0)

    @cached_property
    def gain(self) -> float:
        """Gain of the part without its integrators [PV unit / CO unit / s**integrators]."""
        return self.numerator[-1] / self.denominator[-1 - self.integrators]

    @cached_property
    def poles(self) -> NDArray[np.complex128]:
        """Roots of the denominator [rad/s], integrators as exact zeros."""
        inner = np.asarray(self.denominator)[: len(self.denominator) - self.integrators]
        return np.concatenate([np.roots(inner), np.zeros(self.integrators)]).astype(complex)

    @cached_property
    def zeros(self) -> NDArray[np.complex128]:
        """Roots of the numerator [rad/s]."""
        return np.roots(np.asarray(self.numerator)).astype(complex)

    @cached_property
    def unstable_poles(self) -> NDArray[np.complex128]:
        """Poles in the open right half-plane [rad/s]."""
        poles = self.poles
        scale = float(np.max(np.abs(poles), initial=0.0))
        return poles[poles.real > _ZERO_ROOT * scale]

    @cached_property
    def inverse_zeros(self) -> NDArray[np.complex128]:
        """Zeros in the open right half-plane [rad/s]: the PV first moves the wrong way."""
        zeros = self.zeros
        return zeros[zeros.real > 0.0]

    def effective_dead_time(self, kept: int = 1) -> float:
        """Give the dead time that a controller meets: the true one, and what the lags not kept add.

        Parameters
        ----------
        kept : int
            Lags and integrators the controller counts with: one for a PI, two with derivative action.

        Returns
        -------
        float
            [s].

        References
        ----------
        Skogestad (2003), J. Process Control 13, 291-309, half rule: half of the largest lag
        neglected, all of the others and of the zeros in the right half-plane.
        """
        poles = np.abs(self.poles)
        lags = np.sort(1.0 / poles[poles > 0.0])[::-1]
        left = lags[max(kept - self.integrators, 0) :]
        inverse = float(np.sum(1.0 / np.abs(self.inverse_zeros)))
        return (
            self.dead_time + inverse + (float(left[0]) / 2.0 + float(np.sum(left[1:])) if left.size else 0.0)
        )

    @cached_property
    def high_frequency_gain(self) -> float:
        """Direct share of the output in the PV, zero for a strictly proper process [PV/CO]."""
        if len(self.numerator) < len(self.denominator):
            return 0.0
        return self.numerator[0] / self.denominator[0]

    def frequency_response(self, omega: ArrayLike) -> NDArray[np.complex128]:
        """Evaluate G(j omega) with the exact dead time.

        Parameters
        ----------
        omega : array_like of shape (n,)
            Angular frequencies [rad/s], above zero where the process integrates.

        Returns
        -------
        ndarray of shape (n,)
            Complex gain [PV unit / CO unit].
        """
        s = 1j * np.asarray(omega, dtype=float)
        rational = np.polyval(self.numerator, s) / np.polyval(self.denominator, s)
        return np.asarray(rational * np.exp(-self.dead_time * s), dtype=complex)

    def state_space(
        self,
    ) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64], float]:
        """Give the rational part as x' = A x + B u, y = C x + D u, dead time left out.

        Returns
        -------
        a : ndarray of shape (n, n)
        b : ndarray of shape (n,)
        c : ndarray of shape (n,)
        d : float
            Controllable form, time in seconds.
        """
        den = np.asarray(self.denominator) / self.denominator[0]
        order = den.size - 1
        num = np.zeros(order + 1)
        num[order + 1 - len(self.numerator) :] = np.asarray(self.numerator) / self.denominator[0]
        d = float(num[0])
        a = np.zeros((order, order))
        if order:
            a[0] = -den[1:]
            a[1:, :-1] = np.eye(order - 1)
        b = np.zeros(order)
        b[:1] = 1.0
        c = num[1:] - d * den[1:]
        return a, b, c, d

    def step_response(self, t: ArrayLike) -> NDArray[np.float64]:
        """Give the PV's response to a unit step of the CO at t = 0, exactly.

        Parameters
        ----------
        t : array_like of shape (n,)
            Times [s], any order and spacing; zero before the dead time has passed.

        Returns
        -------
        ndarray of shape (n,)
            Response [PV unit per CO unit].

        Notes
        -----
        The state, the input and the output are propagated by one matrix exponential per
        time, so repeated poles, integrators and unstable poles need no special case.
        """
        tau = np.asarray(t, dtype=float) - self.dead_time
        y = np.zeros(tau.shape)
        on = tau >= 0.0
        a, b, c, d = self.state_space()
        n = b.size
        if not np.any(on):
            return y
        if n == 0:
            y[on] = d
            return y
        speed = max(float(np.max(np.abs(np.linalg.eigvals(a)))), 1.0 / max(float(tau[on].max()), 1e-300))
        scale = speed ** np.arange(n)
        a_scaled = a * scale[None, :] ** -1 * scale[:, None]
        b_scaled = b * scale
        block = np.zeros((n + 1, n + 1))
        block[:n, :n] = a_scaled
        block[:n, n] = b_scaled
        grown = expm(block[None] * tau[on][:, None, None])
        y[on] = grown[:, :n, n] @ (c / scale) + d
        return y

    def to_control(self) -> Any:
        """Give the rational part as a python-control TransferFunction, dead time left out."""
        import control  # heavy, and only some callers want it

        return control.TransferFunction(list(self.numerator), list(self.denominator))
