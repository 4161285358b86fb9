"""What is left over after a fit: its level, its colour, and what they cost.

Residuals of a plant log are seldom independent: a slow part (load, weather, mixing) stands
under a white one (sensor, quantisation). Both are estimated together, a first-order
autoregressive process in continuous time plus a white share, by restricted maximum
likelihood, which allows for the slow noise that the fitted parameters have already absorbed
(Patterson and Thompson 1971). The covariance of ordinary least squares under that noise
then follows exactly.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.linalg import cholesky_banded, solve_banded
from scipy.linalg.lapack import dpttrf, dpttrs, dtbtrs

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

#: Correlation times looked at: from this many log intervals to this share of the record.
_SHORTEST_CORRELATION = 0.3
_LONGEST_CORRELATION = 0.5
_CORRELATION_GRID = 8
#: Slow shares of the variance looked at [1].
_SHARES = np.array([0.15, 0.5, 1.0])
#: Slow noise must improve twice the log likelihood by this much: little, since missing
#: it costs more than imagining it.
_COLOUR_GAIN = 2.0
#: Directions this weak against the strongest are not told by the rows [1].
_BLIND = 1e-10
#: What keeps a residual that lies in the fit's own span from a division by nothing [1].
_RIDGE = 1e-13


@dataclass(frozen=True, slots=True, kw_only=True)
class Noise:
    """Level and colour of a residual.

    Attributes
    ----------
    sd : float
        Standard deviation, slow and white part together [PV unit].
    correlation : float
        Correlation time of the slow part [s]; zero when there is none.
    slow_share : float
        Share of the variance that is slow [1].
    effective_samples : float
        Independent rows the log is worth for a mean [1].
    """

    sd: float
    correlation: float
    slow_share: float
    effective_samples: float


#: Noise without colour, its level not known.
WHITE = Noise(sd=1.0, correlation=0.0, slow_share=0.0, effective_samples=1.0)


def colour(
    residual: NDArray[np.float64],
    t: NDArray[np.float64],
    jacobian: NDArray[np.float64],
    weight: NDArray[np.float64],
) -> Noise:
    """Estimate level and colour of the noise behind a residual.

    Parameters
    ----------
    residual : (n,) ndarray
        PV minus fit [PV unit].
    t : (n,) ndarray
        Times of the rows [s].
    jacobian : (n, p) ndarray
        Derivatives of the fit by its p parameters.
    weight : (n,) ndarray
        Logged rows each row is the mean of [1].

    Returns
    -------
    Noise
        Of a single logged row.
    """
    logged = float(np.sum(weight))
    if residual.size <= jacobian.shape[1] + 2 or not np.any(residual):
        return Noise(sd=0.0, correlation=0.0, slow_share=0.0, effective_samples=logged)
    columns, size = _columns(residual, jacobian, weight)
    white, variance = _white_deviance(columns)
    found = _search(columns, t, weight)
    if found is None or white - found[0] < _COLOUR_GAIN:
        sd = size * float(np.sqrt(variance))
        return Noise(sd=sd, correlation=0.0, slow_share=0.0, effective_samples=logged)
    _, correlation, share, variance = found
    spread = share * float(np.sum(_half_coloured(weight[:, None], t, correlation) ** 2))
    return Noise(
        sd=size * float(np.sqrt(variance)),
        correlation=correlation,
        slow_share=share,
        effective_samples=logged**2 / (spread + (1.0 - share) * logged),
    )


def deviance(
    residual: NDArray[np.float64],
    t: NDArray[np.float64],
    jacobian: NDArray[np.float64],
    weight: NDArray[np.float64],
) -> float:
    """Give -2 log of the restricted likelihood of a residual under its most likely colour, up to a constant.

    Parameters
    ----------
    residual : (n,) ndarray
        PV minus fit [PV unit].
    t : (n,) ndarray
        Times of the rows [s].
    jacobian : (n, p) ndarray
        Derivatives of the fit by its p parameters.
    weight : (n,) ndarray
        Logged rows each row is the mean of [1].
    """
    columns, size = _columns(residual, jacobian, weight)
    found = _search(columns, t, weight)
    lowest = _white_deviance(columns)[0]
    if found is not None:
        lowest = min(lowest, found[0])
    return float(lowest + 2.0 * (residual.size - columns.shape[1] + 1) * np.log(size))


def _columns(
    residual: NDArray[np.float64], jacobian: NDArray[np.float64], weight: NDArray[np.float64]
) -> tuple[NDArray[np.float64], float]:
    """Give a basis of what was fitted and the residual, of unit size, as the last column; and its size."""
    root = np.sqrt(weight)
    size = float(np.linalg.norm(root * residual))
    return np.column_stack([_spanned(root[:, None] * jacobian), root * residual / size]), size


def covariance(
    jacobian: NDArray[np.float64], t: NDArray[np.float64], noise: Noise, weight: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Give the covariance of a plain least-squares estimate under coloured noise.

    Parameters
    ----------
    jacobian : (n, p) ndarray
        Derivatives of the fit by its parameters.
    t : (n,) ndarray
        Times of the rows [s].
    noise : Noise
    weight : (n,) ndarray
        Logged rows each row is the mean of [1].

    Returns
    -------
    (p, p) ndarray
        sd**2 (J'J)**-1 J'R J (J'J)**-1 with R the noise's correlation; infinite variances
        where the rows do not determine a parameter.
    """
    root = np.sqrt(weight)[:, None]

    def middle(u: NDArray[np.float64]) -> NDArray[np.float64]:
        half = _half_coloured(root * u, t, noise.correlation)
        return noise.slow_share * (half.T @ half) + (1.0 - noise.slow_share) * np.eye(u.shape[1])

    return _covariance(root * jacobian, noise.sd, middle if noise.slow_share > 0.0 else None)


