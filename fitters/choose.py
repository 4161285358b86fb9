"""Every structure fitted, ranked, and the first place explained."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from fitters.estimate import as_screened, resettle, screen, settle
from fitters.fit import Candidate, Choice
from fitters.holdout import missed_share
from fitters.intervals import covariance_of, to_fit
from fitters.noise import WHITE, colour
from fitters.prepare import ARITHMETIC, prepare
from fitters.problem import Problem
from fitters.spread import gain_scatter
from fitters.structures import structure_named

if TYPE_CHECKING:
    from collections.abc import Sequence

    from fitters.estimate import Estimate, Screened
    from fitters.fit import BumpData, Fit
    from fitters.noise import Noise

#: A drift within this many standard errors of none is left out [1].
_DRIFT_SURE = 2.0
#: A drift that moves the PV by less than this share of its range is arithmetic [1].
_DRIFT_SEEN = 1e-5
#: A lag shorter than this share of the log interval cannot be told from none [1].
_SHORTEST_LAG = 0.2
#: Ringing needs at least this many rows a period to be seen for what it is.
_ROWS_A_PERIOD = 5.0
#: A structure's leading gain within this many standard errors of none takes it out of the running [1].
_GAIN_SURE = 2.0
#: What is left over and stays for this share of the record is a fault of the model as likely as noise [1]:
#: the fit is then made as if it were white, and only its errors follow the colour.
_NOT_NOISE = 0.25
#: Candidates with less weight than this are listed but not refined further [1].
_WEIGHT_THAT_COUNTS = 0.01
#: At least this many structures are settled from several starts, and all within this distance.
_CONTENDERS = 2
_CONTENDER_DISTANCE = 12.0
#: Mean squares below this, in squared spreads of the PV, a quick look does not tell apart [1].
_SCREENED_PERFECT = 1e-8


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
    prepared = prepare(data)
    problem, noise, pairs = _scored(prepared.problem, prepared.screened)
    sure = [p for p in pairs if _told_by_the_log(p[1], problem) and _leading_gain_sure(p[1], problem, noise)]
    scored = sorted(sure or pairs, key=lambda pair: pair[0])
    scores = np.array([score for score, _ in scored])
    weights = np.exp(-0.5 * (scores - scores[0]))
    weights /= weights.sum()
    drift_kept = _drift_matters(scored[0][1], problem, noise)
    driftless = problem.changed(drift=False)
    candidates = []
    for (score, estimate), weight in zip(scored, weights, strict=True):
        counts = weight >= _WEIGHT_THAT_COUNTS
        kept = drift_kept or estimate.structure.integrators > 0 or not counts
        fit = _finished(problem if kept else driftless, estimate, noise, float(score), counts=bool(counts))
        candidates.append(Candidate(fit=fit, score=float(score - scores[0]), weight=float(weight)))
    best = candidates[0].fit
    notes = [*best.notes, *prepared.notes]
    if drift_kept:
        notes.append(("drift", "A straight-line drift was found and taken out."))
    best = replace(best, notes=tuple(notes))
    candidates[0] = replace(candidates[0], fit=best)
    return Choice(
        best=best,
        candidates=tuple(candidates),
        reason=_reason(candidates),
        data=problem.data,
        gain_scatter=gain_scatter(prepared.gains),
        missed_share=missed_share(problem if drift_kept else driftless, scored[0][1], noise),
    )


def _scored(
    problem: Problem, screened: Sequence[Screened]
) -> tuple[Problem, Noise, list[tuple[float, Estimate]]]:
    """Settle the structures and hold them against each other under the colour of the noise they leave.

    Returns the problem they were settled on, the noise, and criterion and estimate of each.
    """
    plain = _settle_contenders(problem, screened)
    closest = min(plain, key=lambda e: e.cost)
    noise = colour(closest.residual[problem.used], problem.t, closest.jacobian, problem.weight)
    if noise.slow_share <= 0.0:
        return problem, noise, [(_criterion(e, problem), e) for e in plain]
    weighed = problem.changed(noise=noise)
    # from where the plain fit ended: under slow noise the cost has many shallow valleys
    estimates = [resettle(weighed, e) for e in plain]
    scores = [_criterion(e, weighed) for e in estimates]
    if _may_be_noise(noise, problem):
        return weighed, noise, list(zip(scores, estimates, strict=True))
    return problem, noise, list(zip(scores, plain, strict=True))


def _may_be_noise(noise: Noise, problem: Problem) -> bool:
    return noise.correlation < _NOT_NOISE * problem.data.span


def _settle_contenders(problem: Problem, screened: Sequence[Screened]) -> list[Estimate]:
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


def _finished(problem: Problem, estimate: Estimate, noise: Noise, score: float, *, counts: bool) -> Fit:
    """Give an estimate its intervals, under the colour of what it leaves over itself if it counts."""
    if estimate.drift != 0.0 and not problem.drift:
        estimate = resettle(problem, estimate)
    if counts:
        used = problem.used
        noise = colour(estimate.residual[used], problem.t, estimate.jacobian, problem.weight)
        weighed = noise if _may_be_noise(noise, problem) else WHITE
        if weighed.slow_share > 0.0 or problem.noise.slow_share > 0.0:
            problem = problem.changed(noise=weighed)
            estimate = resettle(problem, estimate)
    return to_fit(estimate, problem, noise, score, closely=counts)


def _criterion(estimate: Estimate, problem: Problem) -> float:
    count = problem.pv.size
    floor = count * (ARITHMETIC * float(np.ptp(problem.data.pv))) ** 2
    misfit = count * float(np.log(max(estimate.cost, floor) / count))
    return misfit + estimate.structure.parameter_count * float(np.log(count))


def _told_by_the_log(estimate: Estimate, problem: Problem) -> bool:
    """Tell whether the structure is what it stands for, and the rows dense enough to show it."""
    data = problem.data
    if not estimate.structure.admits(estimate.gains):
        return False
    model = estimate.structure.model(estimate.search, estimate.gains, 0.0)
    poles = model.poles
    fast = float(np.max(np.abs(poles), initial=0.0)) * _SHORTEST_LAG * data.interval > 1.0
    rings = float(np.max(np.abs(poles.imag), initial=0.0)) * _ROWS_A_PERIOD * data.interval > 2.0 * np.pi
    # a zero slower than the whole record: its slow part never showed
    slow = bool(np.any(np.abs(model.zeros) * data.span < 1.0))
    return not (fast or rings or slow)


def _leading_gain_sure(estimate: Estimate, problem: Problem, noise: Noise) -> bool:
    """Tell whether the gain that gives the structure its name can be told from none.

    An integrator with inverse response, say, whose integrating gain may be zero is a lag in disguise.
    """
    place = estimate.structure.searched + 1
    variance = covariance_of(estimate, problem, noise)[place, place]
    return bool(abs(estimate.gains[0]) > _GAIN_SURE * np.sqrt(variance))


def _drift_matters(estimate: Estimate, problem: Problem, noise: Noise) -> bool:
    """Hold the drift against its own standard error under the noise's colour."""
    variance = covariance_of(estimate, problem, noise)[-1, -1]
    moved = abs(estimate.drift) * problem.data.span
    return bool(
        abs(estimate.drift) > _DRIFT_SURE * np.sqrt(variance)
        and moved > _DRIFT_SEEN * np.ptp(problem.data.pv)
    )


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
    problem = Problem(data, np.ones(data.t.size, dtype=bool), drift=True, settling=False)
    estimate = settle(problem, screen(problem, [structure_named(name)])[0])
    return _finished(problem, estimate, WHITE, _criterion(estimate, problem), counts=True)
