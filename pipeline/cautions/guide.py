"""What the margins are worth on this loop, and what the process forbids."""

from __future__ import annotations

from typing import TYPE_CHECKING

from pipeline.findings import Caution

if TYPE_CHECKING:
    from pipeline.cautions.facts import Facts

#: A setting changed by more than this when it was rounded to what can be entered is said [1].
_COARSE_STEP = 0.05


def phase_margin_misleads(facts: Facts) -> Caution | None:
    """Say that 60 degrees does not mean 10 % of overshoot here, and what to steer by."""
    if facts.standing is None or facts.standing.guide.holds:
        return None
    guide = facts.standing.guide
    return Caution(
        code="phase-margin-misleads",
        level="care",
        text=f"On this loop a phase margin of 60 degrees does not mean an overshoot near 10 %. {guide.why} "
        f"{guide.steer_by}",
    )


def faster_than_process(facts: Facts) -> Caution | None:
    """Say that the loop is to be faster than dead time or inverse response let any loop be."""
    if facts.standing is None or facts.backed_off is None:
        return None
    limits, crossover = facts.standing.limits, facts.backed_off.margins.gain_crossover
    if not limits.crossover_most < crossover < float("inf"):
        return None
    return Caution(
        code="faster-than-process",
        level="care",
        text=f"The {limits.crossover_most_by} of this process keeps every loop around it below about "
        f"{limits.crossover_most:.2g} rad/s; these settings cross over at {crossover:.2g} rad/s. Little is "
        "gained by it and much robustness lost: ask for a higher gain margin.",
        value=crossover,
        limit=limits.crossover_most,
    )


def asked_faster_than_dead_time(facts: Facts) -> Caution | None:
    """Say that the closed-loop time constant asked for is shorter than the dead time."""
    asked = facts.criteria.closed_loop_time
    if asked is None or facts.standing is None or asked >= facts.standing.limits.dead_time:
        return None
    late = facts.standing.limits.dead_time
    return Caution(
        code="asked-faster-than-dead-time",
        level="care",
        text=f"A closed-loop time constant of {asked:.3g} s is asked for, the dead time is {late:.3g} s. The "
        "margins decide, not this wish; ask for no less than the dead time.",
        value=asked,
        limit=late,
    )


def entry_step_coarse(facts: Facts) -> Caution | None:
    """Say that the controller's own steps are too coarse for these settings."""
    if facts.backed_off is None or facts.tuning is None:
        return None
    wanted = facts.tuning.controller.gain * facts.backed_off.factor
    change = abs(facts.backed_off.controller.gain / wanted - 1.0)
    if change <= _COARSE_STEP:
        return None
    return Caution(
        code="entry-step-coarse",
        level="care",
        text=f"The gain can only be entered in steps so coarse that it changed by {100 * change:.0f} %. The "
        "margins shown are those of the rounded gain.",
        value=change,
        limit=_COARSE_STEP,
    )
