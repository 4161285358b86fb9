"""What the checks on a test look at, worked out once: noise, resolution, the PV's answers."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from pipeline.bumps import Bump
    from pipeline.intake.log import Log
    from pipeline.settings import LoopSheet

#: From the median absolute deviation to the standard deviation of a normal variable [1].
_MAD_TO_SD = 1.4826
#: Fewest rows from which a level or a slope is taken [rows].
FEW = 5


@dataclass(frozen=True, slots=True, kw_only=True)
class Answer:
    """What the PV did after one bump.

    Attributes
    ----------
    bump : Bump
    before : float
        Level just before the first move [PV unit].
    travel : float
        Largest distance from it during the hold, noise peaks cut [PV unit].
    rise_s, rise_rows : float, int
        Time from the move to 63 % of that [s]; rows between 10 and 90 % of it.
    late : float
        Share of the travel made in the last fifth of the hold [1].
    """

    bump: Bump
    before: float
    travel: float
    rise_s: float
    rise_rows: int
    late: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Facts:
    """What the checks look at, worked out once.

    Attributes
    ----------
    log : Log
    bumps : tuple of Bump
    sheet : LoopSheet
    answers : tuple of Answer
        One a used bump with enough rows.
    noise : float
        Standard deviation of the PV's noise [PV unit].
    resolution : float
        Smallest step between two PV values that occur [PV unit].
    travel, rise_s : float
        Medians over the answers; zero if there is none [PV unit, s].
    """

    log: Log
    bumps: tuple[Bump, ...]
    sheet: LoopSheet
    answers: tuple[Answer, ...]
    noise: float
    resolution: float
    travel: float
    rise_s: float


def gather(log: Log, bumps: tuple[Bump, ...], sheet: LoopSheet) -> Facts:
    """Work out what the checks need.

    Parameters
    ----------
    log : Log
    bumps : tuple of Bump
    sheet : LoopSheet

    Returns
    -------
    Facts
    """
    known = np.isfinite(log.pv)
    t, pv = log.t[known], log.pv[known]
    distinct = np.unique(pv)
    steps = np.diff(distinct)
    # values one rounding error apart are one value
    steps = steps[steps > 1e-9 * max(float(np.ptp(distinct)), 1e-300)] if distinct.size > 1 else steps
    resolution = float(steps.min()) if steps.size else 0.0
    noise = _noise(t, pv, bumps, resolution)
    answers = tuple(a for b in bumps if b.used for a in [_answer(t, pv, b)] if a is not None)
    return Facts(
        log=log,
        bumps=bumps,
        sheet=sheet,
        answers=answers,
        noise=noise,
        resolution=resolution,
        travel=float(np.median([a.travel for a in answers])) if answers else 0.0,
        rise_s=float(np.median([a.rise_s for a in answers])) if answers else 0.0,
    )


def _noise(
    t: NDArray[np.float64], pv: NDArray[np.float64], bumps: tuple[Bump, ...], resolution: float
) -> float:
    """Noise from row to row, from slower wandering on the first baseline, and from the resolution.

    Notes
    -----
    The larger of the three: differences miss slow noise, a straight line through the second
    half of the baseline does not; rounding to q has the standard deviation q / sqrt(12).
    """
    if pv.size < FEW:
        return 0.0
    steps = np.diff(pv)
    fast = _MAD_TO_SD * float(np.median(np.abs(steps - np.median(steps)))) / np.sqrt(2.0)
    slow = 0.0
    if bumps:
        start, at = bumps[0].start_s, bumps[0].moves[0].at_s
        base = (t >= 0.5 * (start + at)) & (t < at)
        if int(base.sum()) >= 2 * FEW:
            x = t[base] - t[base].mean()
            y = pv[base] - pv[base].mean()
            rest = y - x * (float(x @ y) / float(x @ x))
            slow = _MAD_TO_SD * float(np.median(np.abs(rest - np.median(rest))))
    return float(max(fast, slow, resolution / np.sqrt(12.0)))


def _without_spikes(values: NDArray[np.float64]) -> NDArray[np.float64]:
    """Running median of five rows: two false rows in a row are no answer, and a step stays a step.

    The values are distances from the level before the move, so before the first stands zero.
    """
    half = FEW // 2
    padded = np.concatenate([np.zeros(half), values, np.full(half, values[-1])])
    return np.asarray(
        np.median(np.lib.stride_tricks.sliding_window_view(padded, FEW), axis=1), dtype=np.float64
    )


def _answer(t: NDArray[np.float64], pv: NDArray[np.float64], bump: Bump) -> Answer | None:
    at = bump.moves[0].at_s
    base = pv[(t >= bump.start_s) & (t < at)]
    hold = (t >= at) & (t <= bump.end_s)
    if base.size < 1 or int(hold.sum()) < FEW:
        return None
    before = float(np.median(base[-max(3, min(20, base.size // 5)) :]))
    clock, away = t[hold], pv[hold] - before
    high, low = float(np.percentile(away, 98.0)), float(np.percentile(away, 2.0))
    travel, sign = (high, 1.0) if high >= -low else (-low, -1.0)
    away = _without_spikes(sign * away)
    if travel <= 0.0:
        return Answer(bump=bump, before=before, travel=0.0, rise_s=0.0, rise_rows=0, late=0.0)
    # the last row still below 10 % before the first one above 90 %, so that noise is no start
    top = int(np.argmax(away >= 0.9 * travel))
    below = np.flatnonzero(away[: top + 1] < 0.1 * travel)
    bottom = int(below[-1]) if below.size else -1
    rise = float(clock[int(np.argmax(away >= 0.63 * travel))] - at)
    fifth = max(3, away.size // 5)
    late = (
        abs(float(np.median(away[-3:]) - np.median(away[-fifth - 2 : -fifth + 1]))) / travel
        if (away.size > fifth + 2)
        else 0.0
    )
    return Answer(
        bump=bump, before=before, travel=travel, rise_s=max(rise, 0.0), rise_rows=top - bottom, late=late
    )
