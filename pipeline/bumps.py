"""Where the output was moved on purpose, and the part of the log that shows the answer."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np

from fitters.fit import BumpData

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from pipeline.intake.log import Log

#: An output that changes at more than this share of its rows is noisy and not merely moved [1].
_NOISY_SHARE = 0.2
#: Rows before and after that say what level a noisy output held.
_LEVEL_ROWS = 9
#: A move of a noisy output stands this far above its chatter, and above the wandering of both levels [1].
_OVER_CHATTER = 8.0
_OVER_WANDERING = 4.0
#: Both levels beside a move stay within this share of it (5th to 95th percentile) [1]: a level that
#: wanders by more is a controller's work.
_HELD_SHARE = 0.5
#: Share of a move from which a row of a noisy output has left its old level [1].
_OFF_SHARE = 0.25
#: A move smaller than this share of the largest one is a nudge and not a bump of its own [1].
_NUDGE = 0.05
#: Moves this many rows apart, or closer, are one staged move.
_STAGED_ROWS = 3
#: From the median absolute deviation to the standard deviation of a normal variable.
_MAD_TO_SD = 1.4826
#: Fewest rows with a PV that a fit can be asked of.
_FEWEST_ROWS = 8


@dataclass(frozen=True, slots=True, kw_only=True)
class Move:
    """One deliberate change of the CO.

    Attributes
    ----------
    at_s : float
        Time of the first row with the new value [s from the log's start].
    before, after : float
        Levels held before and after [CO unit].
    """

    at_s: float
    before: float
    after: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Bump:
    """One move, or several in quick succession, with what came before and after.

    Attributes
    ----------
    start_s, end_s : float
        From the previous bump's last move to the next one's first [s].
    moves : tuple of Move
    used : bool
        The fit may rest on it.
    reason : str
        Why, or why not, one clause.
    """

    start_s: float
    end_s: float
    moves: tuple[Move, ...]
    used: bool
    reason: str


def find_moves(log: Log) -> tuple[Move, ...]:
    """Find the deliberate changes of the output.

    Parameters
    ----------
    log : Log

    Returns
    -------
    tuple of Move
        In the order of the log; none where the output only chatters or never settles.
    """
    change = np.diff(log.co)
    # what is moved on the last row leaves no row to show an answer
    changed = np.flatnonzero(change[:-1])
    if changed.size == 0:
        return ()
    if changed.size <= _NOISY_SHARE * change.size:
        moves = [
            Move(at_s=float(log.t[i + 1]), before=float(log.co[i]), after=float(log.co[i + 1]))
            for i in changed
        ]
    else:
        moves = _moves_above_chatter(log, np.abs(change[changed]))
    if not moves:
        return ()
    largest = max(abs(m.after - m.before) for m in moves)
    return tuple(m for m in moves if abs(m.after - m.before) >= _NUDGE * largest)


def find_bumps(log: Log) -> tuple[Bump, ...]:
    """Group the moves into bumps and say which of them a fit may use.

    Parameters
    ----------
    log : Log

    Returns
    -------
    tuple of Bump
    """
    groups: list[list[Move]] = []
    for move in find_moves(log):
        near = bool(groups) and move.at_s - groups[-1][-1].at_s <= _STAGED_ROWS * log.interval
        if near:
            groups[-1].append(move)
        else:
            groups.append([move])
    if not groups:
        return ()
    starts = [float(log.t[0]), *(group[-1].at_s for group in groups[:-1])]
    ends = [*(group[0].at_s for group in groups[1:]), float(log.t[-1])]
    return tuple(
        _judged(log, start, end, tuple(group)) for start, end, group in zip(starts, ends, groups, strict=True)
    )


def bump_data(
    log: Log, bumps: Sequence[Bump], *, co_low: float = -np.inf, co_high: float = np.inf
) -> BumpData:
    """Cut out one record over the bumps in use, from the first baseline to the last hold.

    Parameters
    ----------
    log : Log
    bumps : sequence of Bump
        At least one of them in use.
    co_low, co_high : float
        Limits of the output [CO unit]: what is logged beyond them never reached the process.

    Returns
    -------
    BumpData
        Rows with a PV; the output at its own logged times, chatter and all.

    Raises
    ------
    ValueError
        If no bump is in use, or too few rows hold a PV.
    """
    run = _longest_run(bumps)
    if not run:
        raise ValueError("No bump of this log can be used.")
    inside = (log.t >= run[0].start_s) & (log.t <= run[-1].end_s)
    first, last = np.flatnonzero(inside)[[0, -1]]
    t, pv, co = log.t[first : last + 1], log.pv[first : last + 1], log.co[first : last + 1]
    co = np.clip(co, co_low, co_high)
    new = np.concatenate([[True], np.diff(co) != 0.0])
    seen = np.isfinite(pv)
    if np.count_nonzero(seen) < _FEWEST_ROWS:
        raise ValueError("Too few rows around the bumps hold a PV.")
    return BumpData(t=t[seen], pv=pv[seen], co_times=t[new], co_values=co[new])


def _moves_above_chatter(log: Log, sizes: NDArray[np.float64]) -> list[Move]:
    """Find level changes of a noisy output: its medians before and after differ clearly.

    The output must hold still against the change on both sides: a controller at work does not.
    """
    rows = _LEVEL_ROWS
    if log.co.size < 2 * rows + 1:
        return []
    windows = np.lib.stride_tricks.sliding_window_view(log.co, rows)
    level = np.median(windows, axis=1)
    wander = np.max(windows, axis=1) - np.min(windows, axis=1)
    jump = level[rows:] - level[:-rows]  # at row i + rows, i from 0
    chatter = _MAD_TO_SD * float(np.median(sizes)) / np.sqrt(2.0)
    clear = np.abs(jump) > np.maximum(_OVER_CHATTER * chatter, np.maximum(wander[rows:], wander[:-rows]))
    clear &= np.abs(jump) > _OVER_WANDERING * _typical_wandering(level)
    moves: list[Move] = []
    candidates = np.flatnonzero(clear)
    for group in np.split(candidates, np.flatnonzero(np.diff(candidates) > rows) + 1):
        if group.size:
            best = int(group[np.argmax(np.abs(jump[group]))])
            row = _first_off(log.co, best, float(level[best]), float(level[best + rows]))
            moves.append(
                Move(at_s=float(log.t[row]), before=float(level[best]), after=float(level[best + rows]))
            )
    return _held_on_both_sides(log, moves)


def _first_off(co: NDArray[np.float64], start: int, before: float, after: float) -> int:
    """Find the first row of a move: back from half way to where the old level was last held."""
    way = (co[start : start + 2 * _LEVEL_ROWS] - before) / (after - before)
    row = int(np.argmax(way > 0.5))
    while row > 1 and way[row - 1] > _OFF_SHARE:
        row -= 1
    return start + row


def _held_on_both_sides(log: Log, moves: list[Move]) -> list[Move]:
    """Keep the moves between two held levels: an output that is always on its way holds none."""
    edges = [float(log.t[0]), *(m.at_s for m in moves), np.inf]
    spans = []
    for start, end in pairwise(edges):
        held = log.co[(log.t >= start) & (log.t < end)]
        spans.append(float(np.ptp(np.percentile(held, [5.0, 95.0]))) if held.size else 0.0)
    # over the whole log the levels must stand out too: the turns of a swinging output do not
    typical_move = float(np.median([abs(m.after - m.before) for m in moves])) if moves else 0.0
    if float(np.median(spans)) >= typical_move:
        return []
    return [
        m
        for m, before, after in zip(moves, spans[:-1], spans[1:], strict=True)
        if max(before, after) < _HELD_SHARE * abs(m.after - m.before)
    ]


def _typical_wandering(level: NDArray[np.float64]) -> float:
    """Give how far the level usually goes within the rows that define it."""
    drift = np.abs(level[_LEVEL_ROWS:] - level[:-_LEVEL_ROWS])
    return float(np.median(drift)) if drift.size else 0.0


def _judged(log: Log, start: float, end: float, moves: tuple[Move, ...]) -> Bump:
    inside = (log.t >= start) & (log.t <= end)
    used, reason = True, "a clear move with a hold after it"
    if log.automatic is not None and bool(np.any(log.automatic[inside])):
        used, reason = False, "the controller was in automatic"
    elif np.count_nonzero(np.isfinite(log.pv[inside])) < _FEWEST_ROWS:
        used, reason = False, "too few rows hold a PV"
    return Bump(start_s=start, end_s=end, moves=moves, used=used, reason=reason)


def _longest_run(bumps: Sequence[Bump]) -> list[Bump]:
    """Give the longest stretch of bumps in use without a break."""
    best: list[Bump] = []
    run: list[Bump] = []
    for bump in bumps:
        run = [*run, bump] if bump.used else []
        if len(run) > len(best):
            best = run
    return best
