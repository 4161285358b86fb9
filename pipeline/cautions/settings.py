"""What the settings, and the uncertainty they rest on, oblige us to say."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from pipeline.findings import Caution

if TYPE_CHECKING:
    from pipeline.cautions.facts import Facts

#: A worst plausible loop beyond these may oscillate (common practice: gain margin 2, phase margin 30, Ms 2.5).
_PHASE_MARGIN_EDGE = 30.0
_GAIN_MARGIN_EDGE = 2.0
_SENSITIVITY_EDGE = 2.5
#: Share of plausible loops lost above which no settings are given [1].
_UNSTABLE_STOP = 0.05
#: An output moved by more than this share of its range at once meets its limits (common practice) [1].
_KICK = 0.5
#: An output shaken by more than this share of its range wears its final element (common practice: 1 to 2 %) [1].
_SHAKE = 0.015


def action_differs(facts: Facts) -> Caution | None:
    """Stop where the sheet's action would run away."""
    declared = facts.sheet.controller.action
    if facts.tuning is None or declared is None or declared == facts.tuning.controller.action:
        return None
    return Caution(
        code="action-differs",
        level="stop",
        text=f"The loop sheet says {declared} action, but in this log the PV moves so that it takes "
        f"{facts.tuning.controller.action} action. With {declared} action the loop would run away. "
        "Find out which is right before anything is entered.",
    )


def no_integral_action(facts: Facts) -> Caution | None:
    """Name a loop without integral action."""
    if facts.tuning is None or facts.choice is None:
        return None
    integrates = facts.choice.best.model.integrators > 0
    if facts.tuning.controller.kind not in ("P", "PD") or integrates:
        return None
    return Caution(
        code="no-integral-action",
        level="care",
        text="Neither the process nor this controller holds integral action. The PV settles off the set "
        "point, and a phase margin near 60 degrees does not mean a small overshoot here: judge by gain "
        "margin and maximum sensitivity.",
    )


def edge_of_uncertainty(facts: Facts) -> Caution | None:
    """Say what the worst plausible process would do."""
    if facts.backed_off is None:
        return None
    bands = facts.backed_off.bands
    if bands.unstable_share > _UNSTABLE_STOP:
        return Caution(
            code="may-be-unstable",
            level="stop",
            text=f"{100 * bands.unstable_share:.0f} % of the processes this log allows would be unstable with "
            "these settings. No settings are given. Repeat with a larger move or more moves.",
            value=bands.unstable_share,
            limit=_UNSTABLE_STOP,
        )
    weak = (
        bands.phase_margin[0] < _PHASE_MARGIN_EDGE
        or bands.gain_margin[0] < _GAIN_MARGIN_EDGE
        or bands.max_sensitivity[2] > _SENSITIVITY_EDGE
    )
    if not weak:
        return None
    return Caution(
        code="may-oscillate",
        level="care",
        text="Within the uncertainty of this test the loop may oscillate (phase margin down to "
        f"{bands.phase_margin[0]:.0f} degrees, gain margin down to {bands.gain_margin[0]:.1f}). "
        "Start with half the gain and go to the full gain once the first step matches the prediction.",
        value=bands.phase_margin[0],
        limit=_PHASE_MARGIN_EDGE,
    )


def lower_limit(facts: Facts) -> Caution | None:
    """Name a lower gain limit."""
    if facts.backed_off is None or facts.backed_off.margins.gain_reduction_margin <= 0.0:
        return None
    factor = facts.backed_off.margins.gain_reduction_margin
    return Caution(
        code="lower-gain-limit",
        level="care",
        text=f"Less gain can lose this loop too: below {factor:.2g} times this gain it is unstable. "
        "Do not turn the gain down to calm it without a longer integral time as well.",
        value=factor,
    )


def rolling(facts: Facts) -> Caution | None:
    """Say what cures slow rolling."""
    if facts.tuning is None or facts.choice is None or facts.choice.best.model.integrators == 0:
        return None
    if facts.tuning.controller.kind not in ("PI", "PID"):
        return None
    return Caution(
        code="integrating-with-integral",
        level="note",
        text="On this integrating process slow rolling at a low gain is cured by a longer integral time or "
        "more gain, not by less gain.",
    )


def criteria_not_met(facts: Facts) -> Caution | None:
    """Say that not every criterion is met."""
    if facts.tuning is None or facts.tuning.reached:
        return None
    if any(remark.level != "note" for remark in facts.tuning.remarks):
        return None
    return Caution(
        code="criteria-not-reached",
        level="care",
        text="Not every criterion can be met on this process by this controller; the settings are the best "
        "reachable. See the margins reached.",
    )


def scan_counted(facts: Facts) -> Caution | None:
    """Say what scan and filter cost."""
    if facts.backed_off is None:
        return None
    controller = facts.backed_off.controller
    delay = 0.5 * controller.scan + controller.compute_delay + controller.pv_filter
    if delay == 0.0:
        return Caution(
            code="scan-and-filter-unknown",
            level="note",
            text="No scan and no PV filter are declared for the controller; none is in these margins. A filter "
            "in the transmitter or the controller that is not in the log lowers the phase margin by its "
            "time constant times the gain crossover.",
        )
    cost = float(np.degrees(delay * facts.backed_off.margins.gain_crossover))
    if not np.isfinite(cost):
        return None
    return Caution(
        code="scan-and-filter-counted",
        level="note",
        text=f"The margins include the controller's scan, compute delay and PV filter: together about "
        f"{cost:.1f} degrees of phase margin.",
        value=cost,
    )


def output_kick(facts: Facts) -> Caution | None:
    """Say that a step as large as the test's would drive the output to its limits."""
    span = facts.sheet.co.span_in(facts.log.co_column.unit)
    if facts.backed_off is None or facts.choice is None or span is None:
        return None
    step = float(np.ptp(facts.choice.best.fitted))
    kick = facts.backed_off.prediction.co_peak * step / span
    if kick <= _KICK:
        return None
    return Caution(
        code="output-kick",
        level="care",
        text=f"A set-point step as large as the PV moved in this test would kick the output by {100 * kick:.0f} % "
        "of its range: it will saturate, and the real overshoot will differ. Take smaller steps, or ramp the "
        "set point.",
        value=kick,
        limit=_KICK,
    )


def noisy_output(facts: Facts) -> Caution | None:
    """Say that the PV's noise would shake the final element."""
    span = facts.sheet.co.span_in(facts.log.co_column.unit)
    if facts.backed_off is None or facts.choice is None or span is None:
        return None
    shake = facts.backed_off.prediction.noise_gain * facts.choice.best.noise_sd / span
    if shake <= _SHAKE:
        return None
    return Caution(
        code="noisy-output",
        level="care",
        text=f"The PV's noise would shake the output by about {100 * shake:.1f} % of its range (one standard "
        "deviation). Use a lower gain, or a PV filter of no more than a fifth of the dead time.",
        value=shake,
        limit=_SHAKE,
    )
