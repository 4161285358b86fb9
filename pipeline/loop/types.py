"""Values of the loop: controller, margins, predicted responses."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

Kind = Literal["P", "I", "PI", "PD", "PID"]
Action = Literal["reverse", "direct"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Controller:
    """A controller in the standard equation, derivative on the PV.

    CO = sign * gain * (b SP - PV + (1/(Ti s)) (SP - PV) + Td s / (1 + Tf s) (c SP - PV)),
    with sign = +1 for reverse action (CO falls when PV rises) and -1 for direct action.
    An I controller has only the middle term, its `gain` / `integral_time` being the
    integral gain. PV passes through 1 / (1 + pv_filter s) first.

    Attributes
    ----------
    kind : {"P", "I", "PI", "PD", "PID"}
    gain : float
        Proportional gain, above zero [CO unit / PV unit].
    action : {"reverse", "direct"}
        Reverse: the output falls when the PV rises.
    integral_time : float
        Ti [s]; inf without integral action.
    derivative_time : float
        Td [s]; zero without derivative action.
    derivative_filter : float
        Tf of the derivative's own filter [s]; zero without derivative action.
    setpoint_weight, derivative_setpoint_weight : float
        b and c [1].
    pv_filter : float
        Time constant of the filter on the measurement [s].
    scan : float
        Execution interval [s]; zero for a continuous controller. Half of it, and the
        compute delay, count as dead time in margins and predictions.
    compute_delay : float
        Time from sampling the PV to writing the CO [s].
    """

    kind: Kind
    gain: float
    action: Action
    integral_time: float = np.inf
    derivative_time: float = 0.0
    derivative_filter: float = 0.0
    setpoint_weight: float = 1.0
    derivative_setpoint_weight: float = 0.0
    pv_filter: float = 0.0
    scan: float = 0.0
    compute_delay: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Crossing:
    """One crossing of the loop's frequency response.

    Attributes
    ----------
    kind : {"gain", "phase"}
        "gain": magnitude one. "phase": the negative real axis.
    omega : float
        Frequency [rad/s].
    phase_margin : float or None
        At a gain crossing [degrees].
    magnitude : float or None
        At a phase crossing [1].
    """

    kind: Literal["gain", "phase"]
    omega: float
    phase_margin: float | None = None
    magnitude: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Margins:
    """How far a stable loop is from instability, in every sense.

    Attributes
    ----------
    stable : bool
        The closed loop is stable by its encirclement count. If False every margin below is
        zero (phase, delay), one (gain) or inf (sensitivity): a margin of an unstable loop is none.
    phase_margin : float
        Smallest over all gain crossings [degrees]; inf if the gain never crosses one.
    gain_margin : float
        Factor by which the gain may rise [1]; inf if it may rise for ever.
    gain_reduction_margin : float
        Factor by which the gain may be multiplied down, below one [1]; zero if it may fall to nothing.
    max_sensitivity, max_complementary : float
        Ms = max |S|, Mt = max |T| [1].
    delay_margin : float
        Extra dead time that can be borne [s]; smallest over all gain crossings, inf if none.
    gain_crossover, phase_crossover : float
        Frequencies of the phase margin and of the gain margin [rad/s]; inf if there is none.
    crossings : tuple of Crossing
        All of them, by rising frequency.
    """

    stable: bool
    phase_margin: float
    gain_margin: float
    gain_reduction_margin: float
    max_sensitivity: float
    max_complementary: float
    delay_margin: float
    gain_crossover: float
    phase_crossover: float
    crossings: tuple[Crossing, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Trajectory:
    """A simulated closed-loop response on a fine even grid.

    Attributes
    ----------
    t : (n,) ndarray
        Time after the change [s].
    pv : (n,) ndarray
        PV's deviation from its start [PV unit, or 1 for a unit step].
    co : (n,) ndarray
        CO's deviation from its start [CO unit per PV unit for a unit set-point step].
    """

    t: NDArray[np.float64]
    pv: NDArray[np.float64]
    co: NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class Prediction:
    """What a unit set-point step and a unit load step will do.

    Attributes
    ----------
    setpoint : Trajectory
        Unit step of the SP.
    load : Trajectory
        Unit step added to the CO at the process input.
    overshoot : float
        Peak above the final value [% of the set-point step; P and PD: of the final value].
    rise_time : float
        10 to 90 % of the final value [s].
    settling_time : float
        Until within 5 % of the final value for good [s].
    peak_time : float
        Time of the first peak [s]; inf when there is none.
    load_peak : float
        Largest PV deviation after a unit load step [PV unit / CO unit].
    load_integrated_error : float
        Integral of the error after a unit load step [PV unit / CO unit * s]; inf without integral action.
    co_peak : float
        Largest CO deviation after a unit set-point step [CO unit / PV unit].
    noise_gain : float
        CO standard deviation per PV-noise standard deviation, noise fast against the loop [CO unit / PV unit].
    """

    setpoint: Trajectory
    load: Trajectory
    overshoot: float
    rise_time: float
    settling_time: float
    peak_time: float
    load_peak: float
    load_integrated_error: float
    co_peak: float
    noise_gain: float
