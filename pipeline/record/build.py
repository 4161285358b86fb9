"""The stages' values, put into the record's words."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np

from pipeline.loop.forms import action_words
from pipeline.record.files import RESPONSE_POINTS, SERIES_ROWS, thinned_rows
from pipeline.record.schema import (
    AsFound,
    Backoff,
    BandsInfo,
    BumpInfo,
    CandidateInfo,
    CautionInfo,
    Columns,
    ControllerInfo,
    CriteriaInfo,
    CrossingInfo,
    Entered,
    FitInfo,
    LoadResponse,
    LogInfo,
    Made,
    MarginsInfo,
    ModelInfo,
    Move,
    ParameterInfo,
    PredictionInfo,
    QualityInfo,
    Record,
    Series,
    SetpointResponse,
)

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from numpy.typing import NDArray

    from fitters.fit import BumpData, Choice, Fit
    from pipeline.bumps import Bump
    from pipeline.findings import Caution
    from pipeline.intake.log import Log
    from pipeline.loop.forms import Entry
    from pipeline.loop.types import Controller, Margins, Prediction, Trajectory
    from pipeline.settings import LoopSheet
    from pipeline.testquality import Quality
    from pipeline.tuning.types import BackedOff, Bands, Criteria


#: Cautions of level "care" that stand in every report and so do not colour its verdict.
_ALWAYS = frozenset({"check-action", "equation-and-units", "permit-and-change", "safety-not-assessed", "motion"})


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
    """

    controller: ControllerInfo
    backed_off: BackedOff
    binding: str
    source: str
    as_found: AsFound | None


def log_info(log: Log, mode: Literal["open-loop", "closed-loop"]) -> LogInfo:
    """Name the log and the columns used.

    Parameters
    ----------
    log : Log
    mode : {"open-loop", "closed-loop"}
    """
    return LogInfo(
        file=log.file,
        sha256=log.sha256,
        rows=log.rows,
        span_s=log.span,
        sample_s=log.interval,
        columns=Columns(
            time=log.time_column.name,
            pv=log.pv_column.name,
            co=log.co_column.name,
            sp=None if log.sp_column is None else log.sp_column.name,
            mode=None if log.mode_column is None else log.mode_column.name,
        ),
        mode=mode,
    )


def bump_infos(bumps: Sequence[Bump]) -> tuple[BumpInfo, ...]:
    """List the bumps found.

    Parameters
    ----------
    bumps : sequence of Bump
    """
    return tuple(
        BumpInfo(
            start_s=b.start_s,
            end_s=b.end_s,
            moves=tuple(Move(at_s=m.at_s, from_=m.before, to=m.after) for m in b.moves),
            used=b.used,
        )
        for b in bumps
    )


def caution_infos(cautions: Sequence[Caution]) -> tuple[CautionInfo, ...]:
    """List cautions or findings.

    Parameters
    ----------
    cautions : sequence of Caution
    """
    return tuple(
        CautionInfo(code=c.code, level=c.level, text=c.text, value=c.value, limit=c.limit) for c in cautions
    )


def quality_info(quality: Quality) -> QualityInfo:
    """Give the verdict on the test.

    Parameters
    ----------
    quality : Quality
    """
    return QualityInfo(verdict=quality.verdict, findings=caution_infos(quality.findings))


def model_info(fit: Fit, pv_unit: str, co_unit: str) -> ModelInfo:
    """Give the model with its parameters in the log's own units.

    Parameters
    ----------
    fit : Fit
    pv_unit, co_unit : str
        Units as written in the log or the sheet; "PV" and "CO" where nothing says.
    """

    def spelled(unit: str) -> str:
        return unit.replace("PV", pv_unit).replace("CO", co_unit)

    own = fit.correlation.shape[0]
    return ModelInfo(
        structure=fit.structure,
        gain=fit.model.gain,
        gain_unit=spelled(fit.parameters[0].unit),
        integrators=fit.model.integrators,
        dead_time_s=fit.model.dead_time,
        numerator=fit.model.numerator,
        denominator=fit.model.denominator,
        parameters={
            p.name: ParameterInfo(
                value=p.value, unit=spelled(p.unit), stderr=p.stderr, low=p.low, high=p.high
            )
            for p in fit.parameters
        },
        correlation=tuple(tuple(float(v) for v in row) for row in fit.correlation[:own]),
    )


