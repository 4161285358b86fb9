"""What the reader must be told: facts in, cautions out, one table of rules.

Each rule looks at the facts and says nothing or one caution. The general rules speak in
every report. Levels: "stop" withholds the settings, "care" restricts their use, "note" informs.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from pipeline.findings import Caution, worst_first
from pipeline.loop.forms import action_words

if TYPE_CHECKING:
    from fitters.fit import Choice, Fit, Parameter
    from pipeline.intake.log import Log
    from pipeline.settings import LoopSheet
    from pipeline.testquality import Quality
    from pipeline.tuning.types import BackedOff, Criteria, Tuning

#: Relative half-width of the gain's interval above which it restricts, and above which it withholds [1].
#: With 20 % scatter of the gain a phase margin of 60 degrees means 35 to 76 (practice: twice that is blind).
_GAIN_CARE = 0.25
_GAIN_STOP = 0.60
#: A worst plausible loop beyond these may oscillate (common practice: gain margin 2, phase margin 30, Ms 2.5).
_PHASE_MARGIN_EDGE = 30.0
_GAIN_MARGIN_EDGE = 2.0
_SENSITIVITY_EDGE = 2.5
#: Share of plausible loops lost above which no settings are given [1].
_UNSTABLE_STOP = 0.05
#: Dead time against the sum of lags beyond which proportional action alone misleads [1].
_DEAD_TIME_DOMINANT = 1.0
#: Damping below which a process rings enough to mislead a phase margin [1].
_RINGING = 0.7
#: Log interval against the dead time above which the dead time is mostly guessed (practice 1.5, check 7) [1].
_COARSE_LOG = 1.0


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
    """

    log: Log
    sheet: LoopSheet
    quality: Quality
    choice: Choice | None
    criteria: Criteria
    tuning: Tuning | None
    backed_off: BackedOff | None
    dead_time_floor: float


Rule = Callable[[Facts], Caution | None]


def cautions(facts: Facts) -> tuple[Caution, ...]:
    """Apply every rule, worst first.

    Parameters
    ----------
    facts : Facts

    Returns
    -------
    tuple of Caution
        Findings on the test, what the rules say, and the tuner's own remarks.
    """
    found = [*facts.quality.findings, *facts.log.notes]
    found += [caution for rule in _RULES if (caution := rule(facts)) is not None]
    if facts.choice is not None:
        found += [Caution(code=code, level="note", text=text) for code, text in facts.choice.best.notes]
    if facts.tuning is not None:
        found += facts.tuning.remarks
    return worst_first(found)


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
    return min([leading, *slopes], key=_relative_width)


def _relative_width(parameter: Parameter) -> float:
    if parameter.value == 0.0 or not np.isfinite(parameter.high - parameter.low):
        return np.inf
    return 0.5 * (parameter.high - parameter.low) / abs(parameter.value)


def _sign_unknown(facts: Facts) -> Caution | None:
    if facts.choice is None:
        return None
    gain = process_gain(facts.choice.best)
    if gain.low <= 0.0 <= gain.high:
        return Caution(
            code="gain-sign-unknown",
            level="stop",
            text="The log does not even tell whether the PV rises or falls with the output. "
            "No settings are given. Repeat the test with a larger move.",
        )
    return None


def _gain_interval(facts: Facts) -> Caution | None:
    if facts.choice is None or _sign_unknown(facts) is not None:
        return None
    gain = process_gain(facts.choice.best)
    width = _relative_width(gain)
    factor = f"{100 * width:.0f} %"
    if width > _GAIN_STOP:
        return Caution(
            code="gain-too-uncertain",
            level="stop",
            text=f"The test fixes the process gain only to about {factor} either way: not good enough to "
            "recommend a controller gain. Repeat with a larger move or more moves.",
            value=width,
            limit=_GAIN_STOP,
        )
    if width > _GAIN_CARE:
        return Caution(
            code="gain-uncertain",
            level="care",
            text=f"The test fixes the process gain only to about {factor} either way. "
            "Repeat with a larger or a longer move before relying on speed.",
            value=width,
            limit=_GAIN_CARE,
        )
    return None


def _search_failed(facts: Facts) -> Caution | None:
    if facts.choice is None or facts.choice.best.converged:
        return None
    return Caution(
        code="fit-not-settled",
        level="stop",
        text="The search for the process parameters did not settle on an answer. No settings are given. "
        "Look at the log for disturbances and repeat the test.",
    )


