"""Settings as they can really be entered: rounded to the controller's own steps, to the safe side."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from pipeline.loop.forms import Entered, Entry, enter, understand

if TYPE_CHECKING:
    from collections.abc import Callable

    from pipeline.loop.types import Controller

#: Where no step is known, settings are rounded to so many significant digits [1]: the most that
#: controllers commonly show.
_DIGITS = 4
#: Rounding to a step of its own makes this of a number that already lies on one [1].
_ON_STEP = 1e-9


def rounded(controller: Controller, entry: Entry) -> tuple[Controller, Entered]:
    """Round settings to what the controller can be set to.

    Parameters
    ----------
    controller : Controller
    entry : Entry

    Returns
    -------
    controller : Controller
        In the standard equation, with exactly the rounded numbers.
    entered : Entered
        The rounded numbers, in the entry's units. The gain and the integral action are
        rounded down, a proportional band and an integral time up: never faster than asked.

    Raises
    ------
    UsageError
        If the equation cannot hold the settings, or a span is missing.
    """
    exact = enter(controller, entry)
    less_gain = np.ceil if entry.proportional == "band" else np.floor
    less_integral = np.ceil if entry.integral in ("seconds per repeat", "minutes per repeat") else np.floor
    entered = Entered(
        proportional=_to(exact.proportional, entry.proportional_step, less_gain),
        integral=_to(exact.integral, entry.integral_step, less_integral),
        derivative=_to(exact.derivative, entry.derivative_step, np.round),
    )
    gain, integral_time, derivative_time = understand(entered, entry)
    assert gain is not None
    ratio = (
        controller.derivative_time / controller.derivative_filter if controller.derivative_filter else np.inf
    )
    return (
        replace(
            controller,
            gain=gain,
            integral_time=integral_time,
            derivative_time=derivative_time,
            derivative_filter=derivative_time / ratio,
        ),
        entered,
    )


def _to(value: float | None, step: float | None, way: Callable[[float], float]) -> float | None:
    if value is None or not np.isfinite(value) or value == 0.0:
        return value
    step = step or 10.0 ** (np.floor(np.log10(abs(value))) - _DIGITS + 1)
    count = value / step
    nearest = round(count)
    steps = nearest if abs(count - nearest) <= _ON_STEP * max(abs(count), 1.0) else way(count)
    # A value below one step is entered as one step: none would switch the action off.
    return float(f"{max(float(steps), 1.0) * step:.12g}")
