"""What if the process changes: the same settings on the process made faster, slower, stronger, later."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from pipeline.loop.margins import margin_table
from pipeline.loop.simulate import overshoot
from pipeline.loop.stack import stack_loops

if TYPE_CHECKING:
    from fitters.process import ProcessModel
    from pipeline.loop.types import Controller

#: What is tried: name, factors on gain, on lags and on dead time [1]. A fifth of gain, a third of the
#: lags and half of the dead time are changes that throughput, product and wear bring (common practice).
CHANGES = (
    ("gain +20 %", 1.2, 1.0, 1.0),
    ("gain -20 %", 0.8, 1.0, 1.0),
    ("dead time +50 %", 1.0, 1.0, 1.5),
    ("lags -30 %", 1.0, 0.7, 1.0),
    ("lags +30 %", 1.0, 1.3, 1.0),
    ("gain +20 %, lags -30 %, dead time +50 %", 1.2, 0.7, 1.5),
)
#: Largest common growth of gain and dead time looked at [1], and gains tried at once.
_MOST_GROWTH, _AT_ONCE = 100.0, 16


@dataclass(frozen=True, slots=True, kw_only=True)
class WhatIf:
    """One change of the process and what becomes of the loop.

    Attributes
    ----------
    change : str
    stable : bool
    phase_margin : float
        Of the same settings on the changed process [degrees].
    gain_margin, max_sensitivity : float
        [1].
    overshoot : float or None
        [%]; None where the loop is lost.
    """

    change: str
    stable: bool
    phase_margin: float
    gain_margin: float
    max_sensitivity: float
    overshoot: float | None


def what_if(model: ProcessModel, controller: Controller) -> tuple[WhatIf, ...]:
    """Judge settings on the process as it might become.

    Parameters
    ----------
    model : ProcessModel
    controller : Controller
    """
    bare = not np.any(np.abs(np.concatenate([model.poles, model.zeros])) > 0.0)
    changes = [c for c in CHANGES if not (bare and c[2] != 1.0 and c[1] == c[3] == 1.0)]
    changed = [model.scaled(*factors) for _, *factors in changes]
    table = margin_table(stack_loops(changed, [controller]))
    return tuple(
        WhatIf(
            change=change[0],
            stable=bool(table.stable[k]),
            phase_margin=float(table.phase_margin[k]),
            gain_margin=float(table.gain_margin[k]),
            max_sensitivity=float(table.max_sensitivity[k]),
            overshoot=overshoot(changed[k], controller) if table.stable[k] else None,
        )
        for k, change in enumerate(changes)
    )


def growth_borne(model: ProcessModel, controller: Controller) -> float:
    """Give by how much gain and dead time may grow together before the loop is lost.

    Parameters
    ----------
    model : ProcessModel
    controller : Controller
        Of a stable loop.

    Returns
    -------
    float
        Common factor [1]; inf where a hundredfold growth is borne. Always below the gain
        margin and below what the delay margin allows.
    """
    low, high = 1.0, _MOST_GROWTH
    for _ in range(3):
        factors = np.geomspace(low, high, _AT_ONCE)
        grown = [model.scaled(float(f), 1.0, float(f)) for f in factors]
        lost = np.flatnonzero(~margin_table(stack_loops(grown, [controller]), sensitivity=False).stable)
        if lost.size == 0:
            return np.inf
        low, high = float(factors[max(int(lost[0]) - 1, 0)]), float(factors[int(lost[0])])
    return low
