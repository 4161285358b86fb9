"""The loop sheet: what the people on site know about the loop and the log does not say.

Every key is optional and None means "not given". Nothing here is a default of the tuning;
the stages that need a value choose it and say so.
"""

from __future__ import annotations

import itertools
import math
from typing import Annotated, Literal

from pydantic import BaseModel, ConfigDict, Field, model_validator

Duty = Literal["flow", "pressure", "level", "temperature", "composition", "speed", "position", "other"]
TimeUnit = Literal["s", "ms", "min", "h"]
Equation = Literal["standard", "series", "parallel"]
IntegralEntry = Literal[
    "seconds per repeat",
    "minutes per repeat",
    "repeats per minute",
    "repeats per second",
    "gain per second",
    "gain per minute",
    "gain per scan",
]
DerivativeEntry = Literal["seconds", "minutes", "gain in seconds", "gain in minutes"]

_Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]
_NotNegative = Annotated[float, Field(ge=0, allow_inf_nan=False)]
_Finite = Annotated[float, Field(allow_inf_nan=False)]
_Share = Annotated[float, Field(ge=0, le=1)]
_Text = Annotated[str, Field(min_length=1)]
#: A signal in percent spans this much where no range is given [%].
_PERCENT_SPAN = 100.0

#: A column by its header text, or by its position counted from 1.
ColumnName = _Text | Annotated[int, Field(ge=1, strict=True)]


class _Table(BaseModel):
    """A table of the sheet: no unknown keys, nothing changes after reading."""

    model_config = ConfigDict(frozen=True, extra="forbid")


class LoopTable(_Table):
    """[loop]: which loop this is."""

    tag: _Text | None = None
    service: _Text | None = None
    duty: Duty = "other"


class ColumnsTable(_Table):
    """[columns]: which column of the log is which, by header text or position from 1."""

    time: ColumnName | None = None
    pv: ColumnName | None = None
    co: ColumnName | None = None
    sp: ColumnName | None = None
    mode: ColumnName | None = None

    @model_validator(mode="after")
    def _distinct(self) -> ColumnsTable:
        taken: dict[str | int, str] = {}
        for key in ("time", "pv", "co", "sp", "mode"):
            name = getattr(self, key)
            if name is None:
                continue
            if name in taken:
                raise ValueError(f"{taken[name]} and {key} name the same column, {name!r}.")
            taken[name] = key
        return self


class FileTable(_Table):
    """[file]: which part of the log file to read, and its decimal mark."""

    part: _Text | None = None
    run: Annotated[int, Field(ge=1)] | None = None
    decimal: Literal[".", ","] | None = None


class TimeTable(_Table):
    """[time]: how the log writes its times."""

    format: _Text | None = None
    unit: TimeUnit | None = None
    zone: _Text | None = None
    sample_s: _Positive | None = None

    @model_validator(mode="after")
    def _known_zone(self) -> TimeTable:
        if self.zone is not None:
            from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

            try:
                ZoneInfo(self.zone)
            except (ZoneInfoNotFoundError, ValueError, OSError):
                raise ValueError(
                    f"zone {self.zone!r} is not a time zone name such as 'Europe/Berlin' or 'UTC'."
                ) from None
        return self


class RangeTable(_Table):
    """[pv] and [co]: unit and range of a signal."""

    unit: _Text | None = None
    low: _Finite | None = None
    high: _Finite | None = None

    @model_validator(mode="after")
    def _ordered(self) -> RangeTable:
        if (self.low is None) != (self.high is None):
            raise ValueError("low and high are given together or not at all.")
        if self.low is not None and self.high is not None and not self.low < self.high:
            raise ValueError(f"low ({self.low:g}) must be below high ({self.high:g}).")
        return self

    @property
    def span(self) -> float | None:
        """Range width [unit], None if not given."""
        return None if self.low is None or self.high is None else self.high - self.low

    def span_in(self, unit: str | None = None) -> float | None:
        """Give the range width, taking a signal in percent to span all of it.

        Parameters
        ----------
        unit : str or None
            Unit the log gives, where the sheet gives none.
        """
        if self.span is None and (self.unit or unit) == "%":
            return _PERCENT_SPAN
        return self.span


class ControllerTable(_Table):
    """[controller]: the controller's own equation and how its settings are entered."""

    kind: Literal["P", "I", "PI", "PD", "PID"] | None = None
    equation: Equation | None = None
    action: Literal["reverse", "direct"] | None = None
    proportional: Literal["gain", "band"] | None = None
    proportional_basis: Literal["span", "engineering"] | None = None
    integral: IntegralEntry | None = None
    derivative: DerivativeEntry | None = None
    proportional_step: _Positive | None = None
    integral_step: _Positive | None = None
    derivative_step: _Positive | None = None
    derivative_filter_s: _NotNegative | None = None
    derivative_filter_ratio: _Positive | None = None
    setpoint_weight: _Share | None = None
    derivative_setpoint_weight: _Share | None = None
    scan_s: _NotNegative | None = None
    compute_delay_s: _NotNegative | None = None
    pv_filter_s: _NotNegative | None = None

    @model_validator(mode="after")
    def _one_filter(self) -> ControllerTable:
        if self.derivative_filter_s is not None and self.derivative_filter_ratio is not None:
            raise ValueError("give derivative_filter_s or derivative_filter_ratio, not both.")
        if self.integral == "gain per scan" and not self.scan_s:
            raise ValueError("an integral gain per scan needs the scan: give scan_s.")
        return self


