"""Find the settings: the largest integral gain (without integral action, gain) that keeps every criterion."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from pipeline.findings import Caution
from pipeline.loop.forms import action_for_model
from pipeline.loop.margins import margins
from pipeline.loop.simulate import predict
from pipeline.loop.types import Controller
from pipeline.tuning import remarks as remark
from pipeline.tuning.criteria import NAMES
from pipeline.tuning.search import Job, Shape, eased, ends, fastest, largest_share, time_scales
from pipeline.tuning.simulated import TOLERANCE, excess, fastest_within, gain_within, simulated
from pipeline.tuning.types import Criteria, Tuning

if TYPE_CHECKING:
    from fitters.process import ProcessModel
    from pipeline.loop.types import Kind

#: Stand-in dead time where nothing limits the gain [share of the fastest lag]: less than
#: this a bump test does not show.
_UNSEEN = 0.1
#: Shares of the dead time at which an unreached target is tried again [1].
_LESS_DEAD_TIME = (0.8, 0.6, 0.4, 0.25, 0.1)
#: Kinds of controller with more to give than each kind [1].
_RICHER: dict[str, tuple[Kind, ...]] = {
    "P": ("PI", "PD"),
    "I": ("PI",),
    "PI": ("PID",),
    "PD": ("PID",),
    "PID": (),
}


def tune(
    model: ProcessModel,
    *,
    kind: Kind,
    criteria: Criteria,
    setpoint_weight: float = 1.0,
    derivative_setpoint_weight: float = 0.0,
    pv_filter: float = 0.0,
    scan: float = 0.0,
    compute_delay: float = 0.0,
    derivative_filter_ratio: float = 10.0,
    derivative_filter: float | None = None,
    dead_time_floor: float = 0.0,
) -> Tuning:
    """Find the settings with the largest integral gain that keep every criterion.

    Parameters
    ----------
    model : ProcessModel
    kind : {"P", "I", "PI", "PD", "PID"}
        P and PD: the largest gain. An I controller is given with Ti = 1 s.
    criteria : Criteria
    setpoint_weight, derivative_setpoint_weight : float
        As the controller has them [1].
    pv_filter, scan, compute_delay : float
        As the controller has them [s].
    derivative_filter_ratio : float
        Derivative time over its filter [1].
    derivative_filter : float, optional
        The filter where it is fixed [s]; otherwise it follows the derivative time.
    dead_time_floor : float
        Least effective dead time to count on [s].

    Returns
    -------
    Tuning
        `reached` is False when no gain keeps every criterion; the settings then keep the
        largest common share of all of them. Where the model sets no limit to the gain, a
        remark of level "stop" says so and the settings rest on an assumed dead time.

    Notes
    -----
    PID keeps Ti >= 4 Td, so that every controller equation can hold the result.
    """
    held = raised(model, least_dead_time(model, kind, dead_time_floor))
    pattern = Controller(
        kind=kind,
        gain=1.0,
        action=action_for_model(model),
        setpoint_weight=setpoint_weight,
        derivative_setpoint_weight=derivative_setpoint_weight,
        pv_filter=pv_filter,
        scan=scan,
        compute_delay=compute_delay,
    )
    job = Job(
        model=held,
        pattern=pattern,
        ratio=derivative_filter_ratio,
        fixed_filter=derivative_filter,
        scales=time_scales(held, pattern),
    )
    return _tuned(job, criteria)


def least_dead_time(model: ProcessModel, kind: Kind, floor: float) -> float:
    """Give the dead time below which the effective one would be less than is believable [s].

    Parameters
    ----------
    model : ProcessModel
        Its lags and inverse zeros make up the rest of the effective dead time.
    kind : {"P", "I", "PI", "PD", "PID"}
        Derivative action sees past one lag more.
    floor : float
        Least effective dead time [s].
    """
    if floor == 0.0:
        return 0.0
    hidden = model.effective_dead_time(kept=2 if kind in ("PD", "PID") else 1) - model.dead_time
    return max(floor - hidden, 0.0)


def raised(model: ProcessModel, least: float) -> ProcessModel:
    """Give the model with at least that dead time.

    Parameters
    ----------
    model : ProcessModel
    least : float
        [s].
    """
    return model if model.dead_time >= least else replace(model, dead_time=least)


def _tuned(job: Job, criteria: Criteria) -> Tuning:
    remarks: list[Caution] = []
    best = fastest(job, criteria)
    if best is not None and not np.isfinite(best.gain):
        job, assumed = _with_assumed_dead_time(job)
        remarks.append(remark.no_gain_limit(assumed))
        best = fastest(job, criteria)
    reached, asked = best is not None, criteria
    if best is None:
        share, best = largest_share(job, criteria)
        if best is None:
            return _without_settings(job, remarks)
        asked = eased(criteria, share)
    controller, low, low_by, binding = _exact(job, best, asked)
    if simulated(criteria):
        over = excess(job.model, controller, criteria)
        within = None
        if reached and over.value > TOLERANCE:
            within = _within_simulated(job, criteria, controller, low)
            reached = within is not None
        if within is not None:
            controller, low, low_by, binding = within
        elif over.value > TOLERANCE:
            remarks.append(remark.simulated_above(job.model, controller, criteria, over.by))
    m = margins(job.model, controller)
    if asked is not criteria:
        remarks.append(remark.unreached(criteria, m, cures(job, criteria)))
    if job.pattern.kind == "PID" and controller.derivative_time == 0.0:
        remarks.append(remark.NO_DERIVATIVE)
    if np.isfinite(low) and low > 0.0:
        remarks.append(remark.lower_end(low, low_by, controller.gain))
    return Tuning(
        model=job.model,
        controller=controller,
        margins=m,
        prediction=predict(job.model, controller),
        binding=binding,
        reached=reached,
        remarks=tuple(remarks),
    )


def _with_assumed_dead_time(job: Job) -> tuple[Job, float]:
    assumed = _UNSEEN * float(job.scales.min())
    return replace(job, model=replace(job.model, dead_time=assumed)), assumed


def _exact(job: Job, best: Shape, criteria: Criteria) -> tuple[Controller, float, int, str]:
    """Refine the gain of one shape; give the controller, the range's lower end and what sets each end."""
    controller = job.shape(best.integral, best.derivative, best.gain)
    r = ends(job, controller, criteria)
    by = int(r.high_by[0])
    # Where the coarse and the fine grid differ about a gap of no width, the coarse one stands.
    if np.isfinite(r.high[0]):
        controller = replace(controller, gain=float(r.high[0]))
    return controller, float(r.low[0]), int(r.low_by[0]), NAMES[by] if by >= 0 else NAMES[0]


