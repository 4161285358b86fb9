"""The largest integral gain that keeps every criterion on the nominal model."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from pipeline.findings import Caution
from pipeline.loop.forms import action_for_model
from pipeline.loop.margins import margins
from pipeline.loop.simulate import overshoot, predict
from pipeline.loop.stack import stack_loops
from pipeline.loop.types import Controller
from pipeline.tuning import remarks as remark
from pipeline.tuning.criteria import NAMES, GainRange, gain_range
from pipeline.tuning.overshoot import OVERSHOOT_TOLERANCE, gain_for_overshoot
from pipeline.tuning.types import Criteria, Tuning

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from fitters.process import ProcessModel
    from pipeline.loop.types import Kind

    Reals = NDArray[np.float64]

#: Grids of the search and of the final answer.
_SEARCH_GRID = (24, np.inf)
_FINAL_GRID = (80, 0.02)
#: A derivative time above a quarter of the integral time has no series equation, so no
#: controller of that kind could be set to it.
MOST_DERIVATIVE = 0.25
#: Stand-in dead time where nothing limits the gain [share of the fastest lag]: less than
#: this a bump test does not show.
_UNSEEN = 0.1


@dataclass(frozen=True, kw_only=True)
class _Job:
    """One tuning: model with the dead-time floor, controller pattern, what may be varied."""

    model: ProcessModel
    pattern: Controller
    ratio: float
    scales: Reals

    def shape(self, integral: float, derivative: float, gain: float = 1.0) -> Controller:
        """Give the controller with these times and this gain."""
        return replace(
            self.pattern,
            gain=gain,
            integral_time=integral,
            derivative_time=derivative,
            derivative_filter=derivative / self.ratio,
        )

    def speed(self, high: Reals, integral: Reals) -> Reals:
        """Give what is maximised: integral gain, or gain without integral action."""
        return high / integral if self.pattern.kind in ("PI", "PID") else high


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
    dead_time_floor : float
        Least dead time to count on [s].

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
    held = replace(model, dead_time=max(model.dead_time, dead_time_floor))
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
    found = _tuned(held, pattern, criteria, derivative_filter_ratio)
    if kind != "PID":
        return found
    # A derivative time of nothing is a PID's to choose: it must not end below the PI.
    plain = _tuned(held, replace(pattern, kind="PI"), criteria, derivative_filter_ratio)
    if plain.reached and (not found.reached or _integral_gain(plain) > _integral_gain(found)):
        return replace(
            plain,
            controller=replace(plain.controller, kind="PID"),
            remarks=(*plain.remarks, remark.NO_DERIVATIVE),
        )
    return found


def _integral_gain(tuning: Tuning) -> float:
    return tuning.controller.gain / tuning.controller.integral_time


def _tuned(held: ProcessModel, pattern: Controller, criteria: Criteria, ratio: float) -> Tuning:
    """Tune one kind of controller on one model."""
    remarks: list[Caution] = []
    job = _Job(model=held, pattern=pattern, ratio=ratio, scales=_time_scales(held, pattern))
    best = _search(job, criteria)
    if best is not None and not np.isfinite(best[2]):
        assumed = _UNSEEN * float(job.scales.min())
        remarks.append(
            Caution(
                code="no-gain-limit",
                level="stop",
                value=0.0,
                limit=assumed,
                text=f"On this model no criterion ever limits the gain, which no real loop allows. The settings "
                f"assume a dead time of {assumed:.3g} s; give the scan, the filter or a dead time to count on.",
            )
        )
        job = replace(job, model=replace(held, dead_time=assumed))
        best = _search(job, criteria)
    reached, asked = best is not None, criteria
    share = 1.0
    if best is None:
        share, best = _best_share(job, criteria)
        if best is None:
            return _without_settings(job, remarks)
        asked = _eased(criteria, share)
    assert best is not None
    integral, derivative, _ = best
    controller = job.shape(integral, derivative, best[2])
    ends = _ends(job, controller, asked)
    low, by = float(ends.low[0]), int(ends.high_by[0])
    if np.isfinite(ends.high[0]):
        controller = replace(controller, gain=float(ends.high[0]))
    # Otherwise the coarse and the fine grid differ about a gap of no width: stay in the coarse one.
    binding = NAMES[by] if by >= 0 else "phase_margin"
    if criteria.overshoot is not None and reached:
        limited = _limit_overshoot(job, criteria, controller, low)
        if limited is None:
            reached = False
            remarks.append(remark.overshoot_above(job.model, controller, criteria.overshoot))
        elif limited is not controller:
            controller, binding = limited, "overshoot"
            ends = _ends(job, controller, asked)
            low = float(ends.low[0])
            if abs(float(ends.high[0]) / controller.gain - 1.0) < 1e-6 and ends.high_by[0] >= 0:
                # A longer integral time brought the overshoot down; there a margin binds again.
                binding = NAMES[int(ends.high_by[0])]
    elif criteria.overshoot is not None and overshoot(job.model, controller) > criteria.overshoot:
        remarks.append(remark.overshoot_above(job.model, controller, criteria.overshoot))
    m = margins(job.model, controller)
    if share < 1.0:
        remarks.append(
            remark.unreached(
                job.model, job.pattern.kind, criteria, m.phase_margin, m.gain_margin, m.max_sensitivity
            )
        )
    if np.isfinite(low) and low > 0.0:
        remarks.append(remark.lower_end(low, int(ends.low_by[0]), controller.gain))
    return Tuning(
        model=job.model,
        controller=controller,
        margins=m,
        prediction=predict(job.model, controller),
        binding=binding,
        reached=reached,
        remarks=tuple(remarks),
    )


def _time_scales(model: ProcessModel, pattern: Controller) -> Reals:
    """Give the loop's own times: lags, zeros, dead time, filters [s]."""
    roots = np.abs(np.concatenate([model.poles, model.zeros]))
    late = [model.dead_time + 0.5 * pattern.scan + pattern.compute_delay, pattern.pv_filter]
    scales = np.concatenate([1.0 / roots[roots > 0.0], [x for x in late if x > 0.0]])
    if scales.size:
        return scales
    return np.array([1.0 / abs(model.gain) if model.integrators and model.gain else 1.0])


