"""From an estimate and its noise to intervals a person can read and models to draw from."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import chdtri, ndtri, stdtrit

from fitters.even import evenly
from fitters.fit import Fit, Parameter, frozen
from fitters.noise import covariance, whitened_covariance
from fitters.profile import ends_of

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from fitters.estimate import Estimate
    from fitters.noise import Noise
    from fitters.problem import Problem
    from fitters.process import ProcessModel

#: Probability that an interval is to hold the truth [1].
_COVERAGE = 0.95
#: A positive number known no better than this factor's logarithm is as good as unknown [1].
_UNKNOWN_LOG_SD = 3.0
#: A factor drawn on a logarithmic scale when it is this many standard errors from zero [1].
_SURE_OF_SIGN = 2.5
#: A lag whose standard error is more than this share of it has a lopsided interval [1].
_LOPSIDED = 0.15
#: With more searched numbers than this the dead time's interval is left to the curvature.
_PROFILED = 2
#: Fewest degrees of freedom the noise estimate is credited with [1].
_FEWEST_DEGREES = 3.0


def to_fit(estimate: Estimate, problem: Problem, noise: Noise, criterion: float, *, closely: bool) -> Fit:
    """Give an estimate its intervals.

    Parameters
    ----------
    estimate : Estimate
    problem : Problem
        What it was settled on.
    noise : Noise
        Level and colour of what the fit leaves over.
    criterion : float
        Information criterion, smaller is better [1].
    closely : bool
        Ask the likelihood itself where the curvature is a poor guide.

    Returns
    -------
    Fit
    """
    data, used = problem.data, problem.used
    cov = _parameter_covariance(estimate, problem, noise)
    degrees = max(noise.effective_samples - cov.shape[0], _FEWEST_DEGREES)
    quantile = float(stdtrit(degrees, 0.5 + 0.5 * _COVERAGE))
    parameters, own = _parameters(estimate, cov, quantile, data.interval)
    if closely:
        parameters = _lopsided(parameters, estimate, problem, noise, quantile)
    correlation = _correlation(own)
    model = estimate.structure.model(estimate.search, estimate.gains, max(estimate.dead_time, 0.0))
    used_residual = estimate.residual[used]
    about_mean = data.pv[used] - np.mean(data.pv[used])
    size = float(np.linalg.norm(about_mean))
    return Fit(
        structure=estimate.structure.name,
        model=model,
        parameters=parameters,
        correlation=frozen(correlation),
        offset=estimate.offset,
        drift=estimate.drift,
        fitted=frozen(data.pv - estimate.residual),
        residual=frozen(estimate.residual),
        used=_frozen_flags(used),
        fit_pct=100.0 * (1.0 - float(np.linalg.norm(used_residual)) / size) if size > 0 else 0.0,
        rmse=float(np.sqrt(np.mean(used_residual**2))),
        noise_sd=noise.sd,
        noise_correlation=noise.correlation,
        effective_samples=noise.effective_samples,
        criterion=criterion,
        converged=estimate.converged,
        starts=estimate.starts,
        starts_agreeing=estimate.starts_agreeing,
        notes=_notes(estimate, parameters),
        draw=_drawer(estimate, cov, degrees),
    )


def covariance_of(
    estimate: Estimate, problem: Problem, noise: Noise, kept: list[int] | None = None
) -> NDArray[np.float64]:
    """Give the covariance of an estimate's parameters, in the order of its Jacobian.

    Parameters
    ----------
    estimate : Estimate
    problem : Problem
        What it was settled on: with the noise's colour taken out, or plainly.
    noise : Noise
    kept : list of int or None
        Some of the parameters, the others known; all of them if None.
    """
    chosen = slice(None) if kept is None else kept
    if problem.noise.slow_share > 0.0:
        return whitened_covariance(estimate.whitened[:, chosen], noise)
    return covariance(estimate.jacobian[:, chosen], problem.t, noise, problem.weight)


def _frozen_flags(used: NDArray[np.bool_]) -> NDArray[np.bool_]:
    copy = np.array(used, dtype=bool)
    copy.setflags(write=False)
    return copy


def _parameter_covariance(estimate: Estimate, problem: Problem, noise: Noise) -> NDArray[np.float64]:
    """Covariance of (searched, dead time, gains), level and drift marginalised."""
    k, r = estimate.structure.searched, estimate.structure.gains
    if estimate.dead_time_fixed:  # held at zero or known to a row: its own spread is added below
        kept = [i for i in range(estimate.jacobian.shape[1]) if i != k]
    else:
        kept = list(range(estimate.jacobian.shape[1]))
    inner = covariance_of(estimate, problem, noise, kept)
    full = np.zeros((estimate.jacobian.shape[1],) * 2)
    full[np.ix_(kept, kept)] = inner
    if estimate.dead_time_fixed:
        if estimate.structure.has_dead_time_search:
            # at the bound: the spread it would have were it free, as one-sided as it really is
            free = covariance_of(estimate, problem, noise)
            full[k, k] = free[k, k]
        else:  # anywhere between two rows alike: a rectangular distribution (JCGM 100:2008, 4.3.7)
            full[k, k] = problem.data.interval**2 / 12.0
    return full[: k + 1 + r, : k + 1 + r]


def _parameters(
    estimate: Estimate, cov: NDArray[np.float64], quantile: float, interval: float
) -> tuple[tuple[Parameter, ...], NDArray[np.float64]]:
    """Carry the covariance to the numbers a person asks for, by their slopes.

    Returns the parameters and the covariance of the structure's own ones, in log terms
    where they are positive.
    """
    k = estimate.structure.searched
    point = np.concatenate([estimate.search, [estimate.dead_time], estimate.gains])
    quantities = estimate.structure.quantities(estimate.search, estimate.gains, estimate.dead_time)
    values = _values(estimate, point)
    logs = np.array([q.positive for q in quantities])
    step = np.maximum(1e-6 * np.abs(point), 1e-7)
    step[k] = max(1e-6 * abs(estimate.dead_time), 1e-6 * interval)
    slopes = np.empty((len(quantities), point.size))
    for i in range(point.size):
        shift = np.zeros(point.size)
        shift[i] = step[i]
        slopes[:, i] = (_values(estimate, point + shift) - _values(estimate, point - shift)) / (2 * step[i])
    slopes[logs] /= values[logs, None]
    unit_dead_time = np.zeros((1, point.size))
    unit_dead_time[0, k] = 1.0
    all_slopes = np.vstack([unit_dead_time, slopes])
    variances = _quadratic_forms(all_slopes, cov)
    own = [0]
    out = [_dead_time(estimate, float(np.sqrt(variances[0])), quantile)]
    for i, quantity in enumerate(quantities):
        sd = float(np.sqrt(variances[i + 1]))
        out.append(_parameter(quantity.name, quantity.value, quantity.unit, sd, quantile, quantity.positive))
        if len(own) < point.size:
            own.append(i + 1)
    chosen = all_slopes[own]
    finite = np.where(np.isfinite(cov), cov, 0.0)
    return (*out[1 : point.size], out[0], *out[point.size :]), chosen @ finite @ chosen.T


def _lopsided(
    parameters: tuple[Parameter, ...], estimate: Estimate, problem: Problem, noise: Noise, quantile: float
) -> tuple[Parameter, ...]:
    """Replace the intervals that the curvature gets wrong: at zero, and of a lag the log hardly ends."""
    structure = estimate.structure
    slow = noise.slow_share > 0.0 and problem.noise.slow_share <= 0.0
    if not structure.has_dead_time_search or noise.sd <= 0.0 or slow:
        return parameters
    found = {p.name: p for p in parameters}
    dead_time = found["dead_time"]
    if dead_time.low <= 0.0 and structure.searched <= _PROFILED:
        ends = ends_of(
            problem, estimate, noise, held=structure.searched, stderr=dead_time.stderr, quantile=quantile
        )
        found["dead_time"] = replace(dead_time, low=max(ends.low, 0.0), high=ends.high)
    lag, gain = found.get("lag"), parameters[0]
    if structure.searched == 1 and lag is not None and lag.stderr > _LOPSIDED * lag.value:
        wide = lag.stderr / lag.value if np.isfinite(lag.stderr) else _UNKNOWN_LOG_SD
        ends = ends_of(problem, estimate, noise, held=0, stderr=min(wide, 1.0), quantile=quantile)
        low, high = float(np.exp(ends.low)), float(np.exp(ends.high))
        found["lag"] = replace(lag, low=low, high=high)
        if gain.name == "gain":
            edges = sorted(
                (ends.gain_low, ends.gain_high if np.isfinite(high) else np.copysign(np.inf, gain.value))
            )
            found["gain"] = replace(gain, low=edges[0], high=edges[1])
    return tuple(found.values())


def _values(estimate: Estimate, point: NDArray[np.float64]) -> NDArray[np.float64]:
    k = estimate.structure.searched
    found = estimate.structure.quantities(point[:k], point[k + 1 :], float(point[k]))
    return np.array([q.value for q in found])


def _quadratic_forms(slopes: NDArray[np.float64], cov: NDArray[np.float64]) -> NDArray[np.float64]:
    """Give s C s' for each row s, infinite where it touches an infinite variance."""
    unknown = np.isinf(np.diag(cov))
    finite = np.where(np.isfinite(cov), cov, 0.0)
    out = np.maximum(np.einsum("ij,jk,ik->i", slopes, finite, slopes), 0.0)
    out[np.any(np.abs(slopes[:, unknown]) > 0.0, axis=1)] = np.inf
    return np.asarray(out)


