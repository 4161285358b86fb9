"""Every structure fitted, ranked, and the first place explained."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from fitters.between import GainsByMove, gains_by_move
from fitters.estimate import Screened, as_screened, resettle, screen, settle
from fitters.fit import Candidate, Choice
from fitters.intervals import to_fit
from fitters.noise import colour, covariance, outliers, whitened_sum
from fitters.problem import Problem
from fitters.structures import all_structures, structure_named

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from fitters.estimate import Estimate
    from fitters.fit import BumpData, Fit
    from fitters.noise import Noise

#: A drift within this many standard errors of none is left out [1].
_DRIFT_SURE = 2.0
#: What was left of an earlier move must improve twice the log likelihood by this much: twice
#: its cost in parameters for a few hundred rows, since it is looked for unasked.
_SETTLING_GAIN = 25.0
#: A lag shorter than this share of the log interval cannot be told from none [1].
_SHORTEST_LAG = 0.2
#: Ringing needs at least this many rows a period to be seen for what it is.
_ROWS_A_PERIOD = 5.0
#: ... in a baseline of at least so many rows that fits this many times worse than the rest [1].
_BASELINE_ROWS = 5
_BASELINE_WORSE = 2.0
#: ... and over which the PV goes by at least this share of its whole range [1].
_BASELINE_MOVED = 0.05
#: A structure's leading gain within this many standard errors of none takes it out of the running [1].
_GAIN_SURE = 2.0
#: Candidates with less weight than this are listed but not refined further [1].
_WEIGHT_THAT_COUNTS = 0.01
#: At least this many structures are settled from several starts, and all within this distance.
_CONTENDERS = 2
_CONTENDER_DISTANCE = 12.0
#: Mean squares below this, in squared spreads of the PV, a quick look does not tell apart [1].
_SCREENED_PERFECT = 1e-8
#: A drift that moves the PV by less than this share of its range is arithmetic [1].
_DRIFT_SEEN = 1e-5
#: Residuals below this share of the PV's range are arithmetic, not noise [1].
_ARITHMETIC = 1e-9


def choose(data: BumpData) -> Choice:
    """Fit all structures to a test and rank them.

    Parameters
    ----------
    data : BumpData
        With at least one move of the CO.

    Returns
    -------
    Choice
        Ranked by the Bayesian information criterion (Schwarz 1978) under the noise colour
        the best-fitting structure leaves, counted on the effective samples.

    Raises
    ------
    ValueError
        If the CO never moves.
    """
    if np.all(data.co_values == data.co_values[0]):
        raise ValueError("The CO never moves in this part of the log.")
    problem = Problem(data, np.ones(data.t.size, dtype=bool), drift=True, settling=False)
    problem, screened, apart = _prepared(problem)
    problem, screened, moves = _with_own_gains(problem, screened)
    data, used = problem.data, problem.used
    estimates = _settle_contenders(problem, screened)
    noise = _common_noise(estimates, data, used)
    sure = [e for e in estimates if _told_by_the_log(e, data) and _leading_gain_sure(e, data, used, noise)]
    scored = sorted(
        ((_criterion(e, data, used, noise), e) for e in sure or estimates), key=lambda pair: pair[0]
    )
    ranked = [estimate for _, estimate in scored]
    scores = np.array([score for score, _ in scored])
    weights = np.exp(-0.5 * (scores - scores[0]))
    weights /= weights.sum()
    drift_kept = _drift_matters(ranked[0], data, used, noise)
    driftless = Problem(data, used, drift=False, settling=problem.settling)
    candidates = []
    for estimate, score, weight in zip(ranked, scores, weights, strict=True):
        settled, own = estimate, noise
        if weight >= _WEIGHT_THAT_COUNTS:
            if not drift_kept and estimate.structure.integrators == 0:
                settled = resettle(driftless, estimate)
            own = colour(settled.residual[used], data.t[used], settled.jacobian)
        fit = to_fit(settled, data, used, own, float(score))
        candidates.append(Candidate(fit=fit, score=float(score - scores[0]), weight=float(weight)))
    best = candidates[0].fit
    best = replace(best, notes=(*best.notes, *_notes(apart, drift_kept, problem.settling, moves)))
    candidates[0] = replace(candidates[0], fit=best)
    return Choice(best=best, candidates=tuple(candidates), reason=_reason(candidates))


def _prepared(problem: Problem) -> tuple[Problem, list[Screened], NDArray[np.bool_]]:
    """Screen all structures, having dealt with an unsettled start and with outliers on the way."""
    screened = _screen_all(problem)
    closest = as_screened(problem, screened[0])
    if _still_settling(problem, screened, closest):
        problem = Problem(problem.data, problem.used, drift=True, settling=True)
        screened = _screen_all(problem)
        closest = as_screened(problem, screened[0])
    apart = outliers(closest.residual, _ARITHMETIC * float(np.ptp(problem.data.pv)))
    if np.any(apart):
        problem = Problem(problem.data, ~apart, drift=True, settling=problem.settling)
        screened = _screen_all(problem)
    return problem, screened, apart


def _with_own_gains(
    problem: Problem, screened: list[Screened]
) -> tuple[Problem, list[Screened], GainsByMove]:
    """Scale the moves to what they achieved, where they were not answered alike.

    Lags and dead time that one gain has spoilt spoil the gains too, so this is done twice,
    each time against the moves as logged.
    """
    moves = gains_by_move(problem, as_screened(problem, _simplest(screened)))
    if not moves.differ:
        return problem, screened, moves
    scaled = Problem(moves.data, problem.used, drift=True, settling=problem.settling)
    better = as_screened(scaled, _simplest(_screen_all(scaled)))
    second = gains_by_move(problem, better)
    moves = replace(second, differ=True)
    scaled = Problem(moves.data, problem.used, drift=True, settling=problem.settling)
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
    settling = Problem(problem.data, problem.used, drift=problem.drift, settling=True)
    tried = {screened[0].structure.name: screened[0].structure, "first order": structure_named("first order")}
    cost = screen(settling, list(tried.values()))[0].cost
    rows = problem.pv.size
    floor = rows * _ARITHMETIC**2
    return bool(rows * np.log(max(screened[0].cost, floor) / max(cost, floor)) > _SETTLING_GAIN)


def _settle_contenders(problem: Problem, screened: list[Screened]) -> list[Estimate]:
    """Settle the structures whose criterion, seen roughly, leaves them a chance; the others as they are."""
    count = problem.pv.size
    rough = [
        count * np.log(max(s.cost, _SCREENED_PERFECT * count)) + s.structure.parameter_count * np.log(count)
        for s in screened
    ]
    order = np.argsort(rough, kind="stable")
    out = []
    for place, index in enumerate(order):
        contender = place < _CONTENDERS or rough[index] < rough[order[0]] + _CONTENDER_DISTANCE
        out.append(settle(problem, screened[index]) if contender else as_screened(problem, screened[index]))
    return out


def _common_noise(estimates: list[Estimate], data: BumpData, used: NDArray[np.bool_]) -> Noise:
    closest = min(estimates, key=lambda e: e.cost)
    return colour(closest.residual[used], data.t[used], closest.jacobian)


def _criterion(estimate: Estimate, data: BumpData, used: NDArray[np.bool_], noise: Noise) -> float:
    rss = whitened_sum(estimate.residual[used], data.t[used], noise)
    count = int(np.count_nonzero(used))
    floor = count * (_ARITHMETIC * float(np.ptp(data.pv))) ** 2
    parameters = estimate.structure.parameter_count
    return count * float(np.log(max(rss, floor) / count)) + parameters * float(
        np.log(max(noise.effective_samples, 2.0))
    )


def _told_by_the_log(estimate: Estimate, data: BumpData) -> bool:
    """Tell whether the structure is what it stands for, and the rows dense enough to show it."""
    if not estimate.structure.admits(estimate.gains):
        return False
    model = estimate.structure.model(estimate.search, estimate.gains, 0.0)
    poles = model.poles
    fast = float(np.max(np.abs(poles), initial=0.0)) * _SHORTEST_LAG * data.interval > 1.0
    rings = float(np.max(np.abs(poles.imag), initial=0.0)) * _ROWS_A_PERIOD * data.interval > 2.0 * np.pi
    # a zero slower than the whole record: its slow part never showed
    slow = bool(np.any(np.abs(model.zeros) * data.span < 1.0))
    return not (fast or rings or slow)


def _leading_gain_sure(estimate: Estimate, data: BumpData, used: NDArray[np.bool_], noise: Noise) -> bool:
    """Tell whether the gain that gives the structure its name can be told from none.

    An integrator with inverse response, say, whose integrating gain may be zero is a lag in disguise.
    """
    place = estimate.structure.searched + 1
    variance = covariance(estimate.jacobian, data.t[used], noise)[place, place]
    return bool(abs(estimate.gains[0]) > _GAIN_SURE * np.sqrt(variance))


def _drift_matters(estimate: Estimate, data: BumpData, used: NDArray[np.bool_], noise: Noise) -> bool:
    """Hold the drift against its own standard error under the noise's colour."""
    variance = covariance(estimate.jacobian, data.t[used], noise)[-1, -1]
    moved = abs(estimate.drift) * data.span
    return bool(
        abs(estimate.drift) > _DRIFT_SURE * np.sqrt(variance) and moved > _DRIFT_SEEN * np.ptp(data.pv)
    )


