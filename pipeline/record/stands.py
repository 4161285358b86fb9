"""Where the settings stand, put into the record's words."""

from __future__ import annotations

from typing import TYPE_CHECKING

from pipeline.record.curves import thin_trajectory
from pipeline.record.parts import shown_gain
from pipeline.record.standing import (
    AllowedInfo,
    GuidePoint,
    LimitedInfo,
    LimitsInfo,
    MarginGuide,
    RuleInfo,
    Standing,
    WhatIfInfo,
)

if TYPE_CHECKING:
    from pipeline.loop.forms import Entry
    from pipeline.loop.limited import LimitedStep
    from pipeline.loop.limits import ProcessLimits
    from pipeline.tuning import guide, standing
    from pipeline.tuning.compare import RuleResult


def guide_info(found: guide.MarginGuide, entry: Entry) -> MarginGuide:
    """Give the margin guide, its gains in the controller's gain unit.

    Parameters
    ----------
    found : pipeline.tuning.guide.MarginGuide
    entry : Entry
    """
    return MarginGuide(
        holds=found.holds,
        why=found.why,
        steer_by=found.steer_by,
        phase_margin_for_overshoot_deg=found.phase_margin_for_overshoot,
        curve=tuple(
            GuidePoint(
                phase_margin_deg=p.phase_margin,
                gain=shown_gain(p.gain, entry),
                overshoot_pct=p.overshoot,
                gain_margin=p.gain_margin,
                max_sensitivity=p.max_sensitivity,
                settling_s=p.settling_time,
            )
            for p in found.curve
        ),
    )


def standing_info(found: standing.Standing, limited: LimitedStep | None, entry: Entry) -> Standing:
    """Give where the settings stand.

    Parameters
    ----------
    found : pipeline.tuning.standing.Standing
    limited : LimitedStep or None
    entry : Entry
    """
    return Standing(
        allowed=tuple(
            AllowedInfo(criterion=a.criterion, gain=None if a.gain is None else shown_gain(a.gain, entry))
            for a in found.allowed
        ),
        what_if=tuple(
            WhatIfInfo(
                change=w.change,
                stable=w.stable,
                phase_margin_deg=w.phase_margin,
                gain_margin=w.gain_margin,
                max_sensitivity=w.max_sensitivity,
                overshoot_pct=w.overshoot,
            )
            for w in found.what_if
        ),
        growth_borne=found.growth_borne,
        process_limits=_limits_info(found.limits),
        published_rules=tuple(_rule_info(r, entry) for r in found.published),
        limited=None if limited is None else _limited_info(limited),
    )


def _limits_info(limits: ProcessLimits) -> LimitsInfo:
    return LimitsInfo(
        dead_time_s=limits.dead_time,
        slowest_zero=limits.slowest_zero,
        fastest_pole=limits.fastest_pole,
        crossover_most=limits.crossover_most,
        crossover_most_by=limits.crossover_most_by,
        crossover_least=limits.crossover_least,
        sensitivity_least=limits.sensitivity_least,
        complementary_least=limits.complementary_least,
        crossover_for_margin=limits.crossover_for_margin,
    )


def _rule_info(rule: RuleResult, entry: Entry) -> RuleInfo:
    c = rule.controller
    return RuleInfo(
        name=rule.name,
        source=rule.source,
        kind=c.kind,
        gain=shown_gain(c.gain, entry),
        integral_s=c.integral_time,
        derivative_s=c.derivative_time,
        stable=rule.stable,
        phase_margin_deg=rule.phase_margin,
        gain_margin=rule.gain_margin,
        max_sensitivity=rule.max_sensitivity,
        overshoot_pct=rule.overshoot,
    )


def _limited_info(found: LimitedStep) -> LimitedInfo:
    t, pv, co = thin_trajectory(found.response)
    return LimitedInfo.model_validate(
        {
            "step": found.size,
            "co_room_low": found.low,
            "co_room_high": found.high,
            "limited_s": found.limited_for,
            "overshoot_pct": found.overshoot,
            "settling_s": found.settling_time,
            "t_s": t,
            "pv": pv,
            "co": co,
        }
    )