def _within_simulated(
    job: Job, criteria: Criteria, start: Controller, low: float
) -> tuple[Controller, float, int, str] | None:
    """Give the fastest settings that also keep overshoot and CO peak, or None."""
    if not job.integrates:
        found = gain_within(job.model, start, low, criteria)
        return None if found is None else (found[0], low, -1, found[1])
    shape = fastest_within(job, criteria, start)
    if shape is None:
        return None
    top = job.shape(shape.integral, shape.derivative, shape.gain)
    r = ends(job, top, criteria)
    if not np.isfinite(r.high[0]):
        return None
    top = replace(top, gain=float(r.high[0]))
    found = gain_within(job.model, top, float(r.low[0]), criteria, guess=shape.gain)
    if found is None:
        return None
    controller, by = found
    # Where a longer integral time alone brought the overshoot down, a margin binds again.
    return controller, float(r.low[0]), int(r.low_by[0]), by or NAMES[max(int(r.high_by[0]), 0)]


def cures(job: Job, criteria: Criteria) -> tuple[str, ...]:
    """Say what would reach criteria that cannot be reached as things are.

    Parameters
    ----------
    job : Job
    criteria : Criteria

    Returns
    -------
    tuple of str
        A richer controller, or less dead time, whichever would; empty if none of those tried.
    """
    found = []
    for kind in _RICHER[job.pattern.kind]:
        if fastest(replace(job, pattern=replace(job.pattern, kind=kind)), criteria) is not None:
            found.append(f"a {kind} controller")
            break
    dead_time = job.model.dead_time
    for share in _LESS_DEAD_TIME if dead_time > 0.0 else ():
        if fastest(replace(job, model=replace(job.model, dead_time=share * dead_time)), criteria) is not None:
            found.append(f"a dead time of {share * dead_time:.2g} s instead of {dead_time:.2g} s")
            break
    return tuple(found)


def _without_settings(job: Job, remarks: list[Caution]) -> Tuning:
    """No gain of this kind of controller closes a stable loop: say so, with the gain at nothing."""
    controller = job.shape(1.0 if job.pattern.kind in ("I", "PI", "PID") else np.inf, 0.0, 1e-12)
    remarks.append(remark.no_stabilising_gain(job.model, job.pattern.kind))
    return Tuning(
        model=job.model,
        controller=controller,
        margins=margins(job.model, controller),
        prediction=predict(job.model, controller),
        binding="phase_margin",
        reached=False,
        remarks=tuple(remarks),
    )