def fit_info(fit: Fit) -> FitInfo:
    """Say how well the model follows the log.

    Parameters
    ----------
    fit : Fit
    """
    return FitInfo(
        fit_pct=fit.fit_pct,
        rmse=fit.rmse,
        noise_sd=fit.noise_sd,
        noise_correlation_s=fit.noise_correlation,
        effective_samples=fit.effective_samples,
        drift_per_s=fit.drift,
        converged=fit.converged,
        starts_agreeing=fit.starts_agreeing,
    )


def candidate_infos(choice: Choice, gains: Mapping[str, float]) -> tuple[CandidateInfo, ...]:
    """List the structures tried and the controller gain each would lead to.

    Parameters
    ----------
    choice : Choice
    gains : mapping of str to float
        Recommended gain by structure, where it was worked out.
    """
    return tuple(
        CandidateInfo(
            structure=c.fit.structure,
            score=c.score,
            weight=c.weight,
            gain_recommended=gains.get(c.fit.structure),
        )
        for c in choice.candidates
    )


def criteria_info(criteria: Criteria) -> CriteriaInfo:
    """Say what was asked.

    Parameters
    ----------
    criteria : Criteria
    """
    return CriteriaInfo(
        phase_margin_deg=criteria.phase_margin,
        gain_margin=criteria.gain_margin,
        max_sensitivity=criteria.max_sensitivity,
        overshoot_pct=criteria.overshoot,
        percentile=criteria.percentile,
        percentile_phase_margin_deg=criteria.percentile_phase_margin,
    )


def entered(entries: Mapping[str, Entry]) -> dict[str, Entered]:
    """Give settings as they are typed into the controller.

    Parameters
    ----------
    entries : mapping of str to Entry
    """
    return {name: Entered(value=e.value, unit=e.unit) for name, e in entries.items()}


def controller_info(
    controller: Controller,
    *,
    equation: str,
    gain: float,
    gain_unit: str,
    entries: Mapping[str, Entry],
) -> ControllerInfo:
    """Give the settings.

    Parameters
    ----------
    controller : Controller
    equation : str
        The controller's own equation, in words.
    gain : float
        Proportional gain in `gain_unit`.
    gain_unit : str
    entries : mapping of str to Entry
        Settings in the controller's own equation and units.
    """
    return ControllerInfo(
        kind=controller.kind,
        equation=equation,
        action=controller.action,
        gain=gain,
        gain_unit=gain_unit,
        gain_engineering=controller.gain,
        integral_s=controller.integral_time,
        derivative_s=controller.derivative_time,
        filter_s=controller.derivative_filter,
        setpoint_weight=controller.setpoint_weight,
        derivative_setpoint_weight=controller.derivative_setpoint_weight,
        pv_filter_s=controller.pv_filter,
        scan_s=controller.scan,
        compute_delay_s=controller.compute_delay,
        as_entered=entered(entries),
    )


def margins_info(margins: Margins) -> MarginsInfo:
    """Give the margins in every sense.

    Parameters
    ----------
    margins : Margins
    """
    return MarginsInfo(
        phase_margin_deg=margins.phase_margin,
        gain_margin=margins.gain_margin,
        gain_reduction_margin=margins.gain_reduction_margin,
        max_sensitivity=margins.max_sensitivity,
        max_complementary=margins.max_complementary,
        delay_margin_s=margins.delay_margin,
        gain_crossover=margins.gain_crossover,
        phase_crossover=margins.phase_crossover,
        crossings=tuple(
            CrossingInfo(
                kind=c.kind, omega=c.omega, phase_margin_deg=c.phase_margin, magnitude=c.magnitude
            )
            for c in margins.crossings
        ),
    )


