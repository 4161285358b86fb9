"""What the process itself forbids: bounds that no controller, however tuned, can pass."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.optimize import brentq, minimize_scalar

from pipeline.loop.controller import extra_dead_time

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from fitters.process import ProcessModel
    from pipeline.loop.types import Controller

    Roots = NDArray[np.complex128]

#: Slope of |L| at the crossover that the bounds allow for: halfway between flat and an integrator.
_SLOPE = -0.5
#: A pole and a zero this near each other cancel in effect; the bounds then pass all measure [1].
_SAME = 1e-9


@dataclass(frozen=True, slots=True, kw_only=True)
class ProcessLimits:
    """Bounds on the loop of one process, whatever its controller.

    Attributes
    ----------
    dead_time : float
        Of process and scanned controller together [s].
    slowest_zero : float or None
        Size of the slowest zero in the right half-plane [rad/s].
    fastest_pole : float or None
        Size of the fastest pole in the right half-plane [rad/s].
    crossover_most : float
        The gain crossover should stay below this [rad/s]; inf where nothing limits it.
    crossover_most_by : str
        "dead time", "right-half-plane zero" or "".
    crossover_least : float
        The gain crossover must lie above this [rad/s]; zero for a process that does not run away.
    sensitivity_least, complementary_least : float
        No stable loop has a smaller Ms or Mt [1].
    crossover_for_margin : tuple of float, or None
        Between these the crossover must lie for the phase margin asked [rad/s]; None where
        no crossover reaches it.
    """

    dead_time: float
    slowest_zero: float | None
    fastest_pole: float | None
    crossover_most: float
    crossover_most_by: str
    crossover_least: float
    sensitivity_least: float
    complementary_least: float
    crossover_for_margin: tuple[float, float] | None

    @property
    def feasible(self) -> bool:
        """Whether a loop can be fast enough for the process to hold and slow enough for it to follow."""
        return self.crossover_least <= self.crossover_most


def process_limits(
    model: ProcessModel, controller: Controller, *, phase_margin: float = 60.0
) -> ProcessLimits:
    """Give the bounds that a process sets to every loop around it.

    Parameters
    ----------
    model : ProcessModel
    controller : Controller
        For the dead time that its scan adds.
    phase_margin : float
        Margin that `crossover_for_margin` is for [degrees].

    Returns
    -------
    ProcessLimits

    References
    ----------
    Skogestad and Postlethwaite (2005), Multivariable Feedback Control, rules 5 to 8 of sec.
    5.9: crossover below 1 / dead time, below z / 2, above 2 p; theorems 5.2 and 5.3: Ms and
    Mt at least the product of |z + p| / |z - p|, Mt that times exp(p dead time).
    Åström (2000), European Journal of Control 6, 2-19: the gain-crossover inequality.
    """
    late = model.dead_time + extra_dead_time(controller)
    zeros, poles = model.inverse_zeros, model.unstable_poles
    slowest = float(np.min(np.abs(zeros))) if zeros.size else None
    fastest = float(np.max(np.abs(poles))) if poles.size else None
    bounds = [(1.0 / late, "dead time")] if late > 0.0 else []
    if slowest is not None:
        bounds.append((0.5 * slowest, "right-half-plane zero"))
    most, by = min(bounds, default=(np.inf, ""))
    sensitivity, complementary = _least_peaks(zeros, poles, late)
    return ProcessLimits(
        dead_time=late,
        slowest_zero=slowest,
        fastest_pole=fastest,
        crossover_most=most,
        crossover_most_by=by,
        crossover_least=2.0 * fastest if fastest is not None else 0.0,
        sensitivity_least=sensitivity,
        complementary_least=complementary,
        crossover_for_margin=crossover_range(zeros, poles, late, phase_margin),
    )


def _least_peaks(zeros: Roots, poles: Roots, late: float) -> tuple[float, float]:
    """Give the least Ms and Mt: each zero with all poles, each pole with all zeros and the dead time."""

    def product(of: complex, others: Roots) -> float:
        apart = np.abs(of - others)
        if np.any(apart <= _SAME * np.abs(of)):
            return np.inf
        return float(np.prod(np.abs(of + np.conj(others)) / apart))

    by_zero = max((product(z, poles) for z in zeros), default=1.0) if poles.size else 1.0
    # exp(p dead time) belongs to the real part of the pole.
    by_pole = max((product(p, zeros) * float(np.exp(p.real * late)) for p in poles), default=1.0)
    return max(by_zero, 1.0), max(by_pole, 1.0)


def crossover_range(
    zeros: Roots, poles: Roots, dead_time: float, phase_margin: float, slope: float = _SLOPE
) -> tuple[float, float] | None:
    """Give the gain crossovers at which a phase margin can be had.

    Parameters
    ----------
    zeros, poles : (n,) ndarray of complex
        Those in the right half-plane [rad/s].
    dead_time : float
        [s].
    phase_margin : float
        [degrees].
    slope : float
        Slope of |L| over frequency at the crossover, both logarithmic [1].

    Returns
    -------
    tuple of (float, float) or None
        Lower and upper end [rad/s]; zero and inf where there is none.

    References
    ----------
    Åström (2000), European Journal of Control 6, 2-19, gain-crossover inequality: the phase
    lag of the all-pass part at the crossover is at most pi - phase margin + slope pi / 2.
    """
    allowed = np.pi - np.radians(phase_margin) + slope * np.pi / 2.0
    marks = np.abs(np.concatenate([zeros, poles, [1.0 / dead_time] if dead_time > 0.0 else []]))
    if marks.size == 0:
        return 0.0, np.inf

    def spare(log_omega: float) -> float:
        w = float(np.exp(log_omega))
        lag = w * dead_time
        lag += sum(2.0 * float(np.arctan((w - z.imag) / z.real)) for z in zeros)
        lag += sum(np.pi - 2.0 * float(np.arctan((w - p.imag) / p.real)) for p in poles)
        return float(allowed - lag)

    grid = np.log(np.geomspace(1e-4 * marks.min(), 1e4 * marks.max(), 400))
    top = int(np.clip(np.argmax([spare(float(x)) for x in grid]), 1, grid.size - 2))
    peak = minimize_scalar(lambda x: -spare(x), bounds=(grid[top - 1], grid[top + 1]), method="bounded").x
    grid = np.sort(np.append(grid, peak))
    value = np.array([spare(float(x)) for x in grid])
    good = np.flatnonzero(value >= 0.0)
    if good.size == 0:
        return None
    first, last = int(good[0]), int(good[-1])
    low = 0.0 if first == 0 else float(np.exp(brentq(spare, grid[first - 1], grid[first])))
    high = np.inf if last == grid.size - 1 else float(np.exp(brentq(spare, grid[last], grid[last + 1])))
    return low, high
