"""The search for the fastest settings that keep every criterion a frequency response can judge."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from pipeline.loop.metrics import noise_gain
from pipeline.loop.stack import stack_loops
from pipeline.loop.sweep import ALWAYS_FOLLOWED, FINE, Grid
from pipeline.tuning.criteria import NAMES, GainRange, gain_range

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from fitters.process import ProcessModel
    from pipeline.loop.stack import LoopStack
    from pipeline.loop.types import Controller
    from pipeline.tuning.types import Criteria

    Reals = NDArray[np.float64]

#: A derivative time above a quarter of the integral time has no series equation, so no
#: controller of that kind could be set to it.
MOST_DERIVATIVE = 0.25
#: Grid of the search.
SEARCH_GRID = Grid(per_decade=20, floor=np.inf, reach=1e2)
_LOUD_GRID = replace(SEARCH_GRID, floor=0.25)
#: Integral times of a PI lie between the first share of the fastest and the second of the sum of
#: the loop's own times [1].
_SHORTEST, _LONGEST = 0.1, 60.0
#: Derivative times tried first [share of the integral time].
_SHARES = np.array([0.0, 0.03, 0.08, 0.14, 0.2, MOST_DERIVATIVE])
#: Times tried first, and rounds of closer ones.
_TIMES = {"PI": 24, "PD": 24, "PID": 14}
_ROUNDS = 3
#: Criteria that limit the speed and not the robustness, and the share of the speed that is as good [1].
_SPEED_LIMITS = ("closed_loop_time", "crossover")
_NEARLY_AS_FAST = 0.9
#: How much closer together the next round's times are [1], and how far about the best the first
#: round's derivative times go [share of the integral time].
_CLOSER, _SHARE_STEP = 3.5, 0.06
#: Halvings of the common share of all criteria, at first and in each closer round.
_HALVINGS, _CLOSER_HALVINGS = 8, 5
#: How much a closer look may better the common share [1].
_BETTER = 1.08


@dataclass(frozen=True, slots=True, kw_only=True)
class Shape:
    """Integral and derivative time [s], the largest gain found for them [CO unit / PV unit], what limits it."""

    integral: float
    derivative: float
    gain: float
    by: str = ""


@dataclass(frozen=True, kw_only=True)
class Job:
    """One tuning: model with the dead-time floor, controller pattern, what may be varied.

    Attributes
    ----------
    model : ProcessModel
    pattern : Controller
    ratio : float
        Derivative time over its filter [1].
    fixed_filter : float or None
        The derivative's filter where it does not follow the derivative time [s].
    scales : (n,) ndarray
        The loop's own times [s].
    """

    model: ProcessModel
    pattern: Controller
    ratio: float
    fixed_filter: float | None
    scales: Reals

    @property
    def integrates(self) -> bool:
        """Whether the controller has integral action beside its gain."""
        return self.pattern.kind in ("PI", "PID")

    def shape(self, integral: float, derivative: float, gain: float = 1.0) -> Controller:
        """Give the controller with these times and this gain.

        Parameters
        ----------
        integral, derivative : float
            [s].
        gain : float
            [CO unit / PV unit].
        """
        return replace(
            self.pattern,
            gain=gain,
            integral_time=integral,
            derivative_time=derivative,
            derivative_filter=filter_time(derivative, self.ratio, self.fixed_filter),
        )

    def speed(self, shape: Shape) -> float:
        """Give what is maximised: integral gain, or gain without integral action.

        Parameters
        ----------
        shape : Shape
        """
        return shape.gain / shape.integral if self.integrates else shape.gain


def filter_time(derivative: float, ratio: float, fixed: float | None) -> float:
    """Give the derivative's filter time: fixed, or a share of the derivative time; none without derivative.

    Parameters
    ----------
    derivative : float
        [s].
    ratio : float
        Derivative time over its filter [1].
    fixed : float or None
        [s].
    """
    if derivative == 0.0:
        return 0.0
    return derivative / ratio if fixed is None else fixed


def time_scales(model: ProcessModel, pattern: Controller) -> Reals:
    """Give the loop's own times: lags, zeros, dead time, filters [s].

    Parameters
    ----------
    model : ProcessModel
    pattern : Controller
    """
    roots = np.abs(np.concatenate([model.poles, model.zeros]))
    late = [model.dead_time + 0.5 * pattern.scan + pattern.compute_delay, pattern.pv_filter]
    scales = np.concatenate([1.0 / roots[roots > 0.0], [x for x in late if x > 0.0]])
    if scales.size:
        return scales
    return np.array([1.0 / abs(model.gain) if model.integrators and model.gain else 1.0])


def ranges(job: Job, criteria: Criteria, integral: Reals, derivative: Reals) -> GainRange:
    """Give the gains each pair of times may have, on the search's coarse grid.

    Parameters
    ----------
    job : Job
    criteria : Criteria
    integral, derivative : (m,) ndarray
        [s].
    """
    shapes = [job.shape(float(i), float(d)) for i, d in zip(integral, derivative, strict=True)]
    loops, noise = stack_loops([job.model], shapes), _noise(shapes, criteria)
    r = gain_range(loops, criteria, SEARCH_GRID, noise=noise)
    loud = _loud(loops, r.high)
    if loud.size == 0:
        return r
    # There the dead time must be followed on, which takes the gain to be known nearly.
    found, high, low, by = r.high[loud], r.high.copy(), r.low.copy(), r.high_by.copy()
    again = gain_range(
        loops.scaled(found, loud), criteria, _LOUD_GRID, noise=None if noise is None else noise[loud] * found
    )
    high[loud], low[loud], by[loud] = again.high * found, again.low * found, again.high_by
    return replace(r, high=high, low=low, high_by=by)


def _loud(loops: LoopStack, high: Reals) -> NDArray[np.intp]:
    """Give the rows whose gain is still heard beyond the turns of the dead time that every grid follows."""
    rows = np.flatnonzero(np.isfinite(high) & (loops.delay > 0.0))
    if rows.size == 0:
        return rows
    end = ALWAYS_FOLLOWED / loops.delay[rows]
    return rows[np.abs(loops.response(end, rows)) * high[rows] > _LOUD_GRID.floor]


def _noise(shapes: list[Controller], criteria: Criteria) -> Reals | None:
    return None if criteria.noise_gain is None else np.array([noise_gain(c) for c in shapes])


def ends(job: Job, near: Controller, criteria: Criteria) -> GainRange:
    """Give the exact range of gains for one shape, on a grid that suits a gain near the answer.

    Parameters
    ----------
    job : Job
    near : Controller
    criteria : Criteria
    """
    r = gain_range(
        stack_loops([job.model], [near]),
        criteria,
        FINE,
        noise=_noise([near], criteria),
        exact=True,
    )
    return replace(r, low=r.low * near.gain, high=r.high * near.gain)


def fastest(job: Job, criteria: Criteria) -> Shape | None:
    """Search integral and derivative time for the largest speed: a coarse grid, then closer ones.

    Parameters
    ----------
    job : Job
    criteria : Criteria

    Returns
    -------
    Shape or None
        None where no settings keep every criterion; an infinite gain where nothing limits it.
    """
    times, shares = _first_grid(job)
    found = _candidates(job, criteria, times, shares)
    # With derivative action and without are two hills: a closer look is due to the top of each.
    tops = [max(hill, key=job.speed) for hill in _hills(found)]
    if not tops or times.size == 1 or not all(np.isfinite(top.gain) for top in tops):
        return max(tops, key=job.speed, default=None)
    best = max((_closer(job, criteria, top, _step(times)) for top in tops), key=job.speed)
    return _firmest(job, best, found) if best.by in _SPEED_LIMITS else best


def _firmest(job: Job, best: Shape, found: list[Shape]) -> Shape:
    """Where speed itself is limited, nearly the same speed can be had with much more gain: take that.

    Integral action alone would answer as fast, but hold the process by nothing.
    """
    near = [s for s in found if job.speed(s) >= _NEARLY_AS_FAST * job.speed(best)]
    return max([*near, best], key=lambda s: s.gain)


def _hills(found: list[Shape]) -> list[list[Shape]]:
    hills = [s for s in found if s.derivative == 0.0], [s for s in found if s.derivative > 0.0]
    return [hill for hill in hills if hill]


def _closer(job: Job, criteria: Criteria, best: Shape, step: float) -> Shape:
    for closeness in range(_ROUNDS):
        around = _candidates(job, criteria, *_around(job, best, step, closeness))
        best = max([*around, best], key=job.speed)
        step /= _CLOSER
    return best


def _first_grid(job: Job) -> tuple[Reals, Reals]:
    """Give the times varied (a PD's derivative time, else the integral time) and derivative shares."""
    kind = job.pattern.kind
    if kind in ("P", "I"):
        return np.array([1.0 if kind == "I" else np.inf]), np.zeros(1)
    low, high = _SHORTEST * float(job.scales.min()), _LONGEST * float(job.scales.sum())
    times = np.geomspace(low, high, _TIMES[kind])
    return (times, _SHARES) if kind == "PID" else (times, np.zeros(1))


def _step(times: Reals) -> float:
    return float(np.log(times[1] / times[0])) if times.size > 1 else 0.0


def _around(job: Job, best: Shape, step: float, closeness: int) -> tuple[Reals, Reals]:
    """Give times and derivative shares about the best so far, closer together from round to round."""
    centre = best.derivative if job.pattern.kind == "PD" else best.integral
    if job.pattern.kind != "PID" or best.derivative == 0.0:
        return centre * np.exp(np.linspace(-step, step, 7)), np.zeros(1)
    wide = _SHARE_STEP / 2.0**closeness
    shares = best.derivative / best.integral + np.linspace(-wide, wide, 5)
    shares = np.unique(np.clip(shares, 0.0, MOST_DERIVATIVE))
    return centre * np.exp(np.linspace(-step, step, 7)), shares


def _candidates(job: Job, criteria: Criteria, times: Reals, shares: Reals) -> list[Shape]:
    t, s = (g.ravel() for g in np.meshgrid(times, shares, indexing="ij"))
    integral, derivative = t, s * np.where(np.isfinite(t), t, 0.0)
    if job.pattern.kind == "PD":
        integral, derivative = np.full(t.size, np.inf), t
    r = ranges(job, criteria, integral, derivative)
    return [
        Shape(
            integral=float(integral[k]),
            derivative=float(derivative[k]),
            gain=float(r.high[k]),
            by=NAMES[int(r.high_by[k])] if r.high_by[k] >= 0 else "",
        )
        for k in np.flatnonzero(~np.isnan(r.high))
    ]


def eased(criteria: Criteria, share: float) -> Criteria:
    """Ask for only a share of every margin: angle, gain margin beyond one, distance 1/Ms and 1/Mt.

    Parameters
    ----------
    criteria : Criteria
    share : float
        [1].
    """
    pm, gm = criteria.phase_margin, criteria.gain_margin
    ms, mt = criteria.max_sensitivity, criteria.max_complementary
    return replace(
        criteria,
        phase_margin=None if pm is None else pm * share,
        gain_margin=None if gm is None else gm**share,
        max_sensitivity=None if ms is None else ms / share,
        max_complementary=None if mt is None else mt / share,
    )


def largest_share(job: Job, criteria: Criteria) -> tuple[float, Shape | None]:
    """Find the largest common share of all criteria that some settings keep.

    Parameters
    ----------
    job : Job
    criteria : Criteria

    Returns
    -------
    share : float
    shape : Shape or None
        None where no settings make the loop stable.
    """
    times, shares = _first_grid(job)
    halvings = _HALVINGS if times.size > 1 else 2 * _HALVINGS  # no closer rounds follow
    low, best = _raised(job, criteria, times, shares, 0.0, 1.0, halvings)
    step = _step(times)
    for closeness in range(_ROUNDS if best is not None and times.size > 1 else 0):
        assert best is not None
        top, around = min(1.0, low * _BETTER), _around(job, best, step, closeness)
        share, closer = _raised(job, criteria, *around, low, top, _CLOSER_HALVINGS)
        low, best = (share, closer) if closer is not None else (low, best)
        step /= _CLOSER
    if best is None:
        return low, None
    # The search's coarse grid closes a gap a little early: press on with the exact one.
    high = min(1.0, low * 1.01)
    for _ in range(10):
        middle = 0.5 * (low + high)
        r = ends(job, job.shape(best.integral, best.derivative, best.gain), eased(criteria, middle))
        if np.isfinite(r.high[0]):
            low, best = middle, replace(best, gain=float(r.high[0]))
        else:
            high = middle
    return low, best


def _raised(
    job: Job, criteria: Criteria, times: Reals, shares: Reals, low: float, high: float, halvings: int
) -> tuple[float, Shape | None]:
    best = None
    for _ in range(halvings):
        middle = 0.5 * (low + high)
        found = _candidates(job, eased(criteria, middle), times, shares)
        if found:
            low, best = middle, max(found, key=job.speed)
        else:
            high = middle
    return low, best