def _evaluate(job: _Job, criteria: Criteria, integral: Reals, derivative: Reals) -> GainRange:
    shapes = [job.shape(float(i), float(d)) for i, d in zip(integral, derivative, strict=True)]
    return gain_range(
        stack_loops([job.model], shapes), criteria, per_decade=_SEARCH_GRID[0], floor=_SEARCH_GRID[1]
    )


def _ends(job: _Job, near: Controller, criteria: Criteria) -> GainRange:
    """Give the exact range of gains for one shape, on a grid that suits a gain near the answer."""
    r = gain_range(
        stack_loops([job.model], [near]),
        criteria,
        exact=True,
        per_decade=_FINAL_GRID[0],
        floor=_FINAL_GRID[1],
    )
    return replace(r, low=r.low * near.gain, high=r.high * near.gain)


def _search(job: _Job, criteria: Criteria) -> tuple[float, float, float] | None:
    """Search integral and derivative time for the largest speed: a coarse grid, then closer ones."""
    kind = job.pattern.kind
    if kind in ("P", "I"):
        one = np.array([1.0 if kind == "I" else np.inf])
        r = _evaluate(job, criteria, one, np.zeros(1))
        return None if np.isnan(r.high[0]) else (float(one[0]), 0.0, float(r.high[0]))
    low, high = 0.1 * float(job.scales.min()), 60.0 * float(job.scales.sum())
    shares = np.array([0.0])
    if kind == "PID":
        shares = np.array([0.03, 0.08, 0.14, 0.2, MOST_DERIVATIVE])
    count = {"PI": 36, "PD": 36, "PID": 20}[kind]
    times = np.geomspace(low, high, count)
    log_step = float(np.log(times[1] / times[0]))
    grid_t, grid_s = (g.ravel() for g in np.meshgrid(times, shares, indexing="ij"))
    best = _pick(job, criteria, grid_t, grid_s)
    span_s = 0.06
    for _ in range(3):
        if best is None or not np.isfinite(best[2]):
            return None if best is None else _as_times(job, best)
        t = best[0] * np.exp(np.linspace(-log_step, log_step, 11 if kind != "PID" else 7))
        s = np.array([best[1]])
        if kind == "PID":
            s = np.unique(np.clip(best[1] + np.linspace(-span_s, span_s, 5), 0.005, MOST_DERIVATIVE))
        grid_t, grid_s = (g.ravel() for g in np.meshgrid(t, s, indexing="ij"))
        closer = _pick(job, criteria, grid_t, grid_s)
        best = closer if closer is not None else best
        log_step, span_s = log_step / 4.0, span_s / 2.0
    return None if best is None else _as_times(job, best)