def _parameter(name: str, value: float, unit: str, sd: float, quantile: float, positive: bool) -> Parameter:
    if positive:
        wide = quantile * min(sd, _UNKNOWN_LOG_SD)
        sure = sd < _UNKNOWN_LOG_SD
        return Parameter(
            name=name,
            value=value,
            unit=unit,
            stderr=value * sd if sure else np.inf,
            low=value * float(np.exp(-wide)) if sure else 0.0,
            high=value * float(np.exp(wide)) if sure else np.inf,
        )
    return Parameter(
        name=name, value=value, unit=unit, stderr=sd, low=value - quantile * sd, high=value + quantile * sd
    )


def _dead_time(estimate: Estimate, sd: float, quantile: float) -> Parameter:
    value = max(estimate.dead_time, 0.0)
    return Parameter(
        name="dead_time",
        value=value,
        unit="s",
        stderr=sd,
        low=max(value - quantile * sd, 0.0),
        high=value + quantile * sd,
    )


def _correlation(cov: NDArray[np.float64]) -> NDArray[np.float64]:
    sd = np.sqrt(np.maximum(np.diag(cov), 0.0))
    sd = np.where(sd > 0.0, sd, 1.0)
    out = cov / np.outer(sd, sd)
    np.fill_diagonal(out, 1.0)
    return np.asarray(np.clip(out, -1.0, 1.0))