def _action_differs(facts: Facts) -> Caution | None:
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


def _wrong_way_first(facts: Facts) -> Caution | None:
    if facts.choice is None or facts.choice.best.model.inverse_zeros.size == 0:
        return None
    zero = float(np.min(np.abs(facts.choice.best.model.inverse_zeros)))
    return Caution(
        code="inverse-response",
        level="care",
        text="The PV first moves the wrong way (a right-half-plane zero). Speed is limited, and more gain "
        f"makes it worse: keep the gain crossover below about {zero / 2:.3g} rad/s. The phase margin alone "
        "misleads here: judge by the maximum sensitivity and the simulated step.",
        value=zero,
    )


def _runs_away(facts: Facts) -> Caution | None:
    if facts.choice is None or facts.choice.best.model.unstable_poles.size == 0:
        return None
    return Caution(
        code="unstable-process",
        level="stop",
        text="The process moves away by itself. Do not bump it in manual. "
        "It needs a test taken in automatic.",
    )


def _rings(facts: Facts) -> Caution | None:
    if facts.choice is None:
        return None
    poles = facts.choice.best.model.poles
    poles = poles[np.abs(poles) > 0.0]
    if poles.size == 0:
        return None
    damping = float(np.min(-poles.real / np.abs(poles)))
    if damping >= _RINGING:
        return None
    speed = float(np.abs(poles[np.argmin(-poles.real / np.abs(poles))]))
    return Caution(
        code="process-rings",
        level="care",
        text=f"The process itself rings at {speed:.3g} rad/s (damping {damping:.2g}). The phase margin is a "
        "poor guide: it can jump for a tiny change of gain. Judge by gain margin and maximum sensitivity, "
        "and make sure the log was not taken with another loop in automatic.",
        value=damping,
        limit=_RINGING,
    )


def _no_integral_action(facts: Facts) -> Caution | None:
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


def _dead_time_rules(facts: Facts) -> Caution | None:
    if facts.choice is None:
        return None
    model = facts.choice.best.model
    lags = [1.0 / abs(p) for p in model.poles if abs(p) > 0.0]
    if model.integrators or model.dead_time <= _DEAD_TIME_DOMINANT * sum(lags):
        return None
    return Caution(
        code="dead-time-dominant",
        level="note",
        text="Dead time outweighs the lags. Proportional action alone is worthless here and derivative "
        "action does harm; integral action does the work.",
        value=model.dead_time,
        limit=_DEAD_TIME_DOMINANT * sum(lags),
    )


def _dead_time_floored(facts: Facts) -> Caution | None:
    if facts.choice is None or facts.choice.best.model.dead_time >= facts.dead_time_floor:
        return None
    return Caution(
        code="dead-time-floor",
        level="care",
        text=f"The log shows a dead time of {facts.choice.best.model.dead_time:.3g} s, less than it can tell. "
        f"{facts.dead_time_floor:.3g} s is used as the least believable value: half a log interval, and "
        "what the controller adds by itself.",
        value=facts.choice.best.model.dead_time,
        limit=facts.dead_time_floor,
    )


def _coarse_clock(facts: Facts) -> Caution | None:
    if facts.choice is None:
        return None
    dead_time, interval = facts.choice.best.model.dead_time, facts.log.interval
    if interval <= _COARSE_LOG * dead_time or dead_time == 0.0:
        return None
    return Caution(
        code="log-interval-long",
        level="care",
        text=f"The log interval ({interval:.3g} s) is longer than the dead time it is to show "
        f"({dead_time:.3g} s). Log faster and repeat if the loop is to be quick.",
        value=interval,
        limit=_COARSE_LOG * dead_time,
    )


def _lag_or_integrator(facts: Facts) -> Caution | None:
    if facts.choice is None:
        return None
    fit = facts.choice.best
    lags = [p for p in fit.parameters if p.name in ("lag", "longer_lag")]
    if fit.model.integrators or not lags or lags[0].value < facts.log.span:
        return None
    return Caution(
        code="not-settled",
        level="care",
        text="The PV had not levelled out: its first slope is known, its final gain is not. "
        "Tight control can rest on this test; slow control cannot.",
        value=lags[0].value,
        limit=facts.log.span,
    )


