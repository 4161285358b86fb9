"""What the closed loop will do: set-point step, load step, and its stability seen in time."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.signal import lfilter

from pipeline.errors import UsageError
from pipeline.loop.controller import extra_dead_time, feedback_path, product, setpoint_path, sign
from pipeline.loop.metrics import StepNumbers, final_value, integral_value, measure, noise_gain
from pipeline.loop.stack import stack_loops
from pipeline.loop.stepping import Recursion, closed_loop, spectral_radius
from pipeline.loop.sweep import Grid, frequency_grid
from pipeline.loop.types import Prediction, Trajectory

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from fitters.process import ProcessModel
    from pipeline.loop.types import Controller

    Reals = NDArray[np.float64]
    Ratio = tuple[Reals, Reals]

#: Where feedback is felt is read off this grid.
_GRID = Grid(per_decade=20, floor=1.0)
#: Grid interval times the highest frequency at which the feedback is felt [rad]: the
#: interpolation error goes as its square over twelve, 1e-4.
_FINENESS = 0.035
#: Loop gain below which feedback is not felt [1].
_FELT = 0.3
#: Decay that counts as settled [1/e-foldings]: exp(-7) is 0.1 %.
_SETTLED = 7.0
#: Grid points of a response [1]: at least, at most.
_FEWEST, _MOST = 600, 60_000
#: Longest delay line [1].
_LONGEST_LINE = 160
#: The slowest decay is read from a grid this much coarser [1]: its error only moves the horizon.
_COARSER = 3
#: Points kept in a trajectory [1].
_KEPT = 4000


@dataclass(frozen=True, kw_only=True)
class _Plan:
    """Grid of a simulation: loop, dead time and interval [s], points."""

    loop: Ratio
    delay: float
    h: float
    n: int


def _ratio(model: ProcessModel, path: Ratio) -> Ratio:
    return product(path[0], model.numerator), product(path[1], model.denominator)


def _check(model: ProcessModel, controller: Controller) -> None:
    if (
        controller.kind in ("PD", "PID")
        and controller.derivative_time > 0.0
        and (controller.derivative_filter <= 0.0)
    ):
        raise UsageError(
            "A derivative without a filter cannot be predicted in time.",
            remedy="Give the derivative's filter, for instance a tenth of the derivative time.",
        )
    direct = model.high_frequency_gain * feedback_path(controller)[0][0]
    late = model.dead_time + extra_dead_time(controller)
    if (
        late == 0.0
        and feedback_path(controller)[0].size == feedback_path(controller)[1].size
        and (direct / feedback_path(controller)[1][0] == -1.0)
    ):
        raise UsageError(
            "Process and controller both answer at once and cancel: the loop has no solution.",
            remedy="Give the process a dead time or a lag, or the controller a PV filter.",
        )


def _plan(model: ProcessModel, controller: Controller) -> _Plan:
    """Choose interval and horizon from the loop itself."""
    _check(model, controller)
    loops = stack_loops([model], [controller])
    loop = _ratio(model, feedback_path(controller))
    delay = float(loops.delay[0])
    omega = frequency_grid(loops, _GRID)
    top, bottom = loops.parts(omega)
    felt = np.flatnonzero(np.abs(top) > _FELT * np.abs(bottom))
    if felt.size == 0:
        roots = np.concatenate([np.abs(np.roots(loop[1])), np.array([1.0 / delay if delay > 0.0 else 0.0])])
        fast = float(roots.max(initial=0.0)) or 1.0
    elif felt[-1] == omega.size - 1:
        # The gain never falls: the process's own poles and the dead time set the pace.
        marks = np.abs(np.concatenate([np.roots(loop[0]), np.roots(loop[1])]))
        fast = max(float(marks.max(initial=0.0)), 2.0 / delay if delay > 0.0 else 0.0)
    else:
        fast = float(omega[felt[-1]])
    # A runaway the feedback does not reach must still be followed.
    fast = max(fast, float(np.max(np.abs(model.unstable_poles), initial=0.0)))
    h = _FINENESS / fast
    if delay > 0.0:
        if delay >= h:
            h = delay / min(max(int(np.ceil(delay / h)), 8), _LONGEST_LINE)
        elif model.high_frequency_gain != 0.0:
            h = delay
    wide = delay / max(round(delay / h / _COARSER), 4) if delay > 4.0 * h else h
    rate = -np.log(max(spectral_radius(loop, delay=delay, h=wide), 1e-12)) / wide
    n = int(np.clip(_SETTLED / rate / h, _FEWEST, _MOST)) if rate > 0.0 else _FEWEST * 2
    return _Plan(loop=loop, delay=delay, h=h, n=n + int(delay / h) + 1)


def time_grid(model: ProcessModel, controller: Controller) -> tuple[float, int]:
    """Give the interval [s] and the number of points on which a loop is simulated.

    Parameters
    ----------
    model : ProcessModel
    controller : Controller
    """
    plan = _plan(model, controller)
    return plan.h, plan.n


def predict(model: ProcessModel, controller: Controller) -> Prediction:
    """Simulate a unit set-point step and a unit load step with exact dead time.

    Parameters
    ----------
    model : ProcessModel
    controller : Controller

    Returns
    -------
    Prediction
        The horizon is seven times the slowest closed-loop time constant, at least 600 and at
        most 60 000 intervals of a grid a thirtieth of the feedback's shortest time scale.

    Raises
    ------
    UsageError
        If the derivative has no filter, or the loop has no solution.
    """
    plan = _plan(model, controller)
    late = extra_dead_time(controller)
    to_sp = _ratio(model, setpoint_path(controller))
    to_load = (np.asarray(model.numerator), np.asarray(model.denominator))

    sp_run = closed_loop(plan.loop, to_sp, delay=plan.delay, h=plan.h)
    sp = sp_run.run(plan.n)
    load_run = closed_loop(plan.loop, to_load, delay=plan.delay, h=plan.h)
    load = load_run.run(plan.n)

    setpoint, co = _trajectory(controller, sp, sp_run, plan.delay, step=1.0)
    load_part, _ = _trajectory(controller, load, load_run, plan.delay - late, step=0.0)
    final = final_value(to_sp, plan.loop)
    m = measure(plan.delay + plan.h * np.arange(sp.size, dtype=float), sp, final)
    return Prediction(
        setpoint=setpoint,
        load=load_part,
        overshoot=m.overshoot,
        rise_time=m.rise_time,
        settling_time=m.settling_time,
        peak_time=m.peak_time,
        load_peak=float(np.max(np.abs(load), initial=0.0)),
        load_integrated_error=abs(integral_value(to_load, plan.loop)),
        co_peak=float(np.max(np.abs(co), initial=0.0)),
        noise_gain=noise_gain(controller),
    )


def step_numbers(model: ProcessModel, controller: Controller) -> StepNumbers:
    """Give only what a set-point step is measured by, several times faster than `predict`.

    Parameters
    ----------
    model : ProcessModel
    controller : Controller
    """
    plan = _plan(model, controller)
    to_sp = _ratio(model, setpoint_path(controller))
    sp = closed_loop(plan.loop, to_sp, delay=plan.delay, h=plan.h).run(plan.n)
    t = plan.delay + plan.h * np.arange(sp.size, dtype=float)
    return measure(t, sp, final_value(to_sp, plan.loop))


def overshoot(model: ProcessModel, controller: Controller) -> float:
    """Give only the overshoot of a set-point step [%].

    Parameters
    ----------
    model : ProcessModel
    controller : Controller
    """
    return step_numbers(model, controller).overshoot


def stable_in_time(model: ProcessModel, controller: Controller) -> bool:
    """Tell whether the simulated closed loop's free response dies out.

    Parameters
    ----------
    model : ProcessModel
    controller : Controller

    Returns
    -------
    bool
        From the growth of the time recursion over one interval; no frequency response and
        no count of encirclements takes part.
    """
    plan = _plan(model, controller)
    lead = feedback_path(controller)
    jump = model.high_frequency_gain * (lead[0][0] / lead[1][0] if lead[0].size == lead[1].size else 0.0)
    if plan.delay > 0.0 and abs(jump) >= 1.0:
        return False  # a jump of the PV comes round no smaller
    return spectral_radius(plan.loop, delay=plan.delay, h=plan.h) < 1.0


def _trajectory(
    controller: Controller, pv: Reals, run: Recursion, arrives: float, *, step: float
) -> tuple[Trajectory, Reals]:
    """Put a response on a grid that starts with the change, and work out the CO."""
    h = run.h
    ahead = arrives / h
    lead = round(ahead)
    stairs = run.staircase(pv.size)
    if abs(ahead - lead) < 1e-6:
        smooth, held = np.zeros(lead + pv.size), np.zeros(lead + pv.size)
        smooth[lead:], held[lead:] = pv - stairs, stairs
    else:
        n = int(ahead) + pv.size
        at = np.arange(n) * h
        smooth = np.interp(at, arrives + h * np.arange(pv.size), pv - stairs, left=0.0)
        late = np.floor((at - arrives) / h + 1e-9).astype(int)
        held = np.where(late >= 0, stairs[np.clip(late, 0, pv.size - 1)], 0.0)
    co = _output(controller, smooth, held, h, step)
    stride = max(1, -(-smooth.size // _KEPT))
    t = h * np.arange(smooth.size, dtype=float)
    keep = slice(None, None, stride)
    return Trajectory(t=_frozen(t[keep]), pv=_frozen((smooth + held)[keep]), co=_frozen(co[keep])), co


def _frozen(x: Reals) -> Reals:
    out = np.array(x, dtype=float)
    out.flags.writeable = False
    return out


def _lag(tau: float, smooth: Reals, held: Reals, h: float) -> tuple[Reals, Reals]:
    """Pass a signal through 1 / (1 + tau s): straight between points, its stairs held."""
    if tau <= 0.0:
        return smooth, held
    a = np.exp(-h / tau)
    slope = 1.0 - (1.0 - a) * tau / h
    out = lfilter([slope, 1.0 - a - slope], [1.0, -a], smooth)
    out += lfilter([0.0, 1.0 - a], [1.0, -a], held)
    return np.asarray(out, dtype=float), np.zeros_like(out)


def _integral(smooth: Reals, held: Reals, h: float) -> Reals:
    out = np.zeros(smooth.size)
    out[1:] = np.cumsum(0.5 * h * (smooth[1:] + smooth[:-1]) + h * held[:-1])
    return out


def _output(c: Controller, smooth: Reals, held: Reals, h: float, step: float) -> Reals:
    """Work out the CO from the PV: the controller's equation, term by term."""
    k = sign(c.action) * c.gain
    t = h * np.arange(smooth.size, dtype=float)
    fs, fh = _lag(c.pv_filter, smooth, held, h)
    pv = fs + fh
    co = np.zeros(smooth.size)
    if c.kind != "I":
        co += k * (c.setpoint_weight * step - pv)
    if c.kind in ("I", "PI", "PID") and np.isfinite(c.integral_time):
        # The filtered PV's integral is the PV's, less the lag's own content.
        area = _integral(smooth, held, h) - (c.pv_filter * pv if c.pv_filter > 0.0 else 0.0)
        co += k / c.integral_time * (step * t - area)
    if c.kind in ("PD", "PID") and c.derivative_time > 0.0:
        slow_s, slow_h = _lag(c.derivative_filter, fs, fh, h)
        weight = k * c.derivative_time / c.derivative_filter
        co += weight * (
            c.derivative_setpoint_weight * step * np.exp(-t / c.derivative_filter) - (pv - slow_s - slow_h)
        )
    return co
