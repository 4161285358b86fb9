"""Processes as plausible as the log, its moves, its structures and the user allow.

The noise is one source of doubt. How far the moves disagree, how far structures that explain
the log alike disagree, and what the user holds for possible whatever the log says, are others.
Each is drawn by itself, so that the widest can rule and be named.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import stdtrit

from fitters.even import normally

if TYPE_CHECKING:
    from fitters.fit import Choice, Fit
    from fitters.process import ProcessModel

#: Structures with less weight than this are not believed [1].
_BELIEVED = 0.05
#: Fewest moves whose gains say anything of how they scatter.
_FEWEST_MOVES = 3
#: Single moves show a gain about twice as widely as a few together: only a scatter beyond that says more [1].
_WIDER = 2.0
#: The source that is the user's word, not the log's.
STATED = "stated floor"
#: Probability of an interval, and the normal deviate that goes with it [1].
_COVERAGE = 0.95
_NORMAL = 1.96


@dataclass(frozen=True, slots=True, kw_only=True)
class Floor:
    """The least scatter the user believes in, relative standard uncertainties [1].

    Attributes
    ----------
    gain, lags, dead_time : float
    """

    gain: float = 0.0
    lags: float = 0.0
    dead_time: float = 0.0


def gain_scatter(gains: tuple[float, ...]) -> float | None:
    """Give the relative standard uncertainty of a gain from how the moves disagree.

    Parameters
    ----------
    gains : tuple of float
        Gain each move showed, in any common unit.

    Returns
    -------
    float or None
        Sample standard deviation over the mean, widened by Student's factor over the normal
        one for so few moves (JCGM 100:2008, 4.2 and G.3); None for fewer than three moves.
    """
    if len(gains) < _FEWEST_MOVES:
        return None
    few = float(stdtrit(len(gains) - 1, 0.5 + 0.5 * _COVERAGE)) / _NORMAL
    return few * float(np.std(gains, ddof=1) / abs(np.mean(gains)))


def plausible(choice: Choice, floor: Floor, count: int, seed: int) -> dict[str, tuple[ProcessModel, ...]]:
    """Draw processes from each source of doubt that says anything.

    Parameters
    ----------
    choice : Choice
    floor : Floor
    count : int
        How many from each source.
    seed : int
        Same seed, same processes.

    Returns
    -------
    dict of str to tuple of ProcessModel
        By the name of the source; "noise in the log" is always there.
    """
    best = choice.best
    drawn = best.draw(count, seed)
    out = {"noise in the log": drawn}
    if choice.gain_scatter is not None:
        out["scatter between moves"] = _spread(
            drawn, seed + 1, Floor(gain=_missing(best, choice.gain_scatter))
        )
    believed = [choice.candidates[0]]
    believed += [c for c in choice.candidates[1:] if c.weight >= _BELIEVED and _determined(c.fit)]
    if len(believed) > 1:
        total = sum(c.weight for c in believed)
        mixed: list[ProcessModel] = []
        for place, candidate in enumerate(believed):
            share = max(1, round(count * candidate.weight / total))
            mixed += candidate.fit.draw(share, seed + place)
        out["choice of structure"] = tuple(mixed[:count])
    if floor != Floor():
        centre = (best.model,) * count
        out[STATED] = _spread(centre, seed + 1, floor)
    return out


def _determined(fit: Fit) -> bool:
    """Tell whether the log determines what the structure adds: else it is a simpler one in disguise."""
    own = [p for p in fit.parameters if p.name != "dead_time"]
    return all(p.stderr < abs(p.value) for p in own)


def _missing(fit: Fit, scatter: float) -> float:
    """Give what must be added to the gain's own uncertainty to reach the scatter; zero where noise explains it."""
    gain = fit.parameters[0]
    own = gain.stderr / abs(gain.value) if gain.value != 0.0 else np.inf
    return float(np.sqrt(scatter**2 - own**2)) if scatter > _WIDER * own else 0.0


def _spread(models: tuple[ProcessModel, ...], seed: int, by: Floor) -> tuple[ProcessModel, ...]:
    factors = np.exp(normally(len(models), 3, seed) * [by.gain, by.lags, by.dead_time])
    return tuple(m.scaled(*row) for m, row in zip(models, factors.tolist(), strict=True))