def prediction_info(prediction: Prediction, bands: Bands | None) -> PredictionInfo:
    """Give the predicted steps, thinned to what a figure can show.

    Parameters
    ----------
    prediction : Prediction
    bands : Bands or None
        Band of the set-point step.
    """
    setpoint = prediction.setpoint
    t, pv, co = _thin_trajectory(setpoint)
    low = high = None
    if bands is not None:
        low = np.interp(t, bands.t, bands.low)
        high = np.interp(t, bands.t, bands.high)
    load_t, load_pv, load_co = _thin_trajectory(prediction.load)
    return PredictionInfo(
        overshoot_pct=prediction.overshoot,
        rise_s=prediction.rise_time,
        settling_s=prediction.settling_time,
        load_peak=prediction.load_peak,
        load_integrated_error=prediction.load_integrated_error,
        co_peak=prediction.co_peak,
        noise_gain=prediction.noise_gain,
        setpoint=SetpointResponse.model_validate({"t_s": t, "pv": pv, "co": co, "low": low, "high": high}),
        load=LoadResponse.model_validate({"t_s": load_t, "pv": load_pv, "co": load_co}),
    )


def bands_info(bands: Bands) -> BandsInfo:
    """Give the percentiles over the plausible models.

    Parameters
    ----------
    bands : Bands
    """
    return BandsInfo(
        phase_margin_deg=bands.phase_margin,
        gain_margin=bands.gain_margin,
        max_sensitivity=bands.max_sensitivity,
        overshoot_pct=bands.overshoot,
        unstable_share=bands.unstable_share,
    )


def series(log: Log, data: BumpData | None, fit: Fit | None, pv_unit: str | None, co_unit: str | None) -> Series:
    """Give the log as the figures show it, with the fit where it reaches.

    Parameters
    ----------
    log : Log
    data : BumpData or None
        Rows the fit used.
    fit : Fit or None
    pv_unit, co_unit : str or None
    """
    rows = np.asarray(thinned_rows(log.co.tolist(), log.pv.tolist(), limit=SERIES_ROWS))
    fitted = residual = None
    if data is not None and fit is not None:
        fitted = _at_rows(log.t[rows], data.t, fit.fitted)
        residual = log.pv[rows] - fitted
    return Series.model_validate(
        {
            "t_s": log.t[rows],
            "pv": log.pv[rows],
            "co": log.co[rows],
            "fitted": fitted,
            "residual": residual,
            "pv_unit": pv_unit,
            "co_unit": co_unit,
        }
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
        special = any(c.level == "care" and c.code not in _ALWAYS for c in cautions)
        verdict = "ready with cautions" if special else "ready"
    parts: dict[str, object] = {}
    if identified is not None:
        parts |= {
            "model": identified.model,
            "fit": identified.fit,
            "candidates": identified.candidates,
            "choice_reason": identified.reason,
        }
    if settings is not None:
        parts |= {
            "controller": settings.controller,
            "action_words": action_words(settings.backed_off.controller.action),
            "binding": settings.binding,
            "backoff": Backoff(factor=settings.backed_off.factor, source=settings.source),
            "margins": margins_info(settings.backed_off.margins),
            "prediction": prediction_info(settings.backed_off.prediction, settings.backed_off.bands),
            "bands": bands_info(settings.backed_off.bands),
            "as_found": settings.as_found,
        }
    return Record(
        made=made,
        verdict=verdict,
        loop=sheet.model_dump(mode="json", exclude_none=True),
        log=log,
        bumps=bumps,
        quality=quality,
        criteria=criteria_info(criteria),
        cautions=caution_infos(cautions),
        next_steps=tuple(next_steps),
        series=shown,
        **parts,  # type: ignore[arg-type]
    )


def _thin_trajectory(
    trajectory: Trajectory,
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    count = trajectory.t.size
    if count <= RESPONSE_POINTS:
        return trajectory.t, trajectory.pv, trajectory.co
    rows = np.unique(np.round(np.linspace(0, count - 1, RESPONSE_POINTS)).astype(int))
    return trajectory.t[rows], trajectory.pv[rows], trajectory.co[rows]


def _at_rows(
    wanted: NDArray[np.float64], t: NDArray[np.float64], values: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Take the fit at the shown rows; NaN where no fitted row is that one."""
    place = np.clip(np.searchsorted(t, wanted), 0, t.size - 1)
    same = np.isclose(t[place], wanted, rtol=0.0, atol=1e-9 * max(float(t[-1]), 1.0))
    return np.where(same, values[place], np.nan)
