"""Two computations of one answer, compared: frequency response against simulation."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from pipeline.errors import ChecksDisagree
from pipeline.loop.controller import extra_dead_time, feedback_path, product, setpoint_path, sign
from pipeline.loop.metrics import final_value
from pipeline.loop.simulate import stable_in_time

if TYPE_CHECKING:
    from fitters.process import ProcessModel
    from pipeline.loop.types import Controller, Margins, Prediction

#: A loop this close to its limit may be called either way [1]: the simulation's grid error in gain.
_MARGINAL = 1.005
#: Simulation and final-value theorem may differ by this at the horizon [share of the step].
_FINAL = 0.01
#: Two computations of one crossing may differ by this [1] and [degrees]: rounding, no more.
_SAME_SIZE = 1e-6
_SAME_ANGLE = 1e-4
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
    if not margins.stable:
        return
    _second_opinion(model, controller, margins)
    if not np.isfinite(prediction.settling_time):
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


def _second_opinion(model: ProcessModel, controller: Controller, margins: Margins) -> None:
    """Build the loop once more with python-control and read the phase margin off it.

    The controller is put together from its equation term by term, not from the polynomials
    the margins came from; the dead time stays exact.
    """
    omega = margins.gain_crossover
    if not np.isfinite(omega):
        return
    import control  # heavy, and wanted only where settings are given

    s = control.TransferFunction([1.0, 0.0], [1.0])
    terms = control.TransferFunction([0.0 if controller.kind == "I" else 1.0], [1.0])
    if np.isfinite(controller.integral_time):
        terms += 1.0 / (controller.integral_time * s)
    if controller.derivative_time > 0.0:
        terms += controller.derivative_time * s / (1.0 + controller.derivative_filter * s)
    loop = model.to_control() * (sign(controller.action) * controller.gain * terms)
    loop *= control.TransferFunction([1.0], [controller.pv_filter, 1.0])
    late = model.dead_time + extra_dead_time(controller)
    response = complex(loop(1j * omega)) * np.exp(-1j * omega * late)
    margin = float(np.degrees(np.angle(-response)))
    if abs(abs(response) - 1.0) > _SAME_SIZE or abs(abs(margin) - abs(margins.phase_margin)) > _SAME_ANGLE:
        raise ChecksDisagree(
            f"A second computation of the loop gives a phase margin of {margin:.2f} degrees instead of "
            f"{margins.phase_margin:.2f}.",
            remedy="No settings are given; please report this with the log.",
        )
