"""The keys of a record, their units and what may be absent.

Other programs lean on these keys, so they are fixed by `RECORD_VERSION`. Times in s,
frequencies in rad/s, angles in degrees. Infinity is the string "inf" in a file; NaN has no
place in a record.
"""

from __future__ import annotations

from typing import Literal, Self

from pydantic import Field, JsonValue, model_validator

from pipeline.findings import Level
from pipeline.record.fields import GappyNumbers, LowerEnd, Number, Numbers, Part, Percentiles
from pipeline.record.standing import MarginGuide, Standing

#: Raised when a key changes its name or meaning; older files then need their own reader.
RECORD_VERSION: Literal[1] = 1


class Made(Part):
    """Which program wrote the record and when (ISO 8601 with zone)."""

    program: str
    version: str
    created: str


class Columns(Part):
    """Header text of the columns used; None where the log has no such column."""

    time: str
    pv: str
    co: str
    sp: str | None = None
    mode: str | None = None


class LogInfo(Part):
    """The log the record rests on. `sample_s` is the median row spacing [s]."""

    file: str
    sha256: str
    rows: int
    span_s: Number
    sample_s: Number
    columns: Columns
    mode: Literal["open-loop", "closed-loop"]


class Move(Part):
    """One change of the CO [s, CO unit]."""

    at_s: Number
    from_: Number = Field(alias="from")
    to: Number


class BumpInfo(Part):
    """One bump and whether the fit rests on it."""

    start_s: Number
    end_s: Number
    moves: tuple[Move, ...]
    used: bool


class CautionInfo(Part):
    """One thing the reader must know: see `pipeline.findings.Caution`."""

    code: str
    level: Level
    text: str
    value: Number | None = None
    limit: Number | None = None


class QualityInfo(Part):
    """Verdict on the test and the findings it rests on."""

    verdict: Literal["use", "use with care", "do not use"]
    findings: tuple[CautionInfo, ...]


class ParameterInfo(Part):
    """An estimate with its standard uncertainty and 95 % interval, all in `unit`."""

    value: Number
    unit: str
    stderr: Number
    low: LowerEnd
    high: Number


class ModelInfo(Part):
    """The process model, gain included in the numerator, dead time apart."""

    structure: str
    gain: Number
    gain_unit: str
    integrators: int
    dead_time_s: Number
    numerator: Numbers
    denominator: Numbers
    parameters: dict[str, ParameterInfo]
    correlation: tuple[Numbers, ...]


class FitInfo(Part):
    """How well the model follows the log [%, PV unit, s, PV unit/s]."""

    fit_pct: Number
    rmse: Number
    noise_sd: Number
    noise_correlation_s: Number
    effective_samples: Number
    drift_per_s: Number
    converged: bool
    starts_agreeing: int


class CandidateInfo(Part):
    """One structure that was tried; `gain_recommended` is in the controller's gain unit."""

    structure: str
    score: Number
    weight: Number
    gain_recommended: Number | None = None


class Entered(Part):
    """One setting as it is typed into the controller."""

    value: Number | str
    unit: str = ""


class ControllerInfo(Part):
    """The settings. `gain` is positive in `gain_unit`; `gain_engineering` is in CO unit per PV unit."""

    kind: Literal["P", "I", "PI", "PD", "PID"]
    equation: str
    action: Literal["reverse", "direct"]
    gain: Number
    gain_unit: str
    gain_engineering: Number
    integral_s: Number
    derivative_s: Number
    filter_s: Number
    setpoint_weight: Number
    derivative_setpoint_weight: Number
    pv_filter_s: Number
    scan_s: Number
    compute_delay_s: Number = 0.0
    as_entered: dict[str, Entered]


class CriteriaInfo(Part):
    """What was asked; None is a criterion switched off."""

    phase_margin_deg: Number | None
    gain_margin: Number | None
    max_sensitivity: Number | None
    max_complementary: Number | None = None
    closed_loop_time_s: Number | None = None
    overshoot_pct: Number | None
    noise_gain: Number | None = None
    co_peak: Number | None = None
    percentile: Number | None
    percentile_phase_margin_deg: Number | None = None