def whitened_covariance(whitened: NDArray[np.float64], noise: Noise) -> NDArray[np.float64]:
    """Give the covariance of a least-squares estimate made on whitened rows.

    Parameters
    ----------
    whitened : (n, p) ndarray
        Derivatives of the fit by its parameters, whitened.
    noise : Noise

    Returns
    -------
    (p, p) ndarray
        sd**2 (J'J)**-1 (Gauss, Markov; Aitken 1936); infinite variances where the rows do
        not determine a parameter.
    """
    return _covariance(whitened, noise.sd, None)


def _covariance(
    jacobian: NDArray[np.float64],
    sd: float,
    middle_of: Callable[[NDArray[np.float64]], NDArray[np.float64]] | None,
) -> NDArray[np.float64]:
    scale = np.linalg.norm(jacobian, axis=0)
    scale[scale == 0.0] = 1.0
    u, s, vt = np.linalg.svd(jacobian / scale, full_matrices=False)
    blind = s < _BLIND * s[0]
    inverse = vt.T / np.where(blind, np.inf, s)
    cov = inverse @ inverse.T if middle_of is None else inverse @ middle_of(u) @ inverse.T
    cov *= sd**2
    if np.any(blind):
        lost = np.any(np.abs(vt[blind]) > 1e-6, axis=0)
        cov[lost, :] = 0.0
        cov[:, lost] = 0.0
        cov[lost, lost] = np.inf
    return cov / np.outer(scale, scale)


