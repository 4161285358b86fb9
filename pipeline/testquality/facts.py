"""What the checks on a test look at, worked out once: noise, resolution, the PV's answers."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from pipeline.testquality.shape import Shape, look, spikes

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from pipeline.bumps import Bump
    from pipeline.intake.log import Log
    from pipeline.settings import LoopSheet

#: From the median absolute deviation to the standard deviation of a normal variable [1].
_MAD_TO_SD = 1.4826
#: Fewest rows from which a level or a slope is taken [rows].
FEW = 5
#: Standard errors from which a slope is one [1]: slow noise makes them too small by about two.
_CLEAR_SLOPE = 4.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Line:
    """A straight line through the second half of a baseline.

    Attributes
    ----------
    slope, error : float
        Slope and its standard error [PV unit / s].
    at_move : float
        Where the line is at the move [PV unit].
    scatter : float
        Robust standard deviation about the line [PV unit].
    clear : bool
        The slope is more than noise.
    """

    slope: float
    error: float
    at_move: float
    scatter: float
    clear: bool


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
    over_noise : float
        Largest distance from where the PV was going before the move, over the noise and over how
        badly that is known [1]: a ramp that stops is an answer, a drift that goes on is none.
    """

    bump: Bump
    before: float
    travel: float
    rise_s: float
    rise_rows: int
    late: float
    over_noise: float


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
    shape : Shape or None
        All moves explained together; None where there is too little.
    """

    log: Log
    bumps: tuple[Bump, ...]
    sheet: LoopSheet
    answers: tuple[Answer, ...]
    noise: float
    resolution: float
    travel: float
    rise_s: float
    shape: Shape | None


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
    usual = ~spikes(pv, noise)
    t, pv = t[usual], pv[usual]
    noise = _noise(t, pv, bumps, resolution)
    answers = tuple(a for b in bumps if b.used for a in [_answer(t, pv, b, noise)] if a is not None)
    rise_s = float(np.median([a.rise_s for a in answers])) if answers else 0.0
    return Facts(
        log=log,
        bumps=bumps,
        sheet=sheet,
        answers=answers,
        noise=noise,
        resolution=resolution,
        travel=float(np.median([a.travel for a in answers])) if answers else 0.0,
        rise_s=rise_s,
        shape=look(t, pv, [a.bump for a in answers], noise=noise, rise_s=rise_s),
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
    line = straight_line(t, pv, bumps[0]) if bumps else None
    slow = line.scatter if line else 0.0
    return float(max(fast, slow, resolution / np.sqrt(12.0)))


def straight_line(t: NDArray[np.float64], pv: NDArray[np.float64], bump: Bump) -> Line | None:
    """Draw a straight line through the second half of a bump's baseline.

    Parameters
    ----------
    t, pv : (n,) ndarray
        Rows that hold a PV [s, PV unit].
    bump : Bump

    Returns
    -------
    Line or None
        None where there are too few rows.
    """
    at = bump.moves[0].at_s
    base = (t >= 0.5 * (bump.start_s + at)) & (t < at)
    n = int(np.count_nonzero(base))
    if n < 2 * FEW:
        return None
    middle, level = float(t[base].mean()), float(pv[base].mean())
    x, y = t[base] - middle, pv[base] - level
    slope = float(x @ y) / float(x @ x)
    rest = y - x * slope
    error = float(np.sqrt(float(rest @ rest) / (n - 2) / float(x @ x)))
    scatter = _MAD_TO_SD * float(np.median(np.abs(rest - np.median(rest))))
    return Line(
        slope=slope,
        error=error,
        at_move=level + slope * (at - middle),
        scatter=scatter,
        clear=abs(slope) > _CLEAR_SLOPE * error,
    )


def _without_spikes(values: NDArray[np.float64]) -> NDArray[np.float64]:
    """Running median of five rows: two false rows in a row are no answer, and a step stays a step.

    The values are distances from the level before the move, so before the first stands zero.
    """
    half = FEW // 2
    padded = np.concatenate([np.zeros(half), values, np.full(half, values[-1])])
    return np.asarray(
        np.median(np.lib.stride_tricks.sliding_window_view(padded, FEW), axis=1), dtype=np.float64
    )


def _answer(t: NDArray[np.float64], pv: NDArray[np.float64], bump: Bump, noise: float) -> Answer | None:
    at = bump.moves[0].at_s
    base = pv[(t >= bump.start_s) & (t < at)]
    hold = (t >= at) & (t <= bump.end_s)
    if base.size < 1 or int(hold.sum()) < FEW:
        return None
    before = float(np.median(base[-max(3, min(20, base.size // 5)) :]))
    clock, away = t[hold], pv[hold] - before
    line = straight_line(t, pv, bump)
    over_noise = _over_noise(clock - at, pv[hold], before, line, noise)
    high, low = float(np.percentile(away, 98.0)), float(np.percentile(away, 2.0))
    travel, sign = (high, 1.0) if high >= -low else (-low, -1.0)
    away = _without_spikes(sign * away)
    if travel <= 0.0:
        return Answer(
            bump=bump, before=before, travel=0.0, rise_s=0.0, rise_rows=0, late=0.0, over_noise=over_noise
        )
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
        bump=bump,
        before=before,
        travel=travel,
        rise_s=max(rise, 0.0),
        rise_rows=top - bottom,
        late=late,
        over_noise=over_noise,
    )


def _over_noise(
    since: NDArray[np.float64],
    pv: NDArray[np.float64],
    before: float,
    line: Line | None,
    noise: float,
) -> float:
    """Largest distance from the baseline's line, over the noise and the error of drawing that line on."""
    if line is not None and line.clear:
        going = line.at_move + line.slope * since
        unsure = np.hypot(noise, line.error * since)
    else:
        going, unsure = np.full(pv.size, before), np.full(pv.size, noise)
    away = np.abs(_without_spikes(pv - going))
    if noise <= 0.0:
        return float(np.inf) if np.any(away > 0.0) else 0.0
    return float(np.percentile(away / unsure, 98.0))