class Backoff(Part):
    """Factor applied to the gain for uncertainty, and the source of uncertainty that ruled."""

    factor: Number
    source: str


class CrossingInfo(Part):
    """One crossing of magnitude one ("gain") or of the negative real axis ("phase")."""

    kind: Literal["gain", "phase"]
    omega: Number
    phase_margin_deg: Number | None = None
    magnitude: Number | None = None


class MarginsInfo(Part):
    """Margins of the loop with these settings; see `pipeline.loop.types.Margins`."""

    phase_margin_deg: Number
    gain_margin: Number
    gain_reduction_margin: Number
    max_sensitivity: Number
    max_complementary: Number
    delay_margin_s: Number
    gain_crossover: Number
    phase_crossover: Number
    crossings: tuple[CrossingInfo, ...]


class SetpointResponse(Part):
    """Unit set-point step: PV [1], CO [CO unit / PV unit], 5 to 95 % band of the PV [1]."""

    t_s: Numbers
    pv: Numbers
    co: Numbers
    low: Numbers | None = None
    high: Numbers | None = None


class LoadResponse(Part):
    """Unit step added to the CO: PV [PV unit / CO unit], CO [1]."""

    t_s: Numbers
    pv: Numbers
    co: Numbers


class PredictionInfo(Part):
    """What steps of set point and load will do; see `pipeline.loop.types.Prediction`."""

    overshoot_pct: Number
    rise_s: Number
    settling_s: Number
    load_peak: Number
    load_integrated_error: Number
    co_peak: Number
    noise_gain: Number
    setpoint: SetpointResponse
    load: LoadResponse


class BandsInfo(Part):
    """5th, 50th and 95th percentile over the plausible models, and the share they would lose."""

    phase_margin_deg: Percentiles
    gain_margin: Percentiles
    max_sensitivity: Percentiles
    overshoot_pct: Percentiles
    unstable_share: Number


class AsFound(Part):
    """The settings found in the controller, and what they mean on this model."""

    as_entered: dict[str, Entered]
    margins: MarginsInfo | None = None
    overshoot_pct: Number | None = None


class Series(Part):
    """The log as the figures show it, thinned; None where a row holds no PV or no fit reaches."""

    t_s: Numbers
    pv: GappyNumbers
    co: Numbers
    fitted: GappyNumbers | None = None
    residual: GappyNumbers | None = None
    pv_unit: str | None = None
    co_unit: str | None = None

    @model_validator(mode="after")
    def _one_length(self) -> Self:
        columns = (self.pv, self.co, self.fitted, self.residual)
        if any(c is not None and len(c) != len(self.t_s) for c in columns):
            raise ValueError("the columns of the series differ in length")
        return self


class Record(Part):
    """All that was found and decided about one log."""

    record_version: Literal[1] = RECORD_VERSION
    made: Made
    verdict: Literal["ready", "ready with cautions", "withheld"]
    loop: dict[str, JsonValue]
    log: LogInfo
    bumps: tuple[BumpInfo, ...]
    quality: QualityInfo
    model: ModelInfo | None = None
    fit: FitInfo | None = None
    candidates: tuple[CandidateInfo, ...] = ()
    choice_reason: str | None = None
    controller: ControllerInfo | None = None
    action_words: str | None = None
    criteria: CriteriaInfo
    binding: str | None = None
    backoff: Backoff | None = None
    margins: MarginsInfo | None = None
    prediction: PredictionInfo | None = None
    bands: BandsInfo | None = None
    margin_guide: MarginGuide | None = None
    standing: Standing | None = None
    as_found: AsFound | None = None
    cautions: tuple[CautionInfo, ...]
    next_steps: tuple[str, ...]
    series: Series

    @model_validator(mode="after")
    def _verdict_holds(self) -> Self:
        needed = ("model", "fit", "controller", "action_words", "margins", "prediction")
        if self.verdict == "withheld":
            if self.controller is not None:
                raise ValueError("a record whose settings are withheld must not carry a controller")
        else:
            missing = [name for name in needed if getattr(self, name) is None]
            if missing:
                raise ValueError(f"a record with settings needs {', '.join(missing)}")
            if any(c.level == "stop" for c in self.cautions):
                raise ValueError("a record with a caution of level stop must be withheld")
        return self