class Whitener:
    """What makes the noise of all rows white and alike: W with W' W = S**-1, S its correlation.

    S = share R + (1 - share) D, with R the slow part's correlation and D = 1 / weight. With
    R**-1 = B' B, B bidiagonal, S = B**-1 (share I + (1 - share) B D B') B'**-1, and the
    tridiagonal in the middle has a bidiagonal factor C: W = C**-1 B.

    Parameters
    ----------
    t : (n,) ndarray
        Times of the rows [s].
    noise : Noise
        Its colour counts, its level does not.
    weight : (n,) ndarray
        Logged rows each row is the mean of [1].
    """

    def __init__(self, t: NDArray[np.float64], noise: Noise, weight: NDArray[np.float64]) -> None:
        self._root: NDArray[np.float64] | None = None
        if noise.slow_share <= 0.0:
            self._root = np.sqrt(weight)
            return
        apart = np.diff(t) / noise.correlation
        sharp = np.sqrt(-np.expm1(-2.0 * apart))
        self._diagonal = np.concatenate([[1.0], 1.0 / sharp])
        self._below = -np.exp(-apart) / sharp
        white = 1.0 - noise.slow_share
        middle = noise.slow_share + white * self._diagonal**2 / weight
        middle[1:] += white * self._below**2 / weight[:-1]
        beside = white * self._diagonal[:-1] * self._below / weight[:-1]
        self._factor = cholesky_banded(np.vstack([middle, np.append(beside, 0.0)]), lower=True)

    def __call__(self, rows: NDArray[np.float64]) -> NDArray[np.float64]:
        """Whiten rows of values.

        Parameters
        ----------
        rows : (..., n) ndarray
        """
        if self._root is not None:
            return self._root * rows
        sharpened = self._diagonal * rows
        sharpened[..., 1:] += self._below * rows[..., :-1]
        flat = sharpened.reshape(-1, rows.shape[-1])
        solved, _ = dtbtrs(self._factor, flat.T, uplo="L")
        return np.asarray(solved.T.reshape(rows.shape))


def _spanned(jacobian: NDArray[np.float64]) -> NDArray[np.float64]:
    """Give an orthonormal basis of what the columns span, copies and empty ones left out."""
    scale = np.linalg.norm(jacobian, axis=0)
    u, s, _ = np.linalg.svd(jacobian / np.where(scale > 0.0, scale, 1.0), full_matrices=False)
    return np.asarray(u[:, s > _BLIND * s[0]])


def _search(
    columns: NDArray[np.float64], t: NDArray[np.float64], weight: NDArray[np.float64]
) -> tuple[float, float, float, float] | None:
    """Find deviance, correlation time, slow share and variance at the likelihood's top."""
    low = np.log(_SHORTEST_CORRELATION * float(np.median(np.diff(t))))
    high = np.log(_LONGEST_CORRELATION * float(t[-1] - t[0]))
    if high <= low:
        return None
    times, shares = (
        a.ravel() for a in np.meshgrid(np.linspace(low, high, _CORRELATION_GRID), _SHARES, indexing="ij")
    )
    step, reach = (high - low) / (_CORRELATION_GRID - 1), 0.5
    best, log_time, share, variance = _lowest(columns, t, weight, times, shares)
    # A short pattern search: the deviance is flat at its bottom, so three halvings suffice.
    for _ in range(3):
        step, reach = 0.5 * step, 0.5 * reach
        less, more = share * (1.0 - reach), 1.0 - (1.0 - share) * (1.0 - reach)
        times = np.clip(log_time + step * np.array([-1.0, 1.0, 0.0, 0.0, 1.0, -1.0]), low, high)
        found = _lowest(columns, t, weight, times, np.array([share, share, less, more, less, more]))
        if found[0] < best:
            best, log_time, share, variance = found
    return best, float(np.exp(log_time)), share, variance


def _white_deviance(columns: NDArray[np.float64]) -> tuple[float, float]:
    deviance, variance = _from_grams((columns.T @ columns)[None], np.zeros(1), columns.shape[0])
    return float(deviance[0]), float(variance[0])