def _notes(estimate: Estimate, parameters: tuple[Parameter, ...]) -> tuple[tuple[str, str], ...]:
    notes: list[tuple[str, str]] = []
    dead_time = next(p for p in parameters if p.name == "dead_time")
    if estimate.structure.has_dead_time_search and dead_time.low <= 0.0:
        notes.append(
            (
                "dead-time-may-be-zero",
                f"The dead time lies between 0 and {dead_time.high:.3g} s: the log cannot tell it from none.",
            )
        )
    if estimate.rival_dead_times:
        others = " and ".join(f"{v:.3g} s" for v in sorted({round(v, 6) for v in estimate.rival_dead_times}))
        notes.append(
            (
                "dead-time-ambiguous",
                f"A dead time of {others} fits nearly as well as {dead_time.value:.3g} s.",
            )
        )
    if not estimate.converged:
        notes.append(("search-unfinished", "The search for the parameters did not settle."))
    return tuple(notes)


def _drawer(
    estimate: Estimate, cov: NDArray[np.float64], degrees: float
) -> Callable[[int, int], tuple[ProcessModel, ...]]:
    """Make the function that draws plausible processes.

    Gains whose sign is sure are drawn on a logarithmic scale, as the lags are, so that the
    narrow valley of gain over lag stays a valley; one chi-square factor for the whole draw
    makes the joint distribution Student's, as the intervals are.
    """
    k = estimate.structure.searched
    gains = estimate.gains
    structure = estimate.structure

    def draw(count: int, seed: int) -> tuple[ProcessModel, ...]:
        finite = np.where(np.isfinite(cov), cov, 0.0)
        for i in range(cov.shape[0]):
            if np.isinf(cov[i, i]) and i < k:
                finite[i, i] = _UNKNOWN_LOG_SD**2
            elif np.isinf(cov[i, i]) and i == k:
                finite[i, i] = max(estimate.dead_time, estimate.slowest) ** 2
            elif np.isinf(cov[i, i]):
                finite[i, i] = (10.0 * max(abs(gains[i - k - 1]), 1e-12)) ** 2
        sd_gains = np.sqrt(np.diag(finite)[k + 1 :])
        by_log = np.abs(gains) > _SURE_OF_SIGN * sd_gains
        scale = np.ones(cov.shape[0])
        scale[k + 1 :][by_log] = 1.0 / gains[by_log]
        scaled = finite * np.outer(scale, scale)
        weights, vectors = np.linalg.eigh(scaled)
        root = vectors * np.sqrt(np.maximum(weights, 0.0))
        even = evenly(count, root.shape[1] + 1, seed)
        normal = ndtri(even[:, 1:])
        stretch = np.sqrt(degrees / chdtri(degrees, even[:, 0]))
        moved = (normal @ root.T) * stretch[:, None]
        searches = estimate.search + np.clip(moved[:, :k], -12.0, 12.0)
        dead_times = np.maximum(estimate.dead_time + moved[:, k], 0.0)
        logged = gains * np.exp(np.clip(moved[:, k + 1 :], -12.0, 12.0))
        drawn = np.where(by_log, logged, gains + moved[:, k + 1 :])
        return tuple(
            structure.model(q, g, float(d)) for q, g, d in zip(searches, drawn, dead_times, strict=True)
        )

    return draw
