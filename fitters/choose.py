"""Every structure fitted, ranked, and the first place explained."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from fitters.estimate import Screened, as_screened, screen, settle
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
#: A structure's leading gain within this many standard errors of none takes it out of the running [1].
_GAIN_SURE = 2.0
#: Candidates with less weight than this are listed but not refined further [1].
_WEIGHT_THAT_COUNTS = 0.01
#: At least this many structures are settled from several starts, and all within this distance.
_CONTENDERS = 3
_CONTENDER_DISTANCE = 12.0
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
    used = np.ones(data.t.size, dtype=bool)
    screened = _screen_all(data, used)
    closest = settle(Problem(data, used, drift=True), screened[0], several=False)
    apart = outliers(closest.residual, _ARITHMETIC * float(np.ptp(data.pv)))
    if np.any(apart):
        used = ~apart
        screened = _screen_all(data, used)
    estimates = _settle_contenders(data, used, screened)
    noise = _common_noise(estimates, data, used)
    sure = [e for e in estimates if _leading_gain_sure(e, data, used, noise)]
    ranked = sorted(sure or estimates, key=lambda e: _criterion(e, data, used, noise))
    scores = np.array([_criterion(e, data, used, noise) for e in ranked])
    weights = np.exp(-0.5 * (scores - scores[0]))
    weights /= weights.sum()
    drift_kept = _drift_matters(ranked[0], data, used)
    candidates = []
    for estimate, score, weight in zip(ranked, scores, weights, strict=True):
        settled, own = estimate, noise
        if weight >= _WEIGHT_THAT_COUNTS:
            if not drift_kept and estimate.structure.integrators == 0:
                settled = _without_drift(estimate, data, used)
            own = colour(settled.residual[used], data.t[used], settled.jacobian)
        fit = to_fit(settled, data, used, own, float(score))
        candidates.append(Candidate(fit=fit, score=float(score - scores[0]), weight=float(weight)))
    best = candidates[0].fit
    best = replace(best, notes=(*best.notes, *_notes(apart, drift_kept)))
    candidates[0] = replace(candidates[0], fit=best)
    return Choice(best=best, candidates=tuple(candidates), reason=_reason(candidates))


def _screen_all(data: BumpData, used: NDArray[np.bool_]) -> list[Screened]:
    """Look at every structure quickly, closest to the log first."""
    problem = Problem(data, used, drift=True)
    return sorted((screen(problem, structure) for structure in all_structures()), key=lambda s: s.cost)


def _settle_contenders(data: BumpData, used: NDArray[np.bool_], screened: list[Screened]) -> list[Estimate]:
    """Settle the structures whose criterion, seen roughly, leaves them a chance; the others as they are."""
    problem = Problem(data, used, drift=True)
    count = int(np.count_nonzero(used))
    rough = [
        count * np.log(max(s.cost, 1e-18 * count)) + s.structure.parameter_count * np.log(count)
        for s in screened
    ]
    order = np.argsort(rough, kind="stable")
    out = []
    for place, index in enumerate(order):
        contender = place < _CONTENDERS or rough[index] < rough[order[0]] + _CONTENDER_DISTANCE
        out.append(settle(problem, screened[index]) if contender else as_screened(problem, screened[index]))
    return out


def _without_drift(estimate: Estimate, data: BumpData, used: NDArray[np.bool_]) -> Estimate:
    problem = Problem(data, used, drift=False)
    start = (estimate.search, estimate.dead_time)
    begun = Screened(structure=estimate.structure, end=start, cost=estimate.cost, starts=(start,))
    settled = settle(problem, begun, several=False)
    return replace(
        settled,
        starts=estimate.starts,
        starts_agreeing=estimate.starts_agreeing,
        rival_dead_times=estimate.rival_dead_times,
    )


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


def _leading_gain_sure(estimate: Estimate, data: BumpData, used: NDArray[np.bool_], noise: Noise) -> bool:
    """Tell whether the gain that gives the structure its name can be told from none.

    An integrator with a zero, say, whose integrating gain may be zero is a first order in disguise.
    """
    place = estimate.structure.searched + 1
    variance = covariance(estimate.jacobian, data.t[used], noise)[place, place]
    return bool(abs(estimate.gains[0]) > _GAIN_SURE * np.sqrt(variance))


def _drift_matters(estimate: Estimate, data: BumpData, used: NDArray[np.bool_]) -> bool:
    """Hold the drift against its own standard error under the noise's colour."""
    own = colour(estimate.residual[used], data.t[used], estimate.jacobian)
    variance = covariance(estimate.jacobian, data.t[used], own)[-1, -1]
    moved = abs(estimate.drift) * data.span
    return bool(
        abs(estimate.drift) > _DRIFT_SURE * np.sqrt(variance) and moved > _DRIFT_SEEN * np.ptp(data.pv)
    )


def _notes(apart: NDArray[np.bool_], drift_kept: bool) -> tuple[tuple[str, str], ...]:
    notes = []
    count = int(np.count_nonzero(apart))
    if count:
        notes.append(("outliers", f"{count} rows stand apart from their neighbours and were set aside."))
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
    problem = Problem(data, used, drift=True)
    estimate = settle(problem, screen(problem, structure_named(name)))
    noise = colour(estimate.residual, data.t, estimate.jacobian)
    return to_fit(estimate, data, used, noise, _criterion(estimate, data, used, noise))
