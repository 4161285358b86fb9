"""What a phase margin is worth on one loop: the curve over it, and whether the usual reading holds."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from pipeline.loop.margins import margin_table, margins
from pipeline.loop.search import roots
from pipeline.loop.simulate import step_numbers
from pipeline.loop.stack import stack_loops
from pipeline.loop.sweep import FINE, Sweep, frequency_grid, gain_crossings, past_at, sweep
from pipeline.tuning.criteria import gain_range
from pipeline.tuning.simulated import gain_within
from pipeline.tuning.types import NO_CRITERIA, Criteria

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from fitters.process import ProcessModel
    from pipeline.loop.types import Controller

    Reals = NDArray[np.float64]

#: Phase margins of the curve [degrees].
_CURVE = np.arange(30.0, 81.0, 5.0)
#: The usual reading: this phase margin goes with about 10 % of overshoot, this lower one with clearly more.
_USUAL, _LOWER = 60.0, 45.0
#: "About 10 % or less" ends here [%]: PI loops on settling processes lie at 6 to 11 (common practice).
_ABOUT_TEN = 12.5
#: Between the two margins the overshoot must at least change by so much to follow the margin [%].
_FOLLOWS = 8.0
#: At the usual margin the other margins must be fair too [1]: Ms of 2 means GM 2 and 29 degrees at least,
#: Skogestad and Postlethwaite (2005), eq. 2.46 and 2.47.
_FAIR_GAIN_MARGIN, _FAIR_SENSITIVITY = 2.0, 2.0
#: A pole pair damped less than this rings [1].
_RINGS = 0.4
#: Dead time over lag from which a settling process counts as dominated by its dead time [1].
_DOMINANT = 1.0
#: An integral time of less than so many dead times is short on an integrating process [1]:
#: Skogestad (2003), J. Process Control 13, 291-309, takes 8 at a closed-loop time of one dead time.
_SHORT_INTEGRAL = 14.25
#: A gain has the phase margin wanted if no other crossover is nearer [degrees].
_MET = 0.01


@dataclass(frozen=True, slots=True, kw_only=True)
class GuidePoint:
    """One phase margin, and what comes with it at these integral and derivative times.

    Attributes
    ----------
    phase_margin : float
        [degrees].
    gain : float
        [CO unit / PV unit].
    overshoot : float
        [%].
    gain_margin, max_sensitivity : float
        [1].
    settling_time : float
        [s].
    crossings : int
        Gain crossings of the loop; more than one and the phase margin may jump.
    """

    phase_margin: float
    gain: float
    overshoot: float
    gain_margin: float
    max_sensitivity: float
    settling_time: float
    crossings: int


@dataclass(frozen=True, slots=True, kw_only=True)
class MarginGuide:
    """Whether the phase margin tells the overshoot on this loop.

    Attributes
    ----------
    holds : bool
        A phase margin of 60 degrees means about 10 % of overshoot or less here, with fair
        margins in the other senses, and the overshoot follows the phase margin.
    why : str
        Why, or why not, with the numbers.
    steer_by : str
        The number to steer by on this loop.
    curve : tuple of GuidePoint
        By rising phase margin; margins that no gain reaches are left out.
    phase_margin_for_overshoot : float or None
        Phase margin at which the overshoot is the one asked for [degrees]; None where no
        gain down the curve brings it.
    """

    holds: bool
    why: str
    steer_by: str
    curve: tuple[GuidePoint, ...]
    phase_margin_for_overshoot: float | None


def margin_guide(
    model: ProcessModel, controller: Controller, *, overshoot: float | None = None
) -> MarginGuide:
    """Judge the phase margin as a guide on one loop.

    Parameters
    ----------
    model : ProcessModel
    controller : Controller
        Its times are kept, its gain is varied.
    overshoot : float, optional
        Overshoot asked for [%].

    Returns
    -------
    MarginGuide
        The curve follows the uppermost, fast branch of gains.
    """
    found = _points(model, controller)
    curve = tuple(p for p in found.values() if p is not None)
    usual, lower = found[_USUAL], found[_LOWER]
    doubts = _doubts(usual, lower)
    reason, steer_by = _reason(model, controller, curve)
    if doubts:
        why = f"{doubts} {reason}".strip()
    else:
        assert usual is not None and lower is not None
        why = (
            f"At 60 degrees the overshoot is {usual.overshoot:.0f} %, at 45 degrees {lower.overshoot:.0f} %, "
            f"with gain margin {usual.gain_margin:.1f} and Ms {usual.max_sensitivity:.2f} at 60 degrees."
        )
        steer_by = "The phase margin serves; keep the gain margin and Ms beside it."
        if model.inverse_zeros.size:
            steer_by += " It does not show how far the PV first moves the wrong way: look at the step."
    return MarginGuide(
        holds=not doubts,
        why=why,
        steer_by=steer_by,
        curve=curve,
        phase_margin_for_overshoot=None
        if overshoot is None or not curve
        else _for_overshoot(model, replace(controller, gain=max(p.gain for p in curve)), overshoot),
    )


def _points(model: ProcessModel, controller: Controller) -> dict[float, GuidePoint | None]:
    """Find the fastest gain for every margin of the curve: all candidates from one sweep, judged at once."""
    loop = stack_loops([model], [controller])
    s = sweep(loop, frequency_grid(loop, FINE))
    wanted, gains = _candidates(s)
    # Far up the dead time brings the phase round again and again, at gains that lose the loop.
    stable = gains <= gain_range(loop, NO_CRITERIA, FINE).high[0]
    wanted, gains = wanted[stable], gains[stable]
    found: dict[float, GuidePoint | None] = dict.fromkeys(_CURVE.tolist())
    if gains.size == 0:
        return found
    row = np.zeros(gains.size, dtype=np.intp)
    loops = loop.scaled(gains, row)
    table = margin_table(loops)
    crossings = np.bincount(
        gain_crossings(sweep(loops, frequency_grid(loops, FINE))).row, minlength=gains.size
    )
    good = table.stable & (np.abs(table.phase_margin - wanted) < _MET)
    for k in np.flatnonzero(good)[np.argsort(gains[good])]:
        there = replace(controller, gain=controller.gain * float(gains[k]))
        found[float(wanted[k])] = GuidePoint(
            phase_margin=float(wanted[k]),
            gain=there.gain,
            overshoot=np.nan,
            gain_margin=float(table.gain_margin[k]),
            max_sensitivity=float(table.max_sensitivity[k]),
            settling_time=np.nan,
            crossings=int(crossings[k]),
        )
    for margin, point in found.items():
        if point is not None:
            step = step_numbers(model, replace(controller, gain=point.gain))
            found[margin] = replace(point, overshoot=step.overshoot, settling_time=step.settling_time)
    return found


def _candidates(s: Sweep) -> tuple[Reals, Reals]:
    """Give each margin wanted and a gain that puts a crossover where the phase is just that."""
    x = np.log(s.omega)
    wanted, low, high = [], [], []
    for margin in _CURVE:
        short = np.abs(s.past[0]) - np.radians(margin)
        k = np.flatnonzero((short[:-1] * short[1:] < 0.0) & s.resolved[0])
        wanted.append(np.full(k.size, margin))
        low.append(x[k])
        high.append(x[k + 1])
    asked = np.concatenate(wanted)
    rows = np.zeros(asked.size, dtype=np.intp)
    at = roots(
        lambda z, i: np.abs(past_at(s.loops, np.exp(z), rows[i])) - np.radians(asked[i]),
        np.concatenate(low),
        np.concatenate(high),
    )
    return asked, 1.0 / np.abs(s.loops.response(np.exp(at), rows))


def _for_overshoot(model: ProcessModel, top: Controller, overshoot: float) -> float | None:
    found = gain_within(model, top, 0.0, Criteria(overshoot=overshoot))
    if found is None or found[1] == "":
        return None
    reached = margins(model, found[0]).phase_margin
    return reached if np.isfinite(reached) else None


def _doubts(usual: GuidePoint | None, lower: GuidePoint | None) -> str:
    """Say in numbers why the usual reading fails; "" where it holds."""
    if usual is None:
        return "No gain reaches 60 degrees at these times."
    if usual.overshoot > _ABOUT_TEN:
        return f"At 60 degrees the overshoot is {usual.overshoot:.0f} %, not 10."
    if usual.gain_margin < _FAIR_GAIN_MARGIN or usual.max_sensitivity > _FAIR_SENSITIVITY:
        return f"At 60 degrees the gain margin is only {usual.gain_margin:.2f} and Ms {usual.max_sensitivity:.2f}."
    if usual.crossings > 1:
        return f"At 60 degrees the loop gain crosses one {usual.crossings} times: the phase margin may jump."
    if lower is None:
        return "No gain brings the phase margin down to 45 degrees: it does not measure the gain here."
    if lower.overshoot - usual.overshoot < _FOLLOWS:
        return (
            f"The overshoot hardly follows the margin: {lower.overshoot:.0f} % at 45 degrees, "
            f"{usual.overshoot:.0f} % at 60."
        )
    return ""


def _reason(model: ProcessModel, controller: Controller, curve: tuple[GuidePoint, ...]) -> tuple[str, str]:
    """Say what about the loop makes the phase margin mislead, and what to steer by instead."""
    integral = controller.kind in ("I", "PI", "PID")
    if model.unstable_poles.size:
        return (
            "The process runs away by itself: the gain has a lower limit as well as an upper one.",
            "Steer by the gain margin both ways, at least 2, and Ms of at most 2.5.",
        )
    if _rings(model) or any(p.crossings > 1 for p in curve):
        return (
            "The process rings: the loop gain rises again beyond the crossover, where the phase margin does "
            "not look.",
            "Steer by Ms of at most 1.8 and a gain margin of at least 3.",
        )
    if not integral and not model.integrators:
        dominant = model.dead_time > _DOMINANT * _lag(model)
        return (
            "There is no integral action, so the overshoot is counted from an offset"
            + (", and the dead time outweighs the lags." if dominant else "."),
            "Steer by Ms of at most 1.6 and a gain margin of at least 2.5, or add integral action.",
        )
    if controller.derivative_time > 0.0:
        return (
            "Derivative action lifts the phase at the crossover and the gain beyond it.",
            "Steer by Ms of at most 1.7, a gain margin of at least 2.5 and the noise on the output.",
        )
    if model.integrators and integral:
        short = controller.integral_time < _SHORT_INTEGRAL * model.dead_time
        return (
            "Process and controller both integrate"
            + (", and the integral time is short against the dead time." if short else "."),
            "Steer by Ms of at most 1.7; a longer integral time or a lower set-point weight lowers the "
            "overshoot.",
        )
    if model.inverse_zeros.size:
        return (
            "The process first moves the wrong way: a zero in the right half-plane takes phase and gives gain.",
            "Steer by the gain margin of at least 2.5 and Ms of at most 1.7.",
        )
    return (
        "The lags and the integral time shape the response more than the crossover does.",
        "Steer by the simulated overshoot and Ms of at most 1.8.",
    )


def _rings(model: ProcessModel) -> bool:
    poles = model.poles[np.abs(model.poles) > 0.0]
    return bool(np.any(-poles.real < _RINGS * np.abs(poles)))


def _lag(model: ProcessModel) -> float:
    """Give the sum of the lags [s]."""
    poles = model.poles[np.abs(model.poles) > 0.0]
    return float(np.sum((1.0 / -poles).real)) if poles.size else 0.0
