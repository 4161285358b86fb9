"""Settings as a controller's own screen wants them: equation, units, and back again."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np

from pipeline.errors import UsageError

if TYPE_CHECKING:
    from fitters.process import ProcessModel
    from pipeline.loop.types import Action, Controller

Equation = Literal["standard", "series", "parallel"]
Proportional = Literal["gain", "band"]
Basis = Literal["span", "engineering"]
Integral = Literal[
    "seconds per repeat",
    "minutes per repeat",
    "repeats per minute",
    "repeats per second",
    "gain per second",
    "gain per minute",
    "gain per scan",
]
Derivative = Literal["seconds", "minutes", "gain in seconds", "gain in minutes"]

_MINUTE = 60.0  # [s]
_PERCENT = 100.0  # a proportional band is in percent


@dataclass(frozen=True, slots=True, kw_only=True)
class Entry:
    """How one controller takes its settings.

    Attributes
    ----------
    equation : {"standard", "series", "parallel"}
    proportional : {"gain", "band"}
        A band is 100 / gain [%].
    proportional_basis : {"span", "engineering"}
        Percent of span over percent of span, or the units of the PV and CO columns.
    integral, derivative : str
        Units of entry.
    pv_span, co_span : float or None
        Ranges of PV and CO in their columns' units; needed on a span basis.
    scan : float
        Execution interval; needed for a gain per scan [s].
    proportional_step, integral_step, derivative_step : float or None
        Smallest change each setting can be entered with, in its own unit.
    """

    equation: Equation = "standard"
    proportional: Proportional = "gain"
    proportional_basis: Basis = "engineering"
    integral: Integral = "seconds per repeat"
    derivative: Derivative = "seconds"
    pv_span: float | None = None
    co_span: float | None = None
    scan: float = 0.0
    proportional_step: float | None = None
    integral_step: float | None = None
    derivative_step: float | None = None

    def span_factor(self) -> float:
        """Give the entered gain over the gain in engineering units [1].

        Raises
        ------
        UsageError
            If a span basis is asked for and a span is missing or not above zero.
        """
        if self.proportional_basis == "engineering":
            return 1.0
        if not (self.pv_span and self.co_span and self.pv_span > 0.0 and self.co_span > 0.0):
            raise UsageError(
                "Settings in percent of span need the ranges of the PV and of the CO.",
                remedy="Give both ranges on the loop sheet, or ask for engineering units.",
            )
        return self.pv_span / self.co_span


@dataclass(frozen=True, slots=True, kw_only=True)
class Entered:
    """The three numbers to type in, in the entry's units; None for a term the controller lacks.

    With integral action alone, `proportional` is None and `integral` the integral gain.
    """

    proportional: float | None
    integral: float | None
    derivative: float | None


def to_series(gain: float, integral: float, derivative: float) -> tuple[float, float, float]:
    """Convert standard settings to the series equation.

    Parameters
    ----------
    gain, integral, derivative : float
        Standard gain, Ti and Td [s]; Ti may be inf.

    Returns
    -------
    tuple of 3 float
        Series gain, Ti and Td.

    Raises
    ------
    UsageError
        If Ti is less than four times Td.

    References
    ----------
    Åström and Hägglund (1995), PID Controllers, sec. 3.2.
    """
    if derivative == 0.0 or np.isinf(integral):
        return gain, integral, derivative
    inside = 1.0 - 4.0 * derivative / integral
    if inside < -1e-12:
        raise UsageError(
            f"A series controller cannot hold an integral time of {integral:.4g} s with a derivative time of "
            f"{derivative:.4g} s: it needs at least four times the derivative time.",
            remedy=f"Use a derivative time of at most {integral / 4.0:.4g} s.",
        )
    r = float(np.sqrt(max(inside, 0.0)))
    return gain * (1.0 + r) / 2.0, integral * (1.0 + r) / 2.0, 2.0 * derivative / (1.0 + r)


def from_series(gain: float, integral: float, derivative: float) -> tuple[float, float, float]:
    """Convert series settings to the standard equation; the reverse of `to_series`.

    Parameters
    ----------
    gain, integral, derivative : float
        Series gain, Ti and Td [s]; Ti may be inf.

    Returns
    -------
    tuple of 3 float
        Standard gain, Ti and Td.

    References
    ----------
    Skogestad (2003), J. Process Control 13, 291-309: factor 1 + Td / Ti.
    """
    f = 1.0 if np.isinf(integral) else 1.0 + derivative / integral
    return f * gain, f * integral, derivative / f


def enter(controller: Controller, entry: Entry) -> Entered:
    """Give the numbers to type into a controller.

    Parameters
    ----------
    controller : Controller
    entry : Entry

    Returns
    -------
    Entered

    Raises
    ------
    UsageError
        If the equation cannot hold the settings, or a span is missing.
    """
    gain, ti, td = controller.gain, controller.integral_time, controller.derivative_time
    if controller.kind == "I":
        return Entered(
            proportional=None,
            integral=_integral_only(gain / ti * entry.span_factor(), entry),
            derivative=None,
        )
    if entry.equation == "series":
        gain, ti, td = to_series(gain, ti, td)
    gain *= entry.span_factor()
    has_i = controller.kind in ("PI", "PID")
    has_d = controller.kind in ("PD", "PID")
    return Entered(
        proportional=_PERCENT / gain if entry.proportional == "band" else gain,
        integral=_integral(gain, ti, entry) if has_i else None,
        derivative=_derivative(gain, td, entry) if has_d else None,
    )


def understand(entered: Entered, entry: Entry) -> tuple[float | None, float, float]:
    """Give standard settings from the numbers on a controller's screen; the reverse of `enter`.

    Parameters
    ----------
    entered : Entered
    entry : Entry

    Returns
    -------
    gain : float or None
        Standard gain [CO unit / PV unit]; with integral action alone, the integral gain
        [CO unit / PV unit / s], to be used with an integral time of one second.
    integral_time : float
        Ti [s]; inf without integral action, one with integral action alone.
    derivative_time : float
        Td [s].

    Raises
    ------
    UsageError
        If a number that must be above zero is not, or a span is missing.
    """
    for name, value in (
        ("proportional setting", entered.proportional),
        ("integral setting", entered.integral),
    ):
        if value is not None and not value > 0.0:
            raise UsageError(
                f"The {name} is {value:g}, which switches the action off on some controllers and makes it "
                "endless on others.",
                remedy="Leave the setting out if the action is off.",
            )
    factor = entry.span_factor()
    if entered.proportional is None:
        if entered.integral is None:
            raise UsageError("The controller has neither a proportional nor an integral setting.")
        per = _MINUTE if entry.integral in ("gain per minute", "repeats per minute") else 1.0
        value = entered.integral
        if entry.integral == "gain per scan":
            per = entry.scan
        if entry.integral in ("seconds per repeat", "minutes per repeat"):
            value, per = 1.0 / value, (_MINUTE if entry.integral == "minutes per repeat" else 1.0)
        return value / per / factor, 1.0, 0.0
    gain = _PERCENT / entered.proportional if entry.proportional == "band" else entered.proportional
    ti = np.inf if entered.integral is None else _integral_time(gain, entered.integral, entry)
    td = 0.0 if entered.derivative is None else _derivative_time(gain, entered.derivative, entry)
    gain /= factor
    if entry.equation == "series":
        gain, ti, td = from_series(gain, ti, td)
    return gain, ti, td


def _integral_only(gain: float, entry: Entry) -> float:
    """Enter an integral gain per second: a time for one repeat of unit gain where times are asked."""
    return {
        "seconds per repeat": 1.0 / gain,
        "minutes per repeat": 1.0 / gain / _MINUTE,
        "repeats per minute": gain * _MINUTE,
        "repeats per second": gain,
        "gain per second": gain,
        "gain per minute": gain * _MINUTE,
        "gain per scan": gain * entry.scan,
    }[entry.integral]


def _integral(gain: float, ti: float, entry: Entry) -> float:
    return {
        "seconds per repeat": ti,
        "minutes per repeat": ti / _MINUTE,
        "repeats per minute": _MINUTE / ti,
        "repeats per second": 1.0 / ti,
        "gain per second": gain / ti,
        "gain per minute": gain / ti * _MINUTE,
        "gain per scan": gain / ti * entry.scan,
    }[entry.integral]


def _integral_time(gain: float, value: float, entry: Entry) -> float:
    return {
        "seconds per repeat": value,
        "minutes per repeat": value * _MINUTE,
        "repeats per minute": _MINUTE / value,
        "repeats per second": 1.0 / value,
        "gain per second": gain / value,
        "gain per minute": gain / value * _MINUTE,
        "gain per scan": gain / value * entry.scan,
    }[entry.integral]


def _derivative(gain: float, td: float, entry: Entry) -> float:
    return {
        "seconds": td,
        "minutes": td / _MINUTE,
        "gain in seconds": gain * td,
        "gain in minutes": gain * td / _MINUTE,
    }[entry.derivative]


def _derivative_time(gain: float, value: float, entry: Entry) -> float:
    return {
        "seconds": value,
        "minutes": value * _MINUTE,
        "gain in seconds": value / gain,
        "gain in minutes": value * _MINUTE / gain,
    }[entry.derivative]


def action_for(process_gain: float) -> Action:
    """Give the action that makes the feedback negative.

    Parameters
    ----------
    process_gain : float
        Gain from CO to PV, other than zero [PV unit / CO unit].

    Returns
    -------
    {"reverse", "direct"}

    Raises
    ------
    UsageError
        If the gain is zero.
    """
    if process_gain == 0.0 or not np.isfinite(process_gain):
        raise UsageError("A process gain of zero has no controller action.")
    return "reverse" if process_gain > 0.0 else "direct"


def action_for_model(model: ProcessModel) -> Action:
    """Give the action that can stabilise a process.

    Parameters
    ----------
    model : ProcessModel

    Returns
    -------
    {"reverse", "direct"}
        From the sign of the gain; each real pole in the right half-plane turns it round, as
        a process that runs away moves, at first, against the sign of its static gain.

    Raises
    ------
    UsageError
        If the gain is zero.
    """
    flips = int(np.sum(np.abs(model.unstable_poles.imag) <= 1e-9 * np.abs(model.unstable_poles)))
    return action_for(model.gain * (-1.0) ** flips)


def action_in_words(action: Action) -> str:
    """Say what the output must do, to be checked on site.

    Parameters
    ----------
    action : {"reverse", "direct"}

    Returns
    -------
    str
    """
    return f"PV rises: the output must {'fall' if action == 'reverse' else 'rise'}."
