"""Where the settings stand: what set them, what limits them, what they can bear, what others would do."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from pipeline.loop.limits import ProcessLimits, process_limits
from pipeline.tuning.allowed import Allowed, allowed_gains
from pipeline.tuning.compare import RuleResult, compare
from pipeline.tuning.guide import MarginGuide, margin_guide
from pipeline.tuning.whatif import WhatIf, growth_borne, what_if

if TYPE_CHECKING:
    from pipeline.tuning.recommend import Recommended, Wanted

#: Phase margin that the bound on the crossover is for where none is asked [degrees].
_USUAL_MARGIN = 60.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Standing:
    """All of it.

    Attributes
    ----------
    guide : MarginGuide
    allowed : tuple of Allowed
        Before any back-off, at the recommended times.
    what_if : tuple of WhatIf
    growth_borne : float
        Common growth of gain and dead time that the loop bears [1].
    limits : ProcessLimits
    published : tuple of RuleResult
    """

    guide: MarginGuide
    allowed: tuple[Allowed, ...]
    what_if: tuple[WhatIf, ...]
    growth_borne: float
    limits: ProcessLimits
    published: tuple[RuleResult, ...]


def stand(made: Recommended, asked: Wanted) -> Standing:
    """Judge the recommended settings from every side.

    Parameters
    ----------
    made : Recommended
    asked : Wanted
    """
    model, controller = made.tuning.model, made.backed_off.controller
    criteria = asked.criteria
    return Standing(
        guide=margin_guide(model, controller, overshoot=criteria.overshoot),
        allowed=allowed_gains(made.tuning, made.criteria),
        what_if=what_if(model, controller),
        growth_borne=growth_borne(model, controller),
        limits=process_limits(model, controller, phase_margin=criteria.phase_margin or _USUAL_MARGIN),
        published=compare(model, controller, derivative_filter_ratio=asked.derivative_filter_ratio),
    )
