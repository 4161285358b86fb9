"""What each criterion by itself would have allowed, so that the reader sees which one costs the speed."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from pipeline.loop.metrics import noise_gain
from pipeline.loop.stack import stack_loops
from pipeline.loop.sweep import FINE
from pipeline.tuning.criteria import NAMES, gain_range
from pipeline.tuning.simulated import gain_within
from pipeline.tuning.types import NO_CRITERIA

if TYPE_CHECKING:
    from pipeline.tuning.types import Criteria, Tuning

#: Criteria only a simulation can judge.
_SIMULATED = ("overshoot", "co_peak")


@dataclass(frozen=True, slots=True, kw_only=True)
class Allowed:
    """The largest gain one criterion allows at the recommended integral and derivative times.

    Attributes
    ----------
    criterion : str
        Its name in `Criteria`.
    gain : float or None
        [CO unit / PV unit]; inf where it never limits, None where no gain meets it.
    """

    criterion: str
    gain: float | None


def allowed_gains(tuning: Tuning, criteria: Criteria) -> tuple[Allowed, ...]:
    """Give what each criterion in force would allow by itself, before any back-off.

    Parameters
    ----------
    tuning : Tuning
    criteria : Criteria
    """
    out = []
    for name in (*NAMES, *_SIMULATED):
        asked = getattr(criteria, name)
        if asked is None:
            continue
        only = replace(NO_CRITERIA, **{name: asked})
        gain = _simulated(tuning, only) if name in _SIMULATED else _by_frequency(tuning, only)
        out.append(Allowed(criterion=name, gain=gain))
    return tuple(out)


def _by_frequency(tuning: Tuning, only: Criteria) -> float | None:
    c = tuning.controller
    noise = None if only.noise_gain is None else np.array([noise_gain(c)])
    r = gain_range(stack_loops([tuning.model], [c]), only, FINE, noise=noise, exact=True)
    return None if np.isnan(r.high[0]) else c.gain * float(r.high[0])


def _simulated(tuning: Tuning, only: Criteria) -> float | None:
    """Follow the criterion up to just below the stability limit, from there down."""
    c = tuning.controller
    limit = gain_range(stack_loops([tuning.model], [c]), NO_CRITERIA, FINE, exact=True)
    top = float(limit.high[0])
    if not np.isfinite(top):
        return None
    found = gain_within(tuning.model, replace(c, gain=0.98 * top * c.gain), 0.0, only)
    return None if found is None else found[0].gain
