"""What the reader must know about how the settings came about."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from pipeline.findings import Caution
from pipeline.loop.simulate import overshoot, predict

if TYPE_CHECKING:
    from fitters.process import ProcessModel
    from pipeline.loop.types import Controller, Margins
    from pipeline.tuning.types import Criteria

#: Said where a PID is better off as a PI.
NO_DERIVATIVE = Caution(
    code="no-derivative",
    level="note",
    text="Derivative action brings nothing here under these criteria, so its time is zero.",
)


def no_gain_limit(assumed: float) -> Caution:
    """Say that nothing limits the gain on this model.

    Parameters
    ----------
    assumed : float
        Dead time taken in its place [s].
    """
    return Caution(
        code="no-gain-limit",
        level="stop",
        value=0.0,
        limit=assumed,
        text=f"On this model no criterion ever limits the gain, which no real loop allows. The settings "
        f"assume a dead time of {assumed:.3g} s; give the scan, the filter or a dead time to count on.",
    )


def no_stabilising_gain(model: ProcessModel, kind: str) -> Caution:
    """Say that no gain of this kind of controller closes a stable loop, and why.

    Parameters
    ----------
    model : ProcessModel
    kind : str

    References
    ----------
    Silva, Datta and Bhattacharyya (2002), IEEE Trans. Automatic Control 47, 241-252: a lag
    that runs away needs a dead time below its time constant, with derivative action below twice it.
    """
    runaway = float(np.max(model.unstable_poles.real, initial=0.0))
    if runaway > 0.0 and model.inverse_zeros.size:
        why = "The process runs away by itself and first moves the wrong way, too slowly for its runaway."
    elif runaway > 0.0:
        why = (
            f"The process runs away with a time constant of {1.0 / runaway:.3g} s at a dead time of "
            f"{model.dead_time:.3g} s: the dead time must be shorter than that time constant, with derivative "
            "action shorter than twice it."
        )
    elif model.integrators >= 2 and kind in ("P", "I", "PI"):
        why = "A process that integrates twice needs derivative action."
    elif kind == "I" and model.integrators:
        why = "A process that integrates needs proportional action."
    else:
        why = "Choose another kind."
    return Caution(
        code="no-stabilising-gain",
        level="stop",
        value=model.dead_time,
        limit=1.0 / runaway if runaway > 0.0 else None,
        text=f"No gain of a {kind} controller makes this loop stable. {why}",
    )


def unreached(criteria: Criteria, reached: Margins, cures: Sequence[str]) -> Caution:
    """Say what was reached where no settings keep every criterion, and what would.

    Parameters
    ----------
    criteria : Criteria
    reached : Margins
    cures : sequence of str
        What would reach the criteria.
    """
    cure = (
        f"What would reach them: {', or '.join(cures)}." if cures else "Only lower targets would be reached."
    )
    return Caution(
        code="target-not-reached",
        level="care",
        value=reached.phase_margin,
        limit=criteria.phase_margin,
        text=f"No settings of this controller keep every criterion. The best found reach a phase margin of "
        f"{reached.phase_margin:.1f} degrees, gain margin {reached.gain_margin:.2f}, "
        f"Ms {reached.max_sensitivity:.2f}. {cure}",
    )


def simulated_above(model: ProcessModel, controller: Controller, criteria: Criteria, by: str) -> Caution:
    """Say that no gain within the margins keeps the overshoot, or the output's peak.

    Parameters
    ----------
    model : ProcessModel
    controller : Controller
    criteria : Criteria
    by : {"overshoot", "co_peak"}
        The criterion not kept.
    """
    if by == "co_peak":
        peak = predict(model, controller).co_peak
        return Caution(
            code="co-peak-not-reached",
            level="care",
            value=peak,
            limit=criteria.co_peak,
            text=f"No gain within the margins keeps the output's move at {criteria.co_peak:.3g} for each PV unit "
            f"of a set-point step; here it is {peak:.3g}. A lower set-point weight would lower it.",
        )
    value = overshoot(model, controller)
    softer = overshoot(model, replace(controller, setpoint_weight=0.0))
    cure = (
        f" With set-point weight 0 it is {softer:.1f} %."
        if np.isfinite(softer) and softer < value and controller.kind in ("PI", "PID")
        else " Integral action would remove the offset it is measured from."
        if controller.kind in ("P", "PD")
        else ""
    )
    return Caution(
        code="overshoot-not-reached",
        level="care",
        value=value,
        limit=criteria.overshoot,
        text=f"No gain within the margins keeps the overshoot at {criteria.overshoot:.3g} %; here it is "
        f"{value:.1f} %.{cure}",
    )


def lower_end(low: float, by: int, gain: float) -> Caution:
    """Name the lower end of the gains that keep the criteria.

    Parameters
    ----------
    low : float
        Lower end [CO unit / PV unit].
    by : int
        Criterion that sets it; 0 is the phase margin.
    gain : float
        The gain given.
    """
    if by == 0:
        return Caution(
            code="two-gains",
            level="note",
            value=low,
            limit=gain,
            text=f"A gain of {low:.4g} has the same phase margin as the upper end of this range but rolls; "
            "the fast branch is given. Turning the gain down does not make this loop safer.",
        )
    return Caution(
        code="lower-end-of-criteria",
        level="note",
        value=low,
        limit=gain,
        text=f"Below a gain of {low:.4g} this loop no longer keeps its criteria: it needs its gain.",
    )
