"""What a test needs before structures are compared: each step looks, and changes the problem if it must.

An unsettled start is fitted with the rest, rows that stand apart are set aside, and moves
that were not answered alike are scaled to what they achieved.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from fitters.between import gains_by_move
from fitters.disturbance import load_step
from fitters.estimate import as_screened, at_point, screen
from fitters.noise import colour
from fitters.outliers import outliers
from fitters.problem import Problem
from fitters.structures import all_structures, structure_named
from fitters.thin import thinned

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from fitters.between import GainsByMove
    from fitters.disturbance import LoadStep
    from fitters.estimate import Estimate, Screened
    from fitters.fit import BumpData

#: Residuals below this share of the PV's range are arithmetic, not noise [1].
ARITHMETIC = 1e-9
#: What was left of an earlier move must improve twice the log likelihood by this much: twice
#: its cost in parameters for a few hundred rows, since it is looked for unasked.
_SETTLING_GAIN = 25.0
#: ... in a baseline of at least so many rows that fits this many times worse than the rest [1].
_BASELINE_ROWS = 5
_BASELINE_WORSE = 2.0
#: Structures from which a load step is looked for.
_PLAIN_STRUCTURES = 2
#: Rows from the first move to the load step that a second look needs.
_ROWS_BEFORE_LOAD = 10
#: Stretches of the record whose means show slow leftovers, and how far they may scatter against white noise [1].
_STRETCHES = 20
_WHITE_RATIO = 1.8
#: With it they must explain more than the closest of all structures, by this in twice the log likelihood.
_LOAD_GAIN = 30.0
#: ... and over which the PV goes by at least this share of its whole range [1].
_BASELINE_MOVED = 0.05


@dataclass(frozen=True, slots=True, kw_only=True)
class Prepared:
    """A test ready for its structures.

    Attributes
    ----------
    problem : Problem
    screened : tuple of Screened
        Every structure after a quick look, closest first.
    gains : tuple of float
        What each move achieved over the largest [1]; none where the moves were scaled by it.
    notes : tuple of (str, str)
        Code and sentence for what was changed.
    """

    problem: Problem
    screened: tuple[Screened, ...]
    gains: tuple[float, ...]
    notes: tuple[tuple[str, str], ...]


def prepare(data: BumpData) -> Prepared:
    """Look at a test for what would spoil its fit, and allow for it.

    Parameters
    ----------
    data : BumpData
        With at least one move of the CO.

    Returns
    -------
    Prepared
    """
    data = thinned(data)
    problem = Problem(data, np.ones(data.t.size, dtype=bool), drift=True, settling=False)
    problem, screened, apart = _prepared(problem)
    moves = gains_by_move(problem, as_screened(problem, _simplest(screened)))
    load = _load_step(problem, screened)
    if load is not None and moves.differ and moves.cost < load.cost:
        load = None  # gains of their own explain it better
    if load is not None and load.leaves_enough:
        problem = problem.changed(used=problem.used & (problem.data.t < load.clean_until))
        screened = _screen_all(problem)
        moves = gains_by_move(problem, as_screened(problem, _simplest(screened)))
    if moves.differ:
        problem, screened, moves = _with_own_gains(problem, moves)
    notes = _notes(apart, problem, moves, load)
    # more moves than were looked at one by one are known by direction only
    alone = not moves.differ and moves.scale.size == problem.held.at.size
    gains = tuple(moves.scale.tolist()) if alone else ()
    return Prepared(problem=problem, screened=tuple(screened), gains=gains, notes=notes)


def _prepared(problem: Problem) -> tuple[Problem, list[Screened], NDArray[np.bool_]]:
    """Screen all structures, having dealt with an unsettled start and with outliers on the way."""
    screened = _screen_all(problem)
    closest = as_screened(problem, screened[0])
    if _still_settling(problem, screened, closest):
        problem = problem.changed(settling=True)
        screened = _screen_all(problem)
        closest = as_screened(problem, screened[0])
    apart = outliers(
        np.sqrt(problem.data.weight) * closest.residual, ARITHMETIC * float(np.ptp(problem.data.pv))
    )
    if np.any(apart):
        problem = problem.changed(used=~apart)
        screened = _screen_all(problem)
    return problem, screened, apart


def _load_step(problem: Problem, screened: list[Screened]) -> LoadStep | None:
    """Look for a load step from the closest plain structures; a zero would imitate it."""
    plainest = as_screened(problem, next(s for s in screened if s.structure.gains == 1))
    if _looks_white(plainest.residual[problem.used]):
        return None
    plain = [s for s in screened if s.structure.gains == 1][:_PLAIN_STRUCTURES]
    found = [_load_step_seen_from(problem, s) for s in plain]
    best = min((f for f in found if f is not None), key=lambda f: f.cost, default=None)
    # what another structure explains as well needs no load step
    lowest = as_screened(problem, screened[0]).cost
    if best is None or problem.pv.size * np.log(lowest / best.cost) < _LOAD_GAIN:
        return None
    return best


def _looks_white(residual: NDArray[np.float64]) -> bool:
    """Tell whether means over stretches scatter as those of independent rows: a quick look."""
    length = residual.size // _STRETCHES
    if length < 2:
        return False
    means = residual[: length * _STRETCHES].reshape(_STRETCHES, length).mean(axis=1)
    return bool(length * np.mean(means**2) < _WHITE_RATIO * np.mean(residual**2))


def _load_step_seen_from(problem: Problem, screened: Screened) -> LoadStep | None:
    """Look twice: lags that the load has spoilt are had again from the part before it."""
    whole = as_screened(problem, screened)
    first = load_step(problem, whole)
    if first is None:
        return None
    clean = problem.used & (problem.data.t < first.clean_until)
    if np.count_nonzero(clean & (problem.data.t > problem.held.at[0])) < _ROWS_BEFORE_LOAD:
        return None
    before = problem.changed(used=clean)
    part = as_screened(before, screen(before, [screened.structure])[0])
    noise = colour(part.residual[before.used], before.t, part.jacobian, before.weight)
    from_part = at_point(problem, screened.structure, part.search, part.dead_time)
    found = [load_step(problem, estimate, noise) for estimate in (whole, from_part)]
    return min((f for f in found if f is not None), key=lambda f: f.cost, default=None)


def _with_own_gains(problem: Problem, moves: GainsByMove) -> tuple[Problem, list[Screened], GainsByMove]:
    """Scale the moves to what they achieved, since they were not answered alike.

    Lags and dead time that one gain has spoilt spoil the gains too, so this is done twice,
    each time against the moves as logged.
    """
    scaled = problem.changed(data=moves.data)
    better = as_screened(scaled, _simplest(_screen_all(scaled)))
    second = gains_by_move(problem, better)
    moves = replace(second, differ=True)
    scaled = problem.changed(data=moves.data)
    return scaled, _screen_all(scaled), moves


def _simplest(screened: list[Screened]) -> Screened:
    """Give the closest of the structures with one gain and one searched number at most."""
    return next(s for s in screened if s.structure.gains == 1 and s.structure.searched <= 1)


def _screen_all(problem: Problem) -> list[Screened]:
    """Look at every structure quickly, closest to the log first."""
    return screen(problem, all_structures())


def _still_settling(problem: Problem, screened: list[Screened], closest: Estimate) -> bool:
    """Tell whether the record began before an earlier move had died away.

    Its baseline must fit clearly worse than the rest, and much better with the leftover fitted.
    """
    before = problem.t < problem.held.at[0]
    residual = closest.residual[problem.used]
    if np.count_nonzero(before) < _BASELINE_ROWS or np.count_nonzero(~before) < _BASELINE_ROWS:
        return False
    if np.mean(residual[before] ** 2) < _BASELINE_WORSE**2 * np.mean(residual[~before] ** 2):
        return False
    baseline = problem.data.pv[problem.used][before]
    third = max(baseline.size // 3, 1)
    moved = abs(float(np.median(baseline[-third:]) - np.median(baseline[:third])))
    if moved < _BASELINE_MOVED * float(np.ptp(problem.data.pv)):
        return False
    settling = problem.changed(settling=True)
    tried = {screened[0].structure.name: screened[0].structure, "first order": structure_named("first order")}
    cost = screen(settling, list(tried.values()))[0].cost
    rows = problem.pv.size
    floor = rows * ARITHMETIC**2
    return bool(rows * np.log(max(screened[0].cost, floor) / max(cost, floor)) > _SETTLING_GAIN)


def _notes(
    apart: NDArray[np.bool_], problem: Problem, moves: GainsByMove, load: LoadStep | None
) -> tuple[tuple[str, str], ...]:
    notes = []
    count = int(np.count_nonzero(apart))
    if count:
        notes.append(("outliers", f"{count} rows stand apart from their neighbours and were set aside."))
    if moves.differ:
        notes.append(("gain-differs-between-moves", _unlike(moves)))
    if load is not None:
        done = (
            "Only the part before it was fitted."
            if load.leaves_enough
            else "Too little of the test lies before it to fit that part alone: repeat the test."
        )
        notes.append(
            (
                "load-step",
                f"The PV moved by {load.size:.2g} of its units from {load.at:.4g} s on with no move of the "
                f"output to explain it. {done}",
            )
        )
    if problem.settling:
        notes.append(
            ("still-settling", "The PV was still settling when the record began; that was fitted with it.")
        )
    return tuple(notes)


def _unlike(moves: GainsByMove) -> str:
    shares = ", ".join(f"{100 * share:.0f} %" for share in moves.scale)
    said = f"The moves were not answered alike: {shares} of the largest gain, in their order. "
    if moves.dead_band > 0.0:
        said += (
            f"A dead band of {moves.dead_band:.2g} of the output's units, lost at each reversal, would "
            "explain it: check the valve. "
        )
    return said + "The largest gain is used, which is the safe one; expect slower control elsewhere."