def _pick(job: _Job, criteria: Criteria, times: Reals, shares: Reals) -> tuple[float, float, float] | None:
    if job.pattern.kind == "PD":
        integral, derivative = np.full(times.size, np.inf), times
    else:
        integral, derivative = times, shares * times
    r = _evaluate(job, criteria, integral, derivative)
    if np.all(np.isnan(r.high)):
        return None
    k = int(np.nanargmax(job.speed(r.high, integral)))
    return float(times[k]), float(shares[k]), float(r.high[k])


def _as_times(job: _Job, best: tuple[float, float, float]) -> tuple[float, float, float]:
    if job.pattern.kind == "PD":
        return np.inf, best[0], best[2]
    return best[0], best[1] * best[0], best[2]


def _eased(criteria: Criteria, share: float) -> Criteria:
    """Ask for only a share of every margin: angle, gain margin beyond one, distance 1/Ms."""
    pm, gm, ms = criteria.phase_margin, criteria.gain_margin, criteria.max_sensitivity
    return replace(
        criteria,
        phase_margin=None if pm is None else pm * share,
        gain_margin=None if gm is None else gm**share,
        max_sensitivity=None if ms is None else 1.0 / (share * (1.0 / ms)),
    )


def _best_share(job: _Job, criteria: Criteria) -> tuple[float, tuple[float, float, float] | None]:
    """Bisect the largest share of all criteria that some settings keep."""
    low, high, best = 0.0, 1.0, None
    for _ in range(14):
        middle = 0.5 * (low + high)
        found = _search(job, _eased(criteria, middle))
        if found is None:
            high = middle
        else:
            low, best = middle, found
    if best is None:
        return low, best
    # The search's coarse grid closes a gap a little early: press on with the exact one.
    high = min(1.0, low * 1.01)
    for _ in range(10):
        middle = 0.5 * (low + high)
        ends = _ends(job, job.shape(*best), _eased(criteria, middle))
        if np.isfinite(ends.high[0]):
            low, best = middle, (best[0], best[1], float(ends.high[0]))
        else:
            high = middle
    return low, best


def _limit_overshoot(job: _Job, criteria: Criteria, start: Controller, low: float) -> Controller | None:
    """Give the fastest settings that also keep the overshoot; `start` itself if it does."""
    limit = criteria.overshoot
    assert limit is not None
    if overshoot(job.model, start) <= limit + OVERSHOOT_TOLERANCE:
        return start
    if job.pattern.kind not in ("PI", "PID"):
        return gain_for_overshoot(job.model, start, low, limit)
    share = start.derivative_time / start.integral_time

    def fastest(log_time: float) -> tuple[float, Controller | None]:
        time = float(np.exp(log_time))
        r = gain_range(
            stack_loops([job.model], [job.shape(time, share * time)]),
            criteria,
            per_decade=_SEARCH_GRID[0],
            floor=_SEARCH_GRID[1],
        )
        if not np.isfinite(r.high[0]):
            return -np.inf, None
        c = gain_for_overshoot(
            job.model, job.shape(time, share * time, float(r.high[0])), float(r.low[0]), limit, coarse=True
        )
        return (-np.inf, None) if c is None else (c.gain / time, c)

    at = np.log(start.integral_time) + np.linspace(-0.5, 2.0, 6)
    tried = [fastest(float(x)) for x in at]
    k = int(np.argmax([v for v, _ in tried]))
    if tried[k][1] is None:
        return None
    x, value = float(at[k]), tried[k]
    step = float(at[1] - at[0])
    for _ in range(3):
        step *= 0.5
        for side in (x - step, x + step):
            other = fastest(side)
            if other[0] > value[0]:
                x, value = side, other
    best = value[1]
    assert best is not None
    ends = _ends(job, best, criteria)
    if not np.isfinite(ends.high[0]):
        return None
    return gain_for_overshoot(job.model, replace(best, gain=float(ends.high[0])), float(ends.low[0]), limit)


def _without_settings(job: _Job, remarks: list[Caution]) -> Tuning:
    """No gain of this kind of controller closes a stable loop: say so, with the gain at nothing."""
    controller = job.shape(1.0 if job.pattern.kind in ("I", "PI", "PID") else np.inf, 0.0, 1e-12)
    remarks.append(
        Caution(
            code="no-stabilising-gain",
            level="stop",
            value=None,
            limit=None,
            text=f"No gain of a {job.pattern.kind} controller makes this loop stable. Choose another kind.",
        )
    )
    return Tuning(
        model=job.model,
        controller=controller,
        margins=margins(job.model, controller),
        prediction=predict(job.model, controller),
        binding="phase_margin",
        reached=False,
        remarks=tuple(remarks),
    )
