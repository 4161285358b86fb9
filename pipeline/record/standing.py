"""The keys of a record that say where the settings stand: what limits them, what they can bear."""

from __future__ import annotations

from typing import Literal

from pipeline.record.fields import Number, Numbers, Part


class GuidePoint(Part):
    """What one phase margin comes with on this process, at the integral and derivative times given."""

    phase_margin_deg: Number
    gain: Number
    overshoot_pct: Number
    gain_margin: Number
    max_sensitivity: Number
    settling_s: Number | None = None


class MarginGuide(Part):
    """Whether the phase margin predicts the overshoot here, and the curve that shows it."""

    holds: bool
    why: str
    steer_by: str | None = None
    phase_margin_for_overshoot_deg: Number | None = None
    curve: tuple[GuidePoint, ...]


class AllowedInfo(Part):
    """The gain that one criterion by itself would allow; None where no gain meets it."""

    criterion: str
    gain: Number | None


class WhatIfInfo(Part):
    """The same settings on the process changed; `overshoot_pct` is None where the loop is lost."""

    change: str
    stable: bool
    phase_margin_deg: Number
    gain_margin: Number
    max_sensitivity: Number
    overshoot_pct: Number | None


class LimitsInfo(Part):
    """What the process forbids; see `pipeline.loop.limits.ProcessLimits`. Frequencies in rad/s."""

    dead_time_s: Number
    slowest_zero: Number | None
    fastest_pole: Number | None
    crossover_most: Number
    crossover_most_by: str
    crossover_least: Number
    sensitivity_least: Number
    complementary_least: Number
    crossover_for_margin: tuple[Number, Number] | None


class RuleInfo(Part):
    """A published rule on the fitted process, for comparison only."""

    name: str
    source: str
    kind: Literal["P", "I", "PI", "PD", "PID"]
    gain: Number
    integral_s: Number
    derivative_s: Number
    stable: bool
    phase_margin_deg: Number
    gain_margin: Number
    max_sensitivity: Number
    overshoot_pct: Number | None


class LimitedInfo(Part):
    """A set-point step of `step` PV units through the output's limits, as deviations from the start."""

    step: Number
    co_room_low: Number
    co_room_high: Number
    limited_s: Number
    overshoot_pct: Number
    settling_s: Number
    t_s: Numbers
    pv: Numbers
    co: Numbers


class Standing(Part):
    """Where the settings stand."""

    allowed: tuple[AllowedInfo, ...]
    what_if: tuple[WhatIfInfo, ...]
    growth_borne: Number
    process_limits: LimitsInfo
    published_rules: tuple[RuleInfo, ...]
    limited: LimitedInfo | None = None