def _lowest(
    columns: NDArray[np.float64],
    t: NDArray[np.float64],
    weight: NDArray[np.float64],
    log_times: NDArray[np.float64],
    shares: NDArray[np.float64],
) -> tuple[float, float, float, float]:
    """Find the lowest -2 log of the restricted likelihood, up to a constant, among some colours.

    Returns it with its log correlation time, slow share and variance.
    """
    upper, diagonal, log_det = _precision(t, np.exp(log_times))
    root = np.sqrt(weight)
    upper[:, :-1] /= root[1:] * root[:-1]
    diagonal /= weight
    log_det = log_det + float(np.sum(np.log(weight)))
    grams, more = _weighted(columns, upper, diagonal, shares)
    deviance, variance = _from_grams(grams, log_det + more, columns.shape[0])
    best = int(np.argmin(deviance))
    return float(deviance[best]), float(log_times[best]), float(shares[best]), float(variance[best])


def _from_grams(
    grams: NDArray[np.float64], log_det: NDArray[np.float64], count: int
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Finish the likelihoods from X' R**-1 X with the residual as its last column."""
    p = grams.shape[-1] - 1
    scale = np.sqrt(np.einsum("cii->ci", grams))
    scaled = grams / (scale[:, :, None] * scale[:, None, :]) + _RIDGE * np.eye(p + 1)
    root = np.einsum("cii->ci", np.linalg.cholesky(scaled)) * scale
    variance = root[:, p] ** 2 / (count - p)
    return (count - p) * np.log(variance) + log_det + 2.0 * np.log(root[:, :p]).sum(axis=1), variance


def _precision(
    t: NDArray[np.float64], correlation: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Give the inverse correlations of the slow part, tridiagonal, one for each of c correlation times.

    Returns the (c, n) elements above the diagonal, a zero last, the (c, n) diagonals, and
    log det of each correlation.
    """
    apart = np.diff(t) / correlation[:, None]
    memory = np.exp(-apart)
    fresh = -np.expm1(-2.0 * apart)
    diagonal = np.ones((correlation.size, t.size))
    diagonal[:, 1:] = 1.0 / fresh
    diagonal[:, :-1] += memory**2 / fresh
    upper = np.zeros_like(diagonal)
    upper[:, :-1] = -memory / fresh
    return upper, diagonal, np.log(fresh).sum(axis=1)


def _weighted(
    columns: NDArray[np.float64],
    upper: NDArray[np.float64],
    diagonal: NDArray[np.float64],
    shares: NDArray[np.float64],
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Give X' S**-1 X for S = share R + (1 - share) I, and log det S less log det R, for each colour.

    R is that of the rows as weighted: slow noise stays as large as it is where rows are means of many.

    S = R (share I + (1 - share) Q) with Q = R**-1 tridiagonal, so S**-1 = M**-1 Q with M
    tridiagonal and positive definite: everything costs as much as the rows. The colours stand
    one after the other in one tridiagonal system.
    """
    count = shares.size
    by_precision = diagonal[:, :, None] * columns
    by_precision[:, :-1] += upper[:, :-1, None] * columns[1:]
    by_precision[:, 1:] += upper[:, :-1, None] * columns[:-1]
    white = (1.0 - shares)[:, None]
    factors, below, _ = dpttrf((white * diagonal + shares[:, None]).ravel(), (white * upper).ravel()[:-1])
    solved, _ = dpttrs(factors, below, by_precision.reshape(-1, columns.shape[1]))
    grams = columns.T @ solved.reshape(by_precision.shape)
    return 0.5 * (grams + grams.swapaxes(1, 2)), np.log(factors.reshape(count, -1)).sum(axis=1)


def _half_coloured(
    columns: NDArray[np.float64], t: NDArray[np.float64], correlation: float
) -> NDArray[np.float64]:
    """Give H with H'H = X' R X, R the correlation of the slow part."""
    memory = np.exp(-np.diff(t) / correlation)
    sharp = np.sqrt(-np.expm1(-2.0 * np.diff(t) / correlation))
    diagonal = np.concatenate([[1.0], 1.0 / sharp])
    above = np.concatenate([[0.0], -memory / sharp])
    return np.asarray(solve_banded((0, 1), np.vstack([above, diagonal]), columns))
