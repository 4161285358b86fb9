"""The largest gain that keeps an overshoot, found by simulation."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from pipeline.loop.simulate import overshoot

if TYPE_CHECKING:
    from fitters.process import ProcessModel
    from pipeline.loop.types import Controller

#: Overshoot is met to this [%].
OVERSHOOT_TOLERANCE = 0.005
#: Gains tried downwards for the overshoot [share of the largest].
_LADDER = np.geomspace(1.0, 0.03, 12)


def gain_for_overshoot(
    model: ProcessModel, top: Controller, low: float, limit: float, *, coarse: bool = False
) -> Controller | None:
    """Give the largest gain from the top down at which the overshoot is within the limit.

    Parameters
    ----------
    model : ProcessModel
    top : Controller
        At the largest gain to try.
    low : float
        Smallest gain to try [CO unit / PV unit].
    limit : float
        Overshoot to keep [%].
    coarse : bool
        A few tenths of a percent are near enough.

    Returns
    -------
    Controller or None
        None where no gain in the range keeps it.
    """

    def excess(gain: float) -> float:
        return overshoot(model, replace(top, gain=gain)) - limit

    above, over = top.gain, excess(top.gain)
    if over <= 0.0:
        return top
    for share in _LADDER[1:]:
        below = top.gain * float(share)
        if below < low:
            return None
        value = excess(below)
        if value <= 0.0:
            break
        above, over = below, value
    else:
        return None
    return replace(top, gain=_meet(excess, below, value, above, over, 0.3 if coarse else OVERSHOOT_TOLERANCE))


def _meet(f: Callable[[float], float], a: float, fa: float, b: float, fb: float, tolerance: float) -> float:
    """Close in on f = 0 from below by false position with halving (Illinois)."""
    for _ in range(40):
        if -fa <= tolerance or abs(b - a) < 1e-9 * abs(b):
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
