"""From a fit and what the site says to the settings recommended: the tuner put to work."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from fitters.spread import STATED, Floor, plausible
from pipeline.loop.agreement import check_agreement
from pipeline.loop.forms import Entered, Entry, action_for, understand
from pipeline.loop.margins import margins
from pipeline.loop.simulate import overshoot
from pipeline.loop.types import Controller
from pipeline.tuning.duties import USUAL
from pipeline.tuning.knowledge import known_until
from pipeline.tuning.search import filter_time
from pipeline.tuning.tuner import least_dead_time, raised, tune
from pipeline.tuning.types import Criteria
from pipeline.tuning.uncertainty import back_off

if TYPE_CHECKING:
    from fitters.fit import Choice, Fit
    from fitters.process import ProcessModel
    from pipeline.loop.types import Kind, Margins
    from pipeline.settings import LoopSheet
    from pipeline.tuning.types import BackedOff, Tuning

#: Processes drawn from each source of doubt: a power of two, which spreads them most evenly.
PLAUSIBLE = 512
#: Fixed, so that one log gives one record.
_SEED = 20_261_201
#: Share of a log interval below which no effective dead time is believed: held CO, sampled PV [1].
_UNSEEN_SHARE = 0.5


@dataclass(frozen=True, slots=True, kw_only=True)
class Wanted:
    """What is asked of the tuner, from the command line, the loop sheet and the defaults.

    Attributes
    ----------
    kind : {"P", "I", "PI", "PD", "PID"} or None
        None leaves it to the process.
    criteria : Criteria
    entry : Entry
        How the controller takes its settings.
    setpoint_weight, derivative_setpoint_weight : float
    pv_filter, scan, compute_delay : float
        [s].
    derivative_filter_ratio : float
        Derivative time over its filter [1].
    derivative_filter : float or None
        The derivative's filter where it is fixed [s].
    floor : Floor
        Least scatter of the process to allow for.
    """

    kind: Kind | None
    criteria: Criteria
    entry: Entry
    setpoint_weight: float
    derivative_setpoint_weight: float
    pv_filter: float
    scan: float
    compute_delay: float
    derivative_filter_ratio: float
    derivative_filter: float | None
    floor: Floor


@dataclass(frozen=True, slots=True, kw_only=True)
class Recommended:
    """The settings and how they came about.

    Attributes
    ----------
    tuning : Tuning
        On the nominal model, before the back-off.
    backed_off : BackedOff
    dead_time_floor : float
        Effective dead time assumed at least [s].
    source : str
        What the plausible processes were drawn from: the widest source of doubt.
    criteria : Criteria
        What was asked, and how high the crossover may lie for what the log knows.
    """

    tuning: Tuning
    backed_off: BackedOff
    dead_time_floor: float
    source: str
    criteria: Criteria


def wanted(
    sheet: LoopSheet,
    *,
    kind: Kind | None,
    phase_margin: float | None,
    gain_margin: float | None,
    max_sensitivity: float | None,
    overshoot_pct: float | None,
) -> Wanted:
    """Settle what is asked: the command line before the sheet, the sheet before the defaults.

    Parameters
    ----------
    sheet : LoopSheet
    kind : {"P", "I", "PI", "PD", "PID"} or None
    phase_margin : float or None
        [degrees].
    gain_margin, max_sensitivity : float or None
        [1].
    overshoot_pct : float or None
        [%].
    """
    asked, usual, c = sheet.criteria, USUAL[sheet.loop.duty], sheet.controller
    phase = _first(phase_margin, asked.phase_margin_deg, usual.phase_margin)
    least = _first(asked.percentile_phase_margin_deg, usual.percentile_phase_margin)
    if asked.percentile_phase_margin_deg is None and least is not None and phase is not None:
        # the usual floor stands to the usual target as 45 to 60 degrees; a lower target lowers it
        least = min(least, 0.75 * phase)
    return Wanted(
        kind=kind or c.kind,
        criteria=Criteria(
            phase_margin=phase,
            gain_margin=_first(gain_margin, asked.gain_margin, usual.gain_margin),
            max_sensitivity=_first(max_sensitivity, asked.max_sensitivity, usual.max_sensitivity),
            max_complementary=asked.max_complementary,
            closed_loop_time=asked.closed_loop_time_s,
            overshoot=_first(overshoot_pct, asked.overshoot_pct, usual.overshoot),
            noise_gain=asked.noise_gain,
            co_peak=asked.co_peak,
            percentile=asked.percentile or usual.percentile,
            percentile_phase_margin=least,
        ),
        entry=entry_of(sheet),
        setpoint_weight=_number(c.setpoint_weight, 1.0),
        derivative_setpoint_weight=_number(c.derivative_setpoint_weight, 0.0),
        pv_filter=_number(c.pv_filter_s, 0.0),
        scan=_number(c.scan_s, 0.0),
        compute_delay=_number(c.compute_delay_s, 0.0),
        derivative_filter_ratio=_number(c.derivative_filter_ratio, 10.0),
        derivative_filter=c.derivative_filter_s,
        floor=Floor(
            gain=_number(sheet.uncertainty.gain_pct, 0.0) / 100.0,
            lags=_number(sheet.uncertainty.lags_pct, 0.0) / 100.0,
            dead_time=_number(sheet.uncertainty.dead_time_pct, 0.0) / 100.0,
        ),
    )


def entry_of(sheet: LoopSheet) -> Entry:
    """Say how the controller takes its settings; on span where both ranges are known.

    Parameters
    ----------
    sheet : LoopSheet
    """
    c = sheet.controller
    pv_span, co_span = sheet.pv.span_in(), sheet.co.span_in()
    known = pv_span is not None and co_span is not None
    usual = Entry()
    return Entry(
        equation=c.equation or usual.equation,
        proportional=c.proportional or usual.proportional,
        proportional_basis=c.proportional_basis or ("span" if known else "engineering"),
        integral=c.integral or usual.integral,
        derivative=c.derivative or usual.derivative,
        pv_span=pv_span,
        co_span=co_span,
        scan=c.scan_s or 0.0,
        proportional_step=c.proportional_step,
        integral_step=c.integral_step,
        derivative_step=c.derivative_step,
    )


def recommend(choice: Choice, asked: Wanted, *, log_interval: float) -> Recommended:
    """Tune on the fitted model, then back off for what the log leaves open.

    Parameters
    ----------
    choice : Choice
    asked : Wanted
    log_interval : float
        Spacing of the log's rows [s].

    Returns
    -------
    Recommended
        Backed off for the source of doubt that leaves the least phase margin.

    Raises
    ------
    ChecksDisagree
        If frequency and time domain give different answers for the final loop.
    """
    floor = _UNSEEN_SHARE * log_interval
    kind = asked.kind or kind_for(choice.best.model)
    drawn = plausible(choice, asked.floor, PLAUSIBLE, _SEED)
    least = least_dead_time(choice.best.model, kind, floor)
    nominal = raised(choice.best.model, least)
    until = min(known_until(models, nominal) for name, models in drawn.items() if name != STATED)
    within = replace(asked.criteria, crossover=until if np.isfinite(until) else None)
    tuning = tune_model(choice.best.model, replace(asked, criteria=within), dead_time_floor=floor)
    sources = {name: [raised(m, least) for m in models] for name, models in drawn.items()}
    backed_off, source = back_off(tuning, sources, asked.criteria, asked.entry)
    check_agreement(tuning.model, backed_off.controller, backed_off.margins, backed_off.prediction)
    return Recommended(
        tuning=tuning, backed_off=backed_off, dead_time_floor=floor, source=source, criteria=within
    )


def tune_model(model: ProcessModel, asked: Wanted, *, dead_time_floor: float) -> Tuning:
    """Tune on one model as asked.

    Parameters
    ----------
    model : ProcessModel
    asked : Wanted
    dead_time_floor : float
        Effective dead time assumed at least [s].
    """
    return tune(
        model,
        kind=asked.kind or kind_for(model),
        criteria=asked.criteria,
        setpoint_weight=asked.setpoint_weight,
        derivative_setpoint_weight=asked.derivative_setpoint_weight,
        pv_filter=asked.pv_filter,
        scan=asked.scan,
        compute_delay=asked.compute_delay,
        derivative_filter_ratio=asked.derivative_filter_ratio,
        derivative_filter=asked.derivative_filter,
        dead_time_floor=dead_time_floor,
    )


def kind_for(model: ProcessModel) -> Kind:
    """Choose the controller where nobody did: PI, and PID where a PI cannot stabilise.

    Parameters
    ----------
    model : ProcessModel
    """
    return "PID" if model.integrators > 1 else "PI"


def as_found(
    fit: Fit, sheet: LoopSheet, asked: Wanted, floor: float
) -> tuple[Entered, Margins, float | None] | None:
    """Judge the settings found in the controller on the fitted model.

    Parameters
    ----------
    fit : Fit
    sheet : LoopSheet
    asked : Wanted
    floor : float
        Effective dead time assumed at least [s].

    Returns
    -------
    tuple of (Entered, Margins, float or None) or None
        As entered, margins, overshoot of a set-point step [%] (None where the loop is not
        stable); None if the sheet gives no settings.
    """
    found = sheet.as_found
    if found.proportional is None and found.integral is None:
        return None
    entered = Entered(
        proportional=found.proportional,
        integral=found.integral or None,
        derivative=found.derivative or None,
    )
    gain, integral_time, derivative_time = understand(entered, asked.entry)
    kind: Kind = "PID" if derivative_time > 0.0 else "PI"
    if found.integral in (None, 0.0):
        kind = "PD" if derivative_time > 0.0 else "P"
    if found.proportional is None:
        kind = "I"
    assert gain is not None  # `understand` gives one for every setting that is there
    controller = Controller(
        kind=kind,
        gain=gain,
        action=action_for(fit.model.gain),
        integral_time=integral_time,
        derivative_time=derivative_time,
        derivative_filter=filter_time(
            derivative_time, asked.derivative_filter_ratio, asked.derivative_filter
        ),
        setpoint_weight=asked.setpoint_weight,
        derivative_setpoint_weight=asked.derivative_setpoint_weight,
        pv_filter=asked.pv_filter,
        scan=asked.scan,
        compute_delay=asked.compute_delay,
    )
    model = raised(fit.model, least_dead_time(fit.model, kind, floor))
    reached = margins(model, controller)
    return entered, reached, overshoot(model, controller) if reached.stable else None


def _first(*values: float | None) -> float | None:
    return next((v for v in values if v is not None), None)


def _number(value: float | None, otherwise: float) -> float:
    return otherwise if value is None else value
