"""A record, put together from its parts."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

from pipeline.findings import ALWAYS
from pipeline.loop.forms import action_in_words
from pipeline.record import curves, parts
from pipeline.record.schema import (
    AsFound,
    Backoff,
    BumpInfo,
    CandidateInfo,
    ControllerInfo,
    FitInfo,
    LogInfo,
    Made,
    ModelInfo,
    QualityInfo,
    Record,
    Series,
)
from pipeline.record.standing import MarginGuide, Standing
from pipeline.record.stands import guide_info, standing_info

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from fitters.fit import Choice
    from pipeline.findings import Caution
    from pipeline.loop import forms
    from pipeline.loop.limited import LimitedStep
    from pipeline.loop.types import Margins
    from pipeline.settings import LoopSheet
    from pipeline.tuning import standing
    from pipeline.tuning.types import BackedOff, Criteria, Tuning


@dataclass(frozen=True, slots=True, kw_only=True)
class Identified:
    """The process as found in the log.

    Attributes
    ----------
    model : ModelInfo
    fit : FitInfo
    candidates : tuple of CandidateInfo
    reason : str
        Why this structure.
    """

    model: ModelInfo
    fit: FitInfo
    candidates: tuple[CandidateInfo, ...]
    reason: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Settings:
    """The settings and what they rest on.

    Attributes
    ----------
    controller : ControllerInfo
    backed_off : BackedOff
    binding : str
        Criterion that set the gain.
    source : str
        Source of uncertainty that ruled the back-off.
    as_found : AsFound or None
    guide : MarginGuide
    standing : Standing
    """

    controller: ControllerInfo
    backed_off: BackedOff
    binding: str
    source: str
    as_found: AsFound | None
    guide: MarginGuide
    standing: Standing


def identified(choice: Choice, gains: Mapping[str, float], pv_unit: str, co_unit: str) -> Identified:
    """Write down the process as found.

    Parameters
    ----------
    choice : Choice
    gains : mapping of str to float
        Controller gain by structure, where it was worked out.
    pv_unit, co_unit : str
    """
    return Identified(
        model=parts.model_info(choice.best, pv_unit, co_unit),
        fit=parts.fit_info(choice.best),
        candidates=parts.candidate_infos(choice, gains),
        reason=choice.reason,
    )


def settings(
    tuning: Tuning,
    backed_off: BackedOff,
    source: str,
    entry: forms.Entry,
    found: tuple[forms.Entered, Margins, float | None] | None,
    stands: standing.Standing,
    limited: LimitedStep | None,
    pv_unit: str | None,
    co_unit: str | None,
) -> Settings:
    """Write down the settings.

    Parameters
    ----------
    tuning : Tuning
    backed_off : BackedOff
    source : str
        Source of doubt that ruled the back-off.
    entry : Entry
        How the controller takes its settings.
    found : tuple of (Entered, Margins, float or None) or None
        Settings found in the controller, their margins and overshoot.
    stands : pipeline.tuning.standing.Standing
        Where the settings stand.
    limited : LimitedStep or None
        A set-point step through the output's limits.
    pv_unit, co_unit : str or None
    """
    as_found = None
    if found is not None:
        entered, margins, overshoot = found
        as_found = AsFound(
            as_entered=parts.as_typed(entered, entry, pv_unit, co_unit),
            margins=parts.margins_info(margins),
            overshoot_pct=overshoot,
        )
    return Settings(
        controller=parts.controller_info(backed_off.controller, backed_off.entered, entry, pv_unit, co_unit),
        backed_off=backed_off,
        binding=tuning.binding,
        source=source,
        as_found=as_found,
        guide=guide_info(stands.guide, entry),
        standing=standing_info(stands, limited, entry),
    )


def assemble(
    *,
    made: Made,
    sheet: LoopSheet,
    log: LogInfo,
    bumps: tuple[BumpInfo, ...],
    quality: QualityInfo,
    criteria: Criteria,
    cautions: Sequence[Caution],
    next_steps: Sequence[str],
    shown: Series,
    identified: Identified | None,
    settings: Settings | None,
) -> Record:
    """Put the parts together; without `settings` they are withheld.

    Parameters
    ----------
    made : Made
    sheet : LoopSheet
    log : LogInfo
    bumps : tuple of BumpInfo
    quality : QualityInfo
    criteria : Criteria
    cautions : sequence of Caution
    next_steps : sequence of str
    shown : Series
    identified : Identified or None
    settings : Settings or None
    """
    verdict: Literal["ready", "ready with cautions", "withheld"]
    if settings is None:
        verdict = "withheld"
    else:
        special = any(c.level == "care" and c.code not in ALWAYS for c in cautions)
        verdict = "ready with cautions" if special else "ready"
    found: dict[str, object] = {}
    if identified is not None:
        found |= {
            "model": identified.model,
            "fit": identified.fit,
            "candidates": identified.candidates,
            "choice_reason": identified.reason,
        }
    if settings is not None:
        found |= {
            "controller": settings.controller,
            "action_words": action_in_words(settings.backed_off.controller.action),
            "binding": settings.binding,
            "backoff": Backoff(factor=settings.backed_off.factor, source=settings.source),
            "margins": parts.margins_info(settings.backed_off.margins),
            "prediction": curves.prediction_info(settings.backed_off.prediction, settings.backed_off.bands),
            "bands": parts.bands_info(settings.backed_off.bands),
            "margin_guide": settings.guide,
            "standing": settings.standing,
            "as_found": settings.as_found,
        }
    return Record(
        made=made,
        verdict=verdict,
        loop=sheet.model_dump(mode="json", exclude_none=True),
        log=log,
        bumps=bumps,
        quality=quality,
        criteria=parts.criteria_info(criteria),
        cautions=parts.caution_infos(cautions),
        next_steps=tuple(next_steps),
        series=shown,
        **found,
    )
