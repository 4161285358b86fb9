"""What the reader must know about how the settings came about."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from pipeline.findings import Caution
from pipeline.loop.simulate import overshoot

if TYPE_CHECKING:
    from fitters.process import ProcessModel
    from pipeline.loop.types import Controller
    from pipeline.tuning.types import Criteria

#: Said where a PID is better off as a PI.
NO_DERIVATIVE = Caution(
    code="no-derivative",
    level="note",
    text="Derivative action brings nothing here under these criteria, so its time is zero.",
)


def unreached(model: ProcessModel, kind: str, criteria: Criteria, pm: float, gm: float, ms: float) -> Caution:
    """Say what was reached where no settings keep every criterion, and what would.

    Parameters
    ----------
    model : ProcessModel
    kind : str
        Kind of controller.
    criteria : Criteria
    pm, gm, ms : float
        Margins reached [degrees, 1, 1].
    """
    if model.unstable_poles.size:
        cure = "The process runs away by itself: less dead time, or derivative action, would raise it."
    elif model.integrators >= 2 and kind in ("P", "I", "PI"):
        cure = "A process that integrates twice needs derivative action."
    elif kind == "I" and model.integrators:
        cure = "A process that integrates needs proportional action."
    else:
        cure = "Less dead time, another kind of controller, or a lower target would reach it."
    asked = criteria.phase_margin
    return Caution(
        code="target-not-reached",
        level="care",
        value=pm,
        limit=asked,
        text=f"No settings of this controller keep every criterion. The best found reach a phase margin of "
        f"{pm:.1f} degrees, gain margin {gm:.2f}, Ms {ms:.2f}. {cure}",
    )


def overshoot_above(model: ProcessModel, controller: Controller, limit: float) -> Caution:
    """Say that no gain within the margins keeps the overshoot.

    Parameters
    ----------
    model : ProcessModel
    controller : Controller
    limit : float
        [%].
    """
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
        limit=limit,
        text=f"No gain within the margins keeps the overshoot at {limit:.3g} %; here it is {value:.1f} %.{cure}",
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