class AsFoundTable(_Table):
    """[as_found]: the settings before the work, in the controller's entry units."""

    proportional: _Positive | None = None
    integral: _NotNegative | None = None
    derivative: _NotNegative | None = None


class CriteriaTable(_Table):
    """[criteria]: what the settings must keep."""

    phase_margin_deg: Annotated[float, Field(gt=0, lt=180)] | None = None
    gain_margin: Annotated[float, Field(gt=1, allow_inf_nan=False)] | None = None
    max_sensitivity: Annotated[float, Field(gt=1, allow_inf_nan=False)] | None = None
    max_complementary: Annotated[float, Field(gt=1, allow_inf_nan=False)] | None = None
    closed_loop_time_s: _Positive | None = None
    overshoot_pct: Annotated[float, Field(ge=0, allow_inf_nan=False)] | None = None
    noise_gain: _Positive | None = None
    co_peak: _Positive | None = None
    percentile: Annotated[float, Field(gt=0, lt=50)] | None = None
    percentile_phase_margin_deg: Annotated[float, Field(gt=0, lt=180)] | None = None

    @model_validator(mode="after")
    def _percentile_below(self) -> CriteriaTable:
        asked, held = self.phase_margin_deg, self.percentile_phase_margin_deg
        if asked is not None and held is not None and held > asked:
            raise ValueError(
                f"percentile_phase_margin_deg ({held:g}) must not be above phase_margin_deg ({asked:g})."
            )
        return self


class UncertaintyTable(_Table):
    """[uncertainty]: the least scatter of the process to allow for, whatever the log says [%]."""

    gain_pct: Annotated[float, Field(ge=0, le=100)] | None = None
    lags_pct: Annotated[float, Field(ge=0, le=100)] | None = None
    dead_time_pct: Annotated[float, Field(ge=0, le=100)] | None = None


class LimitsTable(_Table):
    """[limits]: what lies near the working point."""

    pv_low_alarm: _Finite | None = None
    pv_high_alarm: _Finite | None = None
    pv_low_trip: _Finite | None = None
    pv_high_trip: _Finite | None = None
    co_low: _Finite | None = None
    co_high: _Finite | None = None

    @model_validator(mode="after")
    def _ordered(self) -> LimitsTable:
        order = ("pv_low_trip", "pv_low_alarm", "pv_high_alarm", "pv_high_trip")
        given = [(name, getattr(self, name)) for name in order if getattr(self, name) is not None]
        for (name, value), (above, limit) in itertools.pairwise(given):
            # an alarm may sit on its trip, but a low limit must be below a high one
            if value > limit or (value == limit and name.split("_")[1] != above.split("_")[1]):
                raise ValueError(f"{name} ({value:g}) must be below {above} ({limit:g}).")
        if self.co_low is not None and self.co_high is not None and not self.co_low < self.co_high:
            raise ValueError(f"co_low ({self.co_low:g}) must be below co_high ({self.co_high:g}).")
        return self


class PeopleTable(_Table):
    """[people]: who signs."""

    tested_by: _Text | None = None
    checked_by: _Text | None = None
    approved_by: _Text | None = None


class ReferencesTable(_Table):
    """[references]: the papers this work hangs on."""

    loop_drawing: _Text | None = None
    permit: _Text | None = None
    change_number: _Text | None = None
    valve_test: _Text | None = None
    loop_check: _Text | None = None


class LoopSheet(_Table):
    """The whole sheet; ``LoopSheet()`` is a sheet on which nothing was filled in.

    Attributes
    ----------
    loop, file, columns, time, pv, co, controller, as_found, criteria, uncertainty, limits, people, references
        One frozen table each; a key that was not given is None.
    """

    loop: LoopTable = LoopTable()
    file: FileTable = FileTable()
    columns: ColumnsTable = ColumnsTable()
    time: TimeTable = TimeTable()
    pv: RangeTable = RangeTable()
    co: RangeTable = RangeTable()
    controller: ControllerTable = ControllerTable()
    as_found: AsFoundTable = AsFoundTable()
    criteria: CriteriaTable = CriteriaTable()
    uncertainty: UncertaintyTable = UncertaintyTable()
    limits: LimitsTable = LimitsTable()
    people: PeopleTable = PeopleTable()
    references: ReferencesTable = ReferencesTable()

    def co_limits(self) -> tuple[float, float]:
        """Give the limits of the output: those stated, or its range, or none [CO unit]."""
        stated, span = self.limits, self.co
        lows = [v for v in (stated.co_low, span.low) if v is not None]
        highs = [v for v in (stated.co_high, span.high) if v is not None]
        return max(lows, default=-math.inf), min(highs, default=math.inf)