def _notes(
    apart: NDArray[np.bool_], drift_kept: bool, settling: bool, moves: GainsByMove
) -> tuple[tuple[str, str], ...]:
    notes = []
    count = int(np.count_nonzero(apart))
    if count:
        notes.append(("outliers", f"{count} rows stand apart from their neighbours and were set aside."))
    if moves.differ:
        shares = ", ".join(f"{100 * share:.0f} %" for share in moves.scale)
        notes.append(
            (
                "gain-differs-between-moves",
                f"The moves were not answered alike: {shares} of the largest gain, in their order. "
                "The largest gain is used, which is the safe one; expect slower control elsewhere.",
            )
        )
    if settling:
        notes.append(
            ("still-settling", "The PV was still settling when the record began; that was fitted with it.")
        )
    if drift_kept:
        notes.append(("drift", "A straight-line drift was found and taken out."))
    return tuple(notes)


def _reason(candidates: list[Candidate]) -> str:
    best = candidates[0].fit
    if len(candidates) == 1:
        return f"{best.structure.capitalize()} is the only structure that could be fitted."
    second = candidates[1]
    if second.score < 2.0:
        return (
            f"{best.structure.capitalize()} and {second.fit.structure} explain the log alike; "
            f"{best.structure} is kept (difference {second.score:.1f}, a clear one is above 6)."
        )
    strength = "clearly better" if second.score > 6.0 else "better"
    return (
        f"{best.structure.capitalize()} explains the log {strength} for its number of parameters than "
        f"{second.fit.structure} (difference {second.score:.1f}, a clear one is above 6)."
    )


def fit_named(data: BumpData, name: str) -> Fit:
    """Fit one structure by name, drift included, all rows used.

    Parameters
    ----------
    data : BumpData
    name : str
        Name of a structure.

    Raises
    ------
    KeyError
        If there is no such structure.
    """
    used = np.ones(data.t.size, dtype=bool)
    problem = Problem(data, used, drift=True, settling=False)
    estimate = settle(problem, screen(problem, [structure_named(name)])[0])
    noise = colour(estimate.residual, data.t, estimate.jacobian)
    return to_fit(estimate, data, used, noise, _criterion(estimate, data, used, noise))
