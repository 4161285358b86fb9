"""What the rules may look at."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from fitters.fit import Choice, Fit, Parameter
    from pipeline.intake.log import Log
    from pipeline.settings import LoopSheet
    from pipeline.testquality import Quality
    from pipeline.tuning.standing import Standing
    from pipeline.tuning.types import BackedOff, Criteria, Tuning


@dataclass(frozen=True, slots=True, kw_only=True)
class Facts:
    """All that the rules may look at; None where the job has not come that far.

    Attributes
    ----------
    log : Log
    sheet : LoopSheet
    quality : Quality
    choice : Choice or None
    criteria : Criteria
    tuning : Tuning or None
    backed_off : BackedOff or None
    dead_time_floor : float
        Dead time assumed at least [s].
    structure_gains : dict of str to float
        Controller gain that each believable structure leads to before any back-off.
    standing : Standing or None
    """

    log: Log
    sheet: LoopSheet
    quality: Quality
    choice: Choice | None
    criteria: Criteria
    tuning: Tuning | None
    backed_off: BackedOff | None
    dead_time_floor: float
    structure_gains: dict[str, float]
    standing: Standing | None = None


def process_gain(fit: Fit) -> Parameter:
    """Give the number the controller gain rests on, and its interval.

    For a process that settles only slowly against the test this is its first slope, not
    its final gain: the one with the narrower relative interval.

    Parameters
    ----------
    fit : Fit
    """
    leading = fit.parameters[0]
    slopes = [p for p in fit.parameters if p.name == "initial_slope"]
    return min([leading, *slopes], key=relative_width)


def relative_width(parameter: Parameter) -> float:
    """Give half the interval over the value, infinite where there is no bound [1].

    Parameters
    ----------
    parameter : Parameter
    """
    if parameter.value == 0.0 or not np.isfinite(parameter.high - parameter.low):
        return np.inf
    return 0.5 * (parameter.high - parameter.low) / abs(parameter.value)
