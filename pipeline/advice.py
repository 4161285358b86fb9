"""What to do next, in the order it is done on site."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from pipeline.loop.forms import action_in_words

if TYPE_CHECKING:
    from collections.abc import Sequence

    from fitters.fit import Fit
    from pipeline.bumps import Bump
    from pipeline.intake.log import Log
    from pipeline.settings import LoopSheet
    from pipeline.tuning.types import BackedOff

#: An overshoot this far above the predicted band ends the first step [% of the step].
_OVERSHOOT_BEYOND_BAND = 10.0
#: A move should lift the PV this many noise standard deviations (common practice, 5 at least) [1].
_MOVE_OVER_NOISE = 10.0
#: Hold after a move, in sums of lags beyond the dead time (common practice: 98 % settled) [1].
_HOLD_IN_LAGS = 4.0


def after_settings(
    backed_off: BackedOff, bumps: Sequence[Bump], sheet: LoopSheet, pv_unit: str, fit: Fit
) -> tuple[str, ...]:
    """Say how the settings go in, what to expect and when to go back.

    Parameters
    ----------
    backed_off : BackedOff
    bumps : sequence of Bump
    sheet : LoopSheet
    pv_unit : str
    fit : Fit
    """
    prediction, bands = backed_off.prediction, backed_off.bands
    limit = max(bands.overshoot[2], prediction.overshoot) + _OVERSHOOT_BEYOND_BAND
    back = "the as-found settings" if sheet.as_found.proportional is not None else "manual"
    step = _usual_step(bumps, fit)
    peak = (
        f"its first peak after about {prediction.peak_time:.3g} s, "
        if np.isfinite(prediction.peak_time) and prediction.overshoot > 0.5
        else ""
    )
    return (
        "Write down the settings found in the controller before anything is changed.",
        "Enter the settings with the controller in manual, and read them back.",
        f"Check the control action. {action_in_words(backed_off.controller.action)}",
        f"Switch to automatic and make a set-point step of about {step:.2g} {pv_unit}, first one way and then "
        "the other.",
        f"Expect {peak}an overshoot of {max(bands.overshoot[0], 0.0):.0f} to {bands.overshoot[2]:.0f} % "
        f"and the PV within 5 % of its new value after about {prediction.settling_time:.3g} s.",
        f"Go back to {back} if the overshoot passes {limit:.0f} % of the step, or if the PV swings wider in "
        "two half-cycles running.",
        "Repeat the test after work on the valve, the transmitter or its range, or after a change of product "
        "or throughput.",
    )


def after_withholding(log: Log, bumps: Sequence[Bump], fit: Fit | None, co_unit: str) -> tuple[str, ...]:
    """Say how to get a test that can carry a gain.

    Parameters
    ----------
    log : Log
    bumps : sequence of Bump
    fit : Fit or None
        The best fit there is, for its size and speed.
    co_unit : str
    """
    steps = [
        "Keep the settings as found.",
        "Put right what the cause above names, then repeat the test with the site's permission: controller "
        "in manual, PV steady, one clean move of the output, nothing else touched.",
    ]
    if fit is not None and fit.model.gain != 0.0 and fit.noise_sd > 0.0:
        lags = float(sum(1.0 / abs(p) for p in fit.model.poles if abs(p) > 0.0))
        hold = fit.model.dead_time + _HOLD_IN_LAGS * lags
        if fit.model.integrators == 0 and 0.0 < hold < 100.0 * log.span:
            size = _MOVE_OVER_NOISE * fit.noise_sd / abs(fit.model.gain)
            steps.append(
                f"A move of about {size:.2g} {co_unit} held for {hold:.2g} s would lift the PV ten times above "
                "its noise, as far as this log can tell."
            )
    elif bumps:
        moved = max((abs(m.after - m.before) for b in bumps for m in b.moves), default=0.0)
        if moved > 0.0:
            steps.append(
                f"Move the output by more than the {moved:.2g} {co_unit} of this test, if there is room."
            )
    steps.append(
        "Make at least two moves up and two down, log the raw PV and the output at the controller's scan, "
        "without compression, and note every event with its time."
    )
    return tuple(steps)


def _usual_step(bumps: Sequence[Bump], fit: Fit) -> float:
    """Give a PV step of the size the test itself made [PV unit]."""
    sizes = [abs(m.after - m.before) for b in bumps if b.used for m in b.moves]
    moved = float(np.median(sizes)) if sizes else 0.0
    if fit.model.integrators == 0:
        return abs(fit.model.gain) * moved
    return 0.25 * float(np.ptp(fit.fitted))
