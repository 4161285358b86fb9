"""The last move foretold by a fit that never saw it: the plainest test of a model."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from fitters.estimate import resettle
from fitters.response import respond

if TYPE_CHECKING:
    from fitters.estimate import Estimate
    from fitters.noise import Noise
    from fitters.problem import Problem

#: Rows needed before the last move, from the first one on, and after it.
_FEWEST_ROWS = 20
#: The part before must show the first move's answer for so many lags besides the dead time [1].
_LAGS_BEFORE = 2.0


def missed_share(problem: Problem, estimate: Estimate, noise: Noise) -> float | None:
    """Fit without the last move and say by how much its answer is then missed.

    Parameters
    ----------
    problem : Problem
    estimate : Estimate
        Settled on the whole problem.
    noise : Noise

    Returns
    -------
    float or None
        Root-mean-square miss beyond the noise, over the size of the last move's answer [1];
        None where the part before tells too little.
    """
    at = problem.held.at
    if at.size < 2 or not estimate.structure.has_dead_time_search:
        return None
    last = float(at[-1])
    before = problem.used & (problem.data.t <= last)
    after = problem.used & (problem.data.t > last)
    enough = np.count_nonzero(before & (problem.data.t > at[0])) >= _FEWEST_ROWS
    shown = last - float(at[0]) > estimate.dead_time + _LAGS_BEFORE * estimate.slowest
    if not (enough and shown) or np.count_nonzero(after) < _FEWEST_ROWS:
        return None
    part = resettle(problem.changed(used=before), estimate)
    miss = part.residual[after]
    alone = problem.held_all.at_rows(after)
    answer = respond(estimate.structure, alone, estimate.search, max(estimate.dead_time, 0.0)).value
    size = float(np.ptp(estimate.gains @ answer[: estimate.gains.size]))
    excess = float(np.mean(miss**2)) - noise.sd**2
    return float(np.sqrt(max(excess, 0.0))) / size if size > 0.0 else None
