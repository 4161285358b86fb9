"""Criteria that only a simulation can judge: the overshoot and the output's peak."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from pipeline.loop.batch_response import batch_final, batch_overshoot, batch_setpoint
from pipeline.loop.simulate import overshoot, predict
from pipeline.loop.stack import stack_loops
from pipeline.loop.sweep import frequency_grid, gain_crossings, sweep
from pipeline.tuning.search import MOST_DERIVATIVE, SEARCH_GRID, Job, Shape, ranges

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from fitters.process import ProcessModel
    from pipeline.loop.types import Controller
    from pipeline.tuning.types import Criteria

    Reals = NDArray[np.float64]

#: A simulated criterion is met to this [% of overshoot, or % of the CO peak].
TOLERANCE = 0.005
#: Gains tried downwards [share of the largest].
_LADDER = np.geomspace(1.0, 0.03, 12)
#: The same for the search among integral times.
_COARSE_LADDER = np.array([1.0, 0.8, 0.6, 0.42, 0.28, 0.16])
#: Horizon and points of the search's responses [1 / gain crossover], [1].
_HORIZON, _POINTS = 60.0, 256
#: Horizon of the responses that show a slow integral term's peak [integral time].
_SLOW_HORIZON = 4.0
#: What those responses may miss of a peak [% of overshoot].
_COARSE_ERROR = 0.1
#: Integral times tried around the one the margins chose [ln], derivative times around theirs
#: [share], and rounds of closer ones.
_AWAY = np.linspace(-0.6, 3.0, 10)
_SHARES = np.array([0.0, 0.3, 0.6, 1.0, 1.4])
_ROUNDS = 3


@dataclass(frozen=True, slots=True, kw_only=True)
class Excess:
    """How far a loop exceeds the simulated criterion it exceeds most.

    Attributes
    ----------
    value : float
        Overshoot beyond its limit [%] or CO peak beyond its limit [% of the limit]; below zero within.
    by : str
        "overshoot" or "co_peak".
    """

    value: float
    by: str


def excess(model: ProcessModel, controller: Controller, criteria: Criteria) -> Excess:
    """Judge one stable loop by simulation.

    Parameters
    ----------
    model : ProcessModel
    controller : Controller
    criteria : Criteria
        With a limit on the overshoot or the CO peak.
    """
    found = []
    if criteria.overshoot is not None:
        found.append(Excess(value=overshoot(model, controller) - criteria.overshoot, by="overshoot"))
    if criteria.co_peak is not None:
        peak = predict(model, controller).co_peak
        found.append(Excess(value=100.0 * (peak / criteria.co_peak - 1.0), by="co_peak"))
    return max(found, key=lambda e: e.value)


def simulated(criteria: Criteria) -> bool:
    """Tell whether any criterion needs a simulation.

    Parameters
    ----------
    criteria : Criteria
    """
    return criteria.overshoot is not None or criteria.co_peak is not None


def gain_within(
    model: ProcessModel, top: Controller, low: float, criteria: Criteria, guess: float | None = None
) -> tuple[Controller, str] | None:
    """Give the largest gain from the top down at which the simulated criteria hold.

    Parameters
    ----------
    model : ProcessModel
    top : Controller
        At the largest gain to try.
    low : float
        Smallest gain to try [CO unit / PV unit].
    criteria : Criteria
    guess : float, optional
        A gain near the answer [CO unit / PV unit].

    Returns
    -------
    tuple of (Controller, str) or None
        With the criterion that binds, "" where the top keeps all; None where no gain in the
        range keeps them.
    """
    by = ""

    def f(gain: float) -> float:
        nonlocal by
        e = excess(model, replace(top, gain=gain), criteria)
        by = e.by
        return e.value

    above, over = top.gain, f(top.gain)
    if over <= TOLERANCE:
        return top, ""
    below, value = above, over
    steps = [top.gain * float(share) for share in _LADDER[1:]]
    if guess is not None:
        # A good guess brackets the answer between itself and its neighbours.
        steps = sorted({g for g in (1.02 * guess, guess, 0.98 * guess) if g < top.gain}, reverse=True) + [
            g for g in steps if g < 0.98 * guess
        ]
    for below in steps:
        if below < low:
            return None
        value = f(below)
        if value <= 0.0:
            break
        above, over = below, value
    else:
        return None
    gain = _meet(f, below, value, above, over)
    return replace(top, gain=gain), by


def _meet(f: Callable[[float], float], a: float, fa: float, b: float, fb: float) -> float:
    """Close in on f = 0 from below by false position with halving (Illinois)."""
    for _ in range(40):
        if -fa <= TOLERANCE or abs(b - a) < 1e-9 * abs(b):
            break
        x = (a * fb - b * fa) / (fb - fa)
        # Aim a little low: the answer must keep the limit.
        x = min(max(x, min(a, b) + 0.02 * abs(b - a)), max(a, b) - 0.02 * abs(b - a))
        fx = f(x)
        if fx <= 0.0:
            a, fa = x, fx
            fb *= 0.5
        else:
            b, fb = x, fx
    return a


def fastest_within(job: Job, criteria: Criteria, start: Controller) -> Shape | None:
    """Search the integral time whose largest gain within all criteria, simulated ones too, is fastest.

    Parameters
    ----------
    job : Job
        Of a PI or PID.
    criteria : Criteria
    start : Controller
        The fastest by margins alone.

    Returns
    -------
    Shape or None
        Its gain is read off coarse responses: near, not exact.
    """
    share = start.derivative_time / start.integral_time
    shares = np.unique(np.clip(share * _SHARES, 0.0, MOST_DERIVATIVE))
    best = _best(job, criteria, start.integral_time * np.exp(_AWAY), shares)
    step, wide = float(_AWAY[1] - _AWAY[0]), 0.25 * share
    for _ in range(_ROUNDS if best is not None else 0):
        assert best is not None
        times = best.integral * np.exp(step * np.linspace(-1.0, 1.0, 5))
        near = best.derivative / best.integral + wide * np.linspace(-1.0, 1.0, 5)
        near = np.unique(np.clip(near, 0.0, MOST_DERIVATIVE))
        closer = _best(job, criteria, times, near)
        if closer is not None and job.speed(closer) > job.speed(best):
            best = closer
        step, wide = step / 2.5, wide / 2.0
    return best


def _best(job: Job, criteria: Criteria, times: Reals, shares: Reals) -> Shape | None:
    """Give the fastest of some times, the gain of each read off a ladder of simulated ones."""
    t, s = (g.ravel() for g in np.meshgrid(times, shares, indexing="ij"))
    r = ranges(job, criteria, t, s * t)
    tops = [
        job.shape(float(t[i]), float(s[i] * t[i]), float(r.high[i]))
        for i in np.flatnonzero(np.isfinite(r.high))
    ]
    if not tops:
        return None
    loops = stack_loops([job.model], tops)
    crossings = gain_crossings(sweep(loops, frequency_grid(loops, SEARCH_GRID)))
    highest = np.full(len(tops), np.inf)
    highest[crossings.row] = crossings.omega  # rows rise, and within a row the frequency
    horizon = loops.delay + _HORIZON / highest
    rungs = [replace(top, gain=top.gain * float(x)) for top in tops for x in _COARSE_LADDER]
    beyond = _beyond(job, criteria, rungs, np.repeat(horizon, _COARSE_LADDER.size))
    found: list[Shape] = []
    lows = r.low[np.isfinite(r.high)]
    for top, over, low in zip(tops, beyond.reshape(len(tops), -1), lows, strict=True):
        good = np.flatnonzero(over <= 0.0)
        if good.size == 0:
            continue
        share, k = float(_COARSE_LADDER[good[0]]), int(good[0])
        if k > 0:
            share += float((_COARSE_LADDER[k - 1] - share) * over[k] / min(over[k] - over[k - 1], -1e-12))
        if share * top.gain >= low:
            found.append(
                Shape(integral=top.integral_time, derivative=top.derivative_time, gain=share * top.gain)
            )
    return max(found, key=job.speed, default=None)


def _beyond(job: Job, criteria: Criteria, controllers: list[Controller], horizon: Reals) -> Reals:
    """Give how far each controller exceeds the simulated criteria, coarsely; see `Excess`."""
    beyond = np.full(len(controllers), -np.inf)
    if criteria.overshoot is not None:
        _, pv = batch_setpoint([job.model], controllers, horizon=horizon, points=_POINTS)
        beyond = (
            batch_overshoot(pv, batch_final([job.model], controllers)) - criteria.overshoot + _COARSE_ERROR
        )
    if criteria.co_peak is not None:
        peaks = np.array([predict(job.model, c).co_peak for c in controllers])
        beyond = np.maximum(beyond, 100.0 * (peaks / criteria.co_peak - 1.0))
    return beyond
