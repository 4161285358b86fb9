"""What the process itself, as found in the log, obliges us to say."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from pipeline.cautions.facts import process_gain, relative_width
from pipeline.findings import Caution

if TYPE_CHECKING:
    from pipeline.cautions.facts import Facts

#: Relative half-width of the gain's interval above which it restricts, and above which it withholds [1].
#: With 20 % scatter of the gain a phase margin of 60 degrees means 35 to 76 (twice that is blind).
_GAIN_CARE = 0.25
_GAIN_STOP = 0.60
#: Dead time against the sum of lags beyond which proportional action alone misleads [1].
_DEAD_TIME_DOMINANT = 1.0
#: Damping below which a process rings enough to mislead a phase margin [1].
_RINGING = 0.7
#: Log interval against the dead time above which the dead time is mostly guessed (common practice) [1].
_COARSE_LOG = 1.0


def sign_unknown(facts: Facts) -> Caution | None:
    """Stop where the gain's interval holds zero."""
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


def gain_interval(facts: Facts) -> Caution | None:
    """Restrict or stop where the gain is known poorly."""
    if facts.choice is None or sign_unknown(facts) is not None:
        return None
    gain = process_gain(facts.choice.best)
    width = relative_width(gain)
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


def search_failed(facts: Facts) -> Caution | None:
    """Stop where the search did not settle."""
    if facts.choice is None or facts.choice.best.converged:
        return None
    return Caution(
        code="fit-not-settled",
        level="stop",
        text="The search for the process parameters did not settle on an answer. No settings are given. "
        "Look at the log for disturbances and repeat the test.",
    )


def wrong_way_first(facts: Facts) -> Caution | None:
    """Name a right-half-plane zero."""
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


def runs_away(facts: Facts) -> Caution | None:
    """Stop on an unstable process seen in manual."""
    if facts.choice is None or facts.choice.best.model.unstable_poles.size == 0:
        return None
    return Caution(
        code="unstable-process",
        level="stop",
        text="The process moves away by itself. Do not bump it in manual. "
        "It needs a test taken in automatic.",
    )


def rings(facts: Facts) -> Caution | None:
    """Name a process that rings by itself."""
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


def dead_time_rules(facts: Facts) -> Caution | None:
    """Say what dead time above the lags means."""
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


def dead_time_floored(facts: Facts) -> Caution | None:
    """Say that the dead time was raised to what is believable."""
    if facts.choice is None or facts.tuning is None:
        return None
    shown, used = facts.choice.best.model.dead_time, facts.tuning.model.dead_time
    if used <= shown or facts.dead_time_floor == 0.0:
        return None
    return Caution(
        code="dead-time-floor",
        level="care",
        text=f"The log shows a dead time of {shown:.3g} s, less than it can tell. {used:.3g} s is used: with "
        f"what the smaller lags add, half a log interval ({facts.dead_time_floor:.3g} s) is the least "
        "believable delay.",
        value=shown,
        limit=used,
    )


def coarse_clock(facts: Facts) -> Caution | None:
    """Name a log too slow for its dead time."""
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


def noise_is_slow(facts: Facts) -> Caution | None:
    """Say how few rows carry news."""
    if facts.choice is None:
        return None
    fit = facts.choice.best
    rows = float(np.sum(facts.choice.data.weight[fit.used]))
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
