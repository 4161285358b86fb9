"""Values of the tuning: what was asked, what came out."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from fitters.process import ProcessModel
    from pipeline.findings import Caution
    from pipeline.loop.forms import Entered
    from pipeline.loop.types import Controller, Margins, Prediction


@dataclass(frozen=True, slots=True, kw_only=True)
class Criteria:
    """What the settings must keep; None switches a criterion off.

    Attributes
    ----------
    phase_margin : float or None
        At least this [degrees].
    gain_margin : float or None
        At least this, upwards, and at least its inverse downwards where the loop has a lower limit [1].
    max_sensitivity : float or None
        At most this [1].
    max_complementary : float or None
        At most this, above one [1].
    closed_loop_time : float or None
        Closed-loop time constant at least this [s].
    crossover : float or None
        Gain crossover at most this [rad/s]: how far up the log knows the process.
    overshoot : float or None
        At most this on a set-point step [%].
    noise_gain : float or None
        CO's standard deviation over the PV noise's at most this [CO unit / PV unit].
    co_peak : float or None
        CO's largest move after a unit set-point step at most this [CO unit / PV unit].
    percentile : float
        Share of the plausible models below which the phase margin may fall short of
        `percentile_phase_margin` [%].
    percentile_phase_margin : float or None
        Phase margin to hold at that percentile [degrees].
    """

    phase_margin: float | None = 60.0
    gain_margin: float | None = 2.5
    max_sensitivity: float | None = 1.8
    max_complementary: float | None = None
    closed_loop_time: float | None = None
    crossover: float | None = None
    overshoot: float | None = 10.0
    noise_gain: float | None = None
    co_peak: float | None = None
    percentile: float = 5.0
    percentile_phase_margin: float | None = 45.0


#: Nothing asked: all that is left is stability.
NO_CRITERIA = Criteria(
    phase_margin=None, gain_margin=None, max_sensitivity=None, overshoot=None, percentile_phase_margin=None
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Tuning:
    """Settings on the nominal model and what decided them.

    Attributes
    ----------
    model : ProcessModel
        The nominal model as tuned on, its dead time raised to the floor.
    controller : Controller
        Before any back-off for uncertainty.
    margins : Margins
    prediction : Prediction
    binding : str
        Criterion that set the gain, by its name in `Criteria`.
    reached : bool
        False when some criterion cannot be met at any gain; the settings then are the best reachable.
    remarks : tuple of Caution
        What the reader must know about how these settings came about.
    """

    model: ProcessModel
    controller: Controller
    margins: Margins
    prediction: Prediction
    binding: str
    reached: bool
    remarks: tuple[Caution, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Bands:
    """The same controller on every plausible model: 5th, 50th and 95th percentiles.

    Attributes
    ----------
    phase_margin, gain_margin, max_sensitivity, overshoot : tuple of 3 float
        [degrees, 1, 1, %]; an unstable model counts as margin 0, GM 1, Ms inf, overshoot inf.
    unstable_share : float
        Share of plausible models the controller would lose [1].
    t : (n,) ndarray
        Grid of the step band [s].
    low, high : (n,) ndarray
        5th and 95th percentile of the unit set-point response [1].
    """

    phase_margin: tuple[float, float, float]
    gain_margin: tuple[float, float, float]
    max_sensitivity: tuple[float, float, float]
    overshoot: tuple[float, float, float]
    unstable_share: float
    t: NDArray[np.float64]
    low: NDArray[np.float64]
    high: NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class BackedOff:
    """Settings after the back-off for uncertainty, as they can be entered.

    Attributes
    ----------
    controller : Controller
        With the rounded numbers; margins, prediction and bands are of these.
    entered : Entered
        The rounded numbers in the controller's own units.
    margins : Margins
    prediction : Prediction
    bands : Bands
    factor : float
        Factor applied to the gain, at most one [1].
    held : bool
        False when no factor holds the percentile phase margin; the factor then comes nearest.
    remarks : tuple of Caution
        What the reader must know about the back-off.
    """

    controller: Controller
    entered: Entered
    margins: Margins
    prediction: Prediction
    bands: Bands
    factor: float
    held: bool
    remarks: tuple[Caution, ...]
