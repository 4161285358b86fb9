"""How fast a loop the log supports: up to where it knows the process's phase."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from pipeline.loop.stack import stack_loops
from pipeline.loop.types import Controller

if TYPE_CHECKING:
    from fitters.process import ProcessModel

#: What the process's phase may be off at the crossover [degrees], and for which share of the
#: plausible processes [%]: what is said of the phase margin then holds to about as much.
KNOWN_TO = 3.0
_SHARE = 90.0
#: Points of the frequency grid, and how far it goes beyond the process's own frequencies [1].
_POINTS, _REACH = 96, 30.0
#: Any controller will do: only the process's own phase counts.
_PLAIN = Controller(kind="P", gain=1.0, action="reverse")


def known_until(models: Sequence[ProcessModel], nominal: ProcessModel) -> float:
    """Give the frequency up to which the phase of the process is known.

    Parameters
    ----------
    models : sequence of ProcessModel
        Plausible processes.
    nominal : ProcessModel
        The one that is tuned on.

    Returns
    -------
    float
        Highest frequency at which nine in ten of the models lie within `KNOWN_TO` degrees of
        the nominal one [rad/s]; where none is known so well, the one known best. inf if the
        models agree everywhere.
    """
    sizes = np.abs(np.concatenate([nominal.poles, nominal.zeros]))
    marks = [*sizes[sizes > 0.0], *([1.0 / nominal.dead_time] if nominal.dead_time > 0.0 else [])]
    if not marks:
        marks = [abs(nominal.gain)]
    omega = np.geomspace(min(marks) / _REACH, max(marks) * _REACH, _POINTS)
    response = stack_loops(models, [_PLAIN]).response(omega)
    away = np.degrees(np.abs(np.angle(response / nominal.frequency_response(omega))))
    spread = np.percentile(away, _SHARE, axis=0)
    known = np.flatnonzero(spread <= KNOWN_TO)
    if known.size == 0:
        return float(omega[int(np.argmin(spread))])
    last = int(known[-1])
    if last == _POINTS - 1:
        return np.inf
    share = (KNOWN_TO - spread[last]) / max(float(spread[last + 1] - spread[last]), 1e-12)
    return float(omega[last] * (omega[last + 1] / omega[last]) ** min(share, 1.0))
