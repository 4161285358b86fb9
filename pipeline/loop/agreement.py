"""Two computations of one answer, compared: frequency response against simulation."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from pipeline.errors import ChecksDisagree
from pipeline.loop.controller import feedback_path, product, setpoint_path
from pipeline.loop.metrics import final_value
from pipeline.loop.simulate import stable_in_time

if TYPE_CHECKING:
    from fitters.process import ProcessModel
    from pipeline.loop.types import Controller, Margins, Prediction

#: A loop this close to its limit may be called either way [1]: the simulation's grid error in gain.
_MARGINAL = 1.005
#: Simulation and final-value theorem may differ by this at the horizon [share of the step].
_FINAL = 0.01
#: Where a slow tail is looked at before its end [share of the horizon], and how much of it may be left.
_BEFORE = 0.5
_DYING = 0.8


def check_agreement(
    model: ProcessModel, controller: Controller, margins: Margins, prediction: Prediction
) -> None:
    """Compare what the frequency domain and the time domain say about one loop.

    Parameters
    ----------
    model : ProcessModel
    controller : Controller
    margins : Margins
        From `pipeline.loop.margins.margins`.
    prediction : Prediction
        From `pipeline.loop.simulate.predict`.

    Raises
    ------
    ChecksDisagree
        If the encirclement count and the simulation differ about stability, or a settled
        simulation does not end where the loop's static gain says.
    """
    in_time = stable_in_time(model, controller)
    near = margins.stable and (
        margins.gain_margin < _MARGINAL or margins.gain_reduction_margin > 1.0 / _MARGINAL
    )
    if in_time != margins.stable and not near:
        says = {True: "stable", False: "unstable"}
        raise ChecksDisagree(
            f"The frequency response calls the loop {says[margins.stable]}, the simulation {says[in_time]}.",
            remedy="No settings are given; please report this with the log.",
        )
    if not margins.stable or not np.isfinite(prediction.settling_time):
        return
    sp, fb = setpoint_path(controller), feedback_path(controller)
    to_sp = product(sp[0], model.numerator), product(sp[1], model.denominator)
    loop = product(fb[0], model.numerator), product(fb[1], model.denominator)
    expected = final_value(to_sp, loop)
    pv = prediction.setpoint.pv
    reached = float(pv[-1])
    away = abs(reached - expected)
    before = float(np.max(np.abs(pv[int(_BEFORE * pv.size) : int(_BEFORE * pv.size) + 1] - expected)))
    # A slow tail may not have died out by the end: then it must at least be dying.
    if away > _FINAL * max(abs(expected), 1.0) and away > _DYING * before:
        raise ChecksDisagree(
            f"The simulated PV ends at {reached:.4g} of the set-point step, the static gain says {expected:.4g}.",
            remedy="No settings are given; please report this with the log.",
        )