def _noise_is_slow(facts: Facts) -> Caution | None:
    if facts.choice is None:
        return None
    fit = facts.choice.best
    rows = float(np.count_nonzero(fit.used))
    if fit.effective_samples > 0.5 * rows:
        return None
    return Caution(
        code="noise-correlated",
        level="note",
        text=f"What is left over is slow: about 1 row in {rows / max(fit.effective_samples, 1.0):.0f} carries "
        "new information. The intervals allow for it.",
        value=fit.effective_samples,
        limit=0.5 * rows,
    )


def _edge_of_uncertainty(facts: Facts) -> Caution | None:
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


def _lower_limit(facts: Facts) -> Caution | None:
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


def _rolling(facts: Facts) -> Caution | None:
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


def _criteria_not_met(facts: Facts) -> Caution | None:
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


def _motion(facts: Facts) -> Caution | None:
    if facts.sheet.loop.duty not in ("speed", "position"):
        return None
    return Caution(
        code="motion",
        level="care",
        text="Keep people clear. Test with torque, speed and travel limits set, guards closed and the "
        "emergency stop proven. First run at reduced limits. Vertical or stored-energy axes can move when "
        "disabled.",
    )


def _scan_counted(facts: Facts) -> Caution | None:
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


def _check_action(facts: Facts) -> Caution | None:
    if facts.tuning is None:
        return None
    words = action_words(facts.tuning.controller.action)
    return Caution(
        code="check-action",
        level="care",
        text=f"Check the control action before switching to automatic. {words}.",
    )


def _clock_is_trusted(facts: Facts) -> Caution | None:
    if facts.choice is None:
        return None
    return Caution(
        code="clock-trusted",
        level="note",
        text="Dead time rests on the clock of the export and on knowing every filter. If output and "
        "measurement were stamped by different clocks, the dead time is wrong by that difference.",
    )


def _only_a_start(facts: Facts) -> Caution | None:
    if facts.tuning is None:
        return None
    return Caution(
        code="starting-setting",
        level="note",
        text="This is a starting setting from small tests around one operating point. It is not proof of "
        "stability at other loads, other products or with worn equipment.",
    )


def _linear_prediction(facts: Facts) -> Caution | None:
    if facts.tuning is None:
        return None
    return Caution(
        code="linear-prediction",
        level="note",
        text="Predictions are for a linear model without limits, sticking or noise. Real overshoot is larger "
        "after saturation, and a sticking final element can cycle for ever.",
    )


def _units_matter(facts: Facts) -> Caution | None:
    if facts.tuning is None:
        return None
    return Caution(
        code="equation-and-units",
        level="care",
        text="The settings hold for the equation and units printed beside them. Entered in another form or "
        "unit they change the loop by large factors.",
    )


def _safety_outside(facts: Facts) -> Caution | None:
    del facts
    return Caution(
        code="safety-not-assessed",
        level="care",
        text="Safety functions are outside this report: not changed, not bypassed, not credited. Do not use "
        "this loop to protect against a hazard. Local codes and licensed practice go before this report.",
    )


def _permit(facts: Facts) -> Caution | None:
    del facts
    return Caution(
        code="permit-and-change",
        level="care",
        text="Test and change settings only under the site's permit and change rules, with the area operator "
        "informed and the as-found settings at hand.",
    )


def _not_assessed(facts: Facts) -> Caution | None:
    del facts
    return Caution(
        code="not-assessed",
        level="note",
        text="Not assessed: interaction with other loops, wear, control while a limit is active, start-up and "
        "shut-down, and who may change settings over the network.",
    )


#: The order is the order of reading within one level.
_RULES: tuple[Rule, ...] = (
    _sign_unknown,
    _runs_away,
    _search_failed,
    _gain_interval,
    _action_differs,
    _edge_of_uncertainty,
    _check_action,
    _wrong_way_first,
    _rings,
    _no_integral_action,
    _lower_limit,
    _criteria_not_met,
    _dead_time_floored,
    _coarse_clock,
    _lag_or_integrator,
    _motion,
    _units_matter,
    _permit,
    _safety_outside,
    _dead_time_rules,
    _noise_is_slow,
    _rolling,
    _scan_counted,
    _clock_is_trusted,
    _only_a_start,
    _linear_prediction,
    _not_assessed,
)
