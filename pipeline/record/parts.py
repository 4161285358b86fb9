"""Each stage's values, put into the record's words."""

from __future__ import annotations

from typing import TYPE_CHECKING, Literal

from pipeline.loop import forms
from pipeline.record.schema import (
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
    LogInfo,
    MarginsInfo,
    ModelInfo,
    Move,
    ParameterInfo,
    QualityInfo,
)

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from fitters.fit import Choice, Fit
    from pipeline.bumps import Bump
    from pipeline.findings import Caution
    from pipeline.intake.log import Log
    from pipeline.loop.forms import Entry
    from pipeline.loop.types import Controller, Margins
    from pipeline.testquality import Quality
    from pipeline.tuning.types import Bands, Criteria


#: The equations by name and as they are written, since names are used for different ones
#: (ISA-TR5.9 asks to name the equation, not the form).
_EQUATIONS = {
    "standard": "standard: Kc (e + 1/Ti ∫e dt + Td d(-PV)/dt)",
    "series": "series: Kc (e + 1/Ti ∫e dt) with the derivative (1 + Td d/dt) in front",
    "parallel": "parallel: Kp e + Ki ∫e dt + Kd d(-PV)/dt",
}


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
        max_complementary=criteria.max_complementary,
        closed_loop_time_s=criteria.closed_loop_time,
        overshoot_pct=criteria.overshoot,
        noise_gain=criteria.noise_gain,
        co_peak=criteria.co_peak,
        percentile=criteria.percentile,
        percentile_phase_margin_deg=criteria.percentile_phase_margin,
    )


def as_typed(
    numbers: forms.Entered, entry: Entry, pv_unit: str | None, co_unit: str | None
) -> dict[str, Entered]:
    """Give settings as they are typed into the controller, named and with their units.

    Parameters
    ----------
    numbers : pipeline.loop.forms.Entered
    entry : Entry
    pv_unit, co_unit : str or None
    """
    out: dict[str, Entered] = {}
    if numbers.proportional is not None:
        band = entry.proportional == "band"
        on_span = entry.proportional_basis == "span"
        unit = "%" if band else ("%/%" if on_span else f"{co_unit or 'CO unit'} per {pv_unit or 'PV unit'}")
        out["proportional_band" if band else "proportional_gain"] = Entered(
            value=numbers.proportional, unit=unit
        )
    if numbers.integral is not None:
        name = "integral_gain" if entry.integral.startswith("gain") else "integral_time"
        if entry.integral.startswith("repeats"):
            name = "integral_rate"
        out[name] = Entered(value=numbers.integral, unit=entry.integral.removeprefix("gain "))
    if numbers.derivative is not None:
        name = "derivative_gain" if entry.derivative.startswith("gain") else "derivative_time"
        out[name] = Entered(value=numbers.derivative, unit=entry.derivative.removeprefix("gain in "))
    return out


def shown_gain(gain: float, entry: Entry) -> float:
    """Give a gain in percent of span over percent of span where both ranges are known.

    Parameters
    ----------
    gain : float
        [CO unit / PV unit].
    entry : Entry
    """
    if entry.pv_span is None or entry.co_span is None:
        return gain
    return gain * entry.pv_span / entry.co_span


def controller_info(
    controller: Controller, entered: forms.Entered, entry: Entry, pv_unit: str | None, co_unit: str | None
) -> ControllerInfo:
    """Give the settings.

    Parameters
    ----------
    controller : Controller
    entered : pipeline.loop.forms.Entered
        The same in the controller's own units.
    entry : Entry
        How the controller takes its settings.
    pv_unit, co_unit : str or None
    """
    on_span = entry.pv_span is not None and entry.co_span is not None
    gain = shown_gain(controller.gain, entry)
    gain_unit = "%/%" if on_span else f"{co_unit or 'CO'}/{pv_unit or 'PV'}"
    return ControllerInfo(
        kind=controller.kind,
        equation=_EQUATIONS[entry.equation],
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
        as_entered=as_typed(entered, entry, pv_unit, co_unit),
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
            CrossingInfo(kind=c.kind, omega=c.omega, phase_margin_deg=c.phase_margin, magnitude=c.magnitude)
            for c in margins.crossings
        ),
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
