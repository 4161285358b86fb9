"""Published rules on the fitted process: for comparison, never for the recommendation."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

from pipeline.loop.forms import action_for_model
from pipeline.loop.margins import margin_table
from pipeline.loop.simulate import overshoot
from pipeline.loop.stack import stack_loops
from pipeline.tuning import rules
from pipeline.tuning.reduced import first_order, ultimate
from pipeline.tuning.search import filter_time

if TYPE_CHECKING:
    from fitters.process import ProcessModel
    from pipeline.loop.types import Action, Controller


@dataclass(frozen=True, slots=True, kw_only=True)
class RuleResult:
    """One rule on one process.

    Attributes
    ----------
    name, source : str
    controller : Controller
        In the standard equation.
    stable : bool
    phase_margin : float
        [degrees].
    gain_margin, max_sensitivity : float
        [1].
    overshoot : float or None
        Of a set-point step [%]; None where the loop is not stable.
    """

    name: str
    source: str
    controller: Controller
    stable: bool
    phase_margin: float
    gain_margin: float
    max_sensitivity: float
    overshoot: float | None


@dataclass(frozen=True, slots=True, kw_only=True)
class PublishedRule:
    """A rule by its authors, where it stands, and what it gives."""

    name: str
    source: str
    settings: Callable[[rules.Facts], list[rules.Settings]]


RULES = (
    PublishedRule(name="Skogestad", source="J. Process Control 13 (2003) 291-309", settings=rules.simc),
    PublishedRule(
        name="Åström and Hägglund", source="Advanced PID Control (2006) eq. 7.5, 7.7", settings=rules.amigo
    ),
    PublishedRule(name="Lambda, three lags", source="common practice", settings=rules.lambda_tuning),
    PublishedRule(
        name="Rivera, Morari and Skogestad",
        source="Ind. Eng. Chem. Process Des. Dev. 25 (1986) 252-265",
        settings=rules.internal_model,
    ),
    PublishedRule(name="Ho, Hang and Cao", source="Automatica 31 (1995) 497-502", settings=rules.ho_hang_cao),
    PublishedRule(
        name="Chien, Hrones and Reswick",
        source="Trans. ASME 74 (1952) 175-185",
        settings=rules.chien_hrones_reswick,
    ),
    PublishedRule(
        name="Tyreus and Luyben",
        source="Ind. Eng. Chem. Res. 31 (1992) 2625-2628",
        settings=rules.tyreus_luyben,
    ),
    PublishedRule(
        name="Ziegler and Nichols, ultimate",
        source="Trans. ASME 64 (1942) 759-768",
        settings=rules.ziegler_nichols_ultimate,
    ),
    PublishedRule(
        name="Ziegler and Nichols, step",
        source="Trans. ASME 64 (1942) 759-768",
        settings=rules.ziegler_nichols_step,
    ),
    PublishedRule(name="Cohen and Coon", source="Trans. ASME 75 (1953) 827-834", settings=rules.cohen_coon),
)


def facts_of(model: ProcessModel) -> rules.Facts:
    """Reduce a process to what the rules are written in.

    Parameters
    ----------
    model : ProcessModel
    """
    beyond = model.unstable_poles.size or model.integrators > 1
    return rules.Facts(
        one=first_order(model),
        two=first_order(model, lags=2),
        ultimate=None if beyond else ultimate(model),
    )


def compare(
    model: ProcessModel, pattern: Controller, *, derivative_filter_ratio: float = 10.0
) -> tuple[RuleResult, ...]:
    """Apply every published rule for the pattern's kind of controller and judge it on the process.

    Parameters
    ----------
    model : ProcessModel
    pattern : Controller
        Kind, weights, scan and filter as the controller has them.
    derivative_filter_ratio : float
        Derivative time over its filter [1].

    Returns
    -------
    tuple of RuleResult
        Empty where no rule was written for such a process.
    """
    facts, action = facts_of(model), action_for_model(model)
    tried = [
        (rule, _controller(pattern, action, s, derivative_filter_ratio))
        for rule in RULES
        for s in rule.settings(facts)
        if s.kind == pattern.kind
    ]
    if not tried:
        return ()
    table = margin_table(stack_loops([model], [c for _, c in tried]))
    return tuple(
        RuleResult(
            name=rule.name,
            source=rule.source,
            controller=c,
            stable=bool(table.stable[k]),
            phase_margin=float(table.phase_margin[k]),
            gain_margin=float(table.gain_margin[k]),
            max_sensitivity=float(table.max_sensitivity[k]),
            overshoot=overshoot(model, c) if table.stable[k] else None,
        )
        for k, (rule, c) in enumerate(tried)
    )


def _controller(pattern: Controller, action: Action, s: rules.Settings, ratio: float) -> Controller:
    return replace(
        pattern,
        gain=s.gain,
        action=action,
        integral_time=s.integral,
        derivative_time=s.derivative,
        derivative_filter=filter_time(s.derivative, ratio, None),
    )
