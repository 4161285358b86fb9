"""A set-point step with an output that has limits, and an integral term that knows them."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from pipeline.loop.controller import extra_dead_time, sign
from pipeline.loop.metrics import measure
from pipeline.loop.simulate import time_grid
from pipeline.loop.stepping import exponential
from pipeline.loop.types import Trajectory

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from fitters.process import ProcessModel
    from pipeline.loop.types import Controller

    Reals = NDArray[np.float64]

#: Most grid points stepped through one by one [1].
_MOST = 8000


@dataclass(frozen=True, slots=True, kw_only=True)
class LimitedStep:
    """A set-point step of a given size with a limited output.

    Attributes
    ----------
    size : float
        Step of the set point [PV unit].
    low, high : float
        How far the output may move down (below zero) and up from where it stands [CO unit].
    response : Trajectory
        PV and CO, as deviations from the start [PV unit, CO unit].
    limited_for : float
        Time the output stands at a limit [s].
    overshoot : float
        [% of the step].
    settling_time : float
        Until within 5 % for good [s]; inf if not within the response shown.
    """

    size: float
    low: float
    high: float
    response: Trajectory
    limited_for: float
    overshoot: float
    settling_time: float


def limited_step(
    model: ProcessModel, controller: Controller, *, size: float, low: float, high: float
) -> LimitedStep:
    """Simulate a set-point step through the output's limits.

    Parameters
    ----------
    model : ProcessModel
    controller : Controller
        Of a stable loop.
    size : float
        Step of the set point [PV unit].
    low, high : float
        How far the output may move down (zero or below) and up (zero or above) [CO unit].

    Returns
    -------
    LimitedStep

    Notes
    -----
    The controller is stepped on the simulation's own fine grid, its output held in between.
    At a limit the integral term stands still while the error would drive it further: the
    plainest protection against wind-up (common practice). Controllers that do it otherwise
    leave the limit a little sooner or later.
    """
    h, n = time_grid(model, controller)
    n = min(2 * n, _MOST)
    a, b, c, d = model.state_space()
    order = b.size
    block = np.zeros((order + 1, order + 1))
    block[:order, :order], block[:order, order] = a * h, b * h
    grown = exponential(block)
    step, force = grown[:order, :order], grown[:order, order]
    late = max(round((model.dead_time + extra_dead_time(controller)) / h), 1)
    term = _Terms(controller, h, size)
    pv, co = np.zeros(n), np.zeros(n)
    x, arrived = np.zeros(order), np.zeros(late)
    at_limit = 0
    for k in range(n):
        slot = k % late
        pv[k] = c @ x + d * arrived[slot]
        co[k], limited = term.output(float(pv[k]), low, high)
        at_limit += limited
        x = step @ x + force * arrived[slot]
        arrived[slot] = co[k]
    t = h * np.arange(n, dtype=float)
    numbers = measure(t, pv, size)
    for values in (t, pv, co):
        values.flags.writeable = False
    return LimitedStep(
        size=size,
        low=low,
        high=high,
        response=Trajectory(t=t, pv=pv, co=co),
        limited_for=at_limit * h,
        overshoot=numbers.overshoot,
        settling_time=numbers.settling_time,
    )


class _Terms:
    """The controller's terms from one grid point to the next."""

    def __init__(self, controller: Controller, h: float, setpoint: float) -> None:
        self.c, self.h, self.sp = controller, h, setpoint
        self.k = sign(controller.action) * controller.gain
        self.smooth, self.slow, self.integral = 0.0, 0.0, 0.0

    def output(self, pv: float, low: float, high: float) -> tuple[float, bool]:
        """Give the limited output, and whether it stands at a limit."""
        c = self.c
        self.smooth = _lagged(self.smooth, pv, c.pv_filter, self.h)
        error = self.sp - self.smooth
        wanted = self.integral
        if c.kind != "I":
            wanted += self.k * (c.setpoint_weight * self.sp - self.smooth)
        if c.kind in ("PD", "PID") and c.derivative_time > 0.0:
            lead = c.derivative_setpoint_weight * self.sp - self.smooth
            self.slow = _lagged(self.slow, lead, c.derivative_filter, self.h)
            wanted += self.k * c.derivative_time / c.derivative_filter * (lead - self.slow)
        given = min(max(wanted, low), high)
        if c.kind in ("I", "PI", "PID") and np.isfinite(c.integral_time):
            more = self.k / c.integral_time * error * self.h
            if given == wanted or more * (wanted - given) < 0.0:
                self.integral += more
        return given, given != wanted


def _lagged(state: float, value: float, tau: float, h: float) -> float:
    return value if tau <= 0.0 else state + (1.0 - float(np.exp(-h / tau))) * (value - state)
