"""A fitted process reduced to what published tuning rules are written for."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from pipeline.loop.forms import action_for_model
from pipeline.loop.margins import margins
from pipeline.loop.stack import stack_loops
from pipeline.loop.sweep import FINE
from pipeline.loop.types import Controller
from pipeline.tuning.criteria import gain_range
from pipeline.tuning.types import NO_CRITERIA

if TYPE_CHECKING:
    from fitters.process import ProcessModel

#: Poles this far off the real axis ring, and no half rule is for them [share of their size].
_REAL = 1e-3


@dataclass(frozen=True, slots=True, kw_only=True)
class FirstOrder:
    """A lag and a dead time, or with an infinite lag an integrator and a dead time.

    Attributes
    ----------
    gain : float
        Size of the static gain, or of the slope per second [PV unit / CO unit, or that per s].
    lag : float
        [s]; inf for an integrator.
    second_lag : float
        Zero where only one is kept [s].
    dead_time : float
        [s].
    """

    gain: float
    lag: float
    second_lag: float
    dead_time: float

    @property
    def integrates(self) -> bool:
        """Whether the process integrates."""
        return bool(np.isinf(self.lag))

    @property
    def slope(self) -> float:
        """First slope after the dead time [PV unit / CO unit / s]."""
        return self.gain if self.integrates else self.gain / self.lag if self.lag > 0.0 else np.inf


@dataclass(frozen=True, slots=True, kw_only=True)
class Ultimate:
    """The proportional gain that just sustains an oscillation, and its period [CO unit / PV unit, s]."""

    gain: float
    period: float


def first_order(model: ProcessModel, *, lags: int = 1) -> FirstOrder | None:
    """Reduce a process by the half rule.

    Parameters
    ----------
    model : ProcessModel
    lags : int
        Lags kept, one or two; an integrator counts as one.

    Returns
    -------
    FirstOrder or None
        None for a process that rings, runs away, integrates twice or has a zero in the left
        half-plane, which the half rule does not cover.

    References
    ----------
    Skogestad (2003), J. Process Control 13, 291-309, sec. 2: the largest neglected lag is
    shared by dead time and smallest lag kept, the others and inverse zeros go to the dead time.
    """
    poles = model.poles[np.abs(model.poles) > 0.0]
    rings = np.any(np.abs(poles.imag) > _REAL * np.abs(poles))
    ahead = model.zeros[model.zeros.real <= 0.0]
    if rings or ahead.size or model.unstable_poles.size or model.integrators > 1:
        return None
    own = np.sort(1.0 / np.abs(poles))[::-1].tolist()
    kept = [np.inf] * model.integrators + own
    kept += [0.0] * (lags - len(kept))
    kept, rest = kept[:lags], kept[lags:]
    late = model.dead_time + float(np.sum(1.0 / np.abs(model.inverse_zeros)))
    if rest:
        half = 0.5 * rest[0]
        late += half + sum(rest[1:])
        kept[-1] += half
    return FirstOrder(
        gain=abs(model.gain), lag=kept[0], second_lag=kept[1] if lags > 1 else 0.0, dead_time=late
    )


def ultimate(model: ProcessModel) -> Ultimate | None:
    """Give the ultimate gain and period under proportional control.

    Parameters
    ----------
    model : ProcessModel

    Returns
    -------
    Ultimate or None
        None where no gain makes the loop oscillate, or none makes it stable.
    """
    p = Controller(kind="P", gain=1.0, action=action_for_model(model))
    limit = float(gain_range(stack_loops([model], [p]), NO_CRITERIA, FINE, exact=True).high[0])
    if not np.isfinite(limit):
        return None
    m = margins(model, Controller(kind="P", gain=0.5 * limit, action=p.action))
    if not np.isfinite(m.phase_crossover):
        return None
    return Ultimate(gain=0.5 * limit * m.gain_margin, period=2.0 * np.pi / m.phase_crossover)
