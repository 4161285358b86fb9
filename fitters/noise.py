"""What is left over after a fit: its level, its colour, its outliers, and what they cost.

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
from scipy.linalg import solve_banded
from scipy.linalg.lapack import dpttrf, dpttrs

if TYPE_CHECKING:
    from numpy.typing import NDArray

#: A residual this many robust standard deviations from its neighbours is set aside [1].
_OUTLIER_SD = 6.0
#: Rows on each side that say what a residual's neighbours are.
_OUTLIER_REACH = 4
#: At most this share of the rows may be called outliers before the fit itself is the suspect [1].
_OUTLIER_SHARE = 0.05
#: From the median absolute deviation to the standard deviation of a normal variable.
_MAD_TO_SD = 1.4826
#: Correlation times looked at: from this many log intervals to this share of the record.
_SHORTEST_CORRELATION = 0.3
_LONGEST_CORRELATION = 0.5
_CORRELATION_GRID = 8
#: Slow shares of the variance looked at [1].
_SHARES = np.array([0.15, 0.5, 1.0])
#: Slow noise must improve twice the log likelihood by this much: little, since missing
#: it costs more than imagining it.
_COLOUR_GAIN = 1.0
#: Directions this weak against the strongest are not told by the rows [1].
_BLIND = 1e-10
#: What keeps a residual that lies in the fit's own span from a division by nothing [1].
_RIDGE = 1e-13
#: Rows the colour is estimated from; more add nothing but time.
_COLOUR_ROWS = 1500


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


def colour(residual: NDArray[np.float64], t: NDArray[np.float64], jacobian: NDArray[np.float64]) -> Noise:
    """Estimate level and colour of the noise behind a residual.

    Parameters
    ----------
    residual : (n,) ndarray
        PV minus fit [PV unit].
    t : (n,) ndarray
        Times of the rows [s].
    jacobian : (n, p) ndarray
        Derivatives of the fit by its p parameters.

    Returns
    -------
    Noise
    """
    count = residual.size
    if count <= jacobian.shape[1] + 2 or not np.any(residual):
        return Noise(sd=0.0, correlation=0.0, slow_share=0.0, effective_samples=float(count))
    stride = max(1, count // _COLOUR_ROWS)
    size = float(np.linalg.norm(residual[::stride]))
    columns = np.column_stack([_spanned(jacobian)[::stride], residual[::stride] / size])
    times = t[::stride]
    white, variance = _white_deviance(columns)
    found = _search(columns, times)
    if found is None or white - found[0] < _COLOUR_GAIN:
        sd = size * float(np.sqrt(variance))
        return Noise(sd=sd, correlation=0.0, slow_share=0.0, effective_samples=float(count))
    _, correlation, share, variance = found
    ones = np.ones((count, 1))
    spread = share * float(np.sum(_half_coloured(ones, t, correlation) ** 2)) + (1.0 - share) * count
    return Noise(
        sd=size * float(np.sqrt(variance)),
        correlation=correlation,
        slow_share=share,
        effective_samples=float(count**2 / spread),
    )


def covariance(jacobian: NDArray[np.float64], t: NDArray[np.float64], noise: Noise) -> NDArray[np.float64]:
    """Give the covariance of a least-squares estimate under coloured noise.

    Parameters
    ----------
    jacobian : (n, p) ndarray
        Derivatives of the fit by its parameters.
    t : (n,) ndarray
        Times of the rows [s].
    noise : Noise

    Returns
    -------
    (p, p) ndarray
        sd**2 (J'J)**-1 J'R J (J'J)**-1 with R the noise's correlation; infinite variances
        where the rows do not determine a parameter.
    """
    scale = np.linalg.norm(jacobian, axis=0)
    scale[scale == 0.0] = 1.0
    u, s, vt = np.linalg.svd(jacobian / scale, full_matrices=False)
    blind = s < _BLIND * s[0]
    inverse = vt.T / np.where(blind, np.inf, s)
    middle = np.eye(s.size)
    if noise.slow_share > 0.0:
        half = _half_coloured(u, t, noise.correlation)
        middle = noise.slow_share * (half.T @ half) + (1.0 - noise.slow_share) * middle
    cov = noise.sd**2 * (inverse @ middle @ inverse.T)
    if np.any(blind):
        lost = np.any(np.abs(vt[blind]) > 1e-6, axis=0)
        cov[lost, :] = 0.0
        cov[:, lost] = 0.0
        cov[lost, lost] = np.inf
    return cov / np.outer(scale, scale)


def whitened_sum(residual: NDArray[np.float64], t: NDArray[np.float64], noise: Noise) -> float:
    """Sum the squares of a residual after its colour is taken out [PV unit squared].

    Parameters
    ----------
    residual : (n,) ndarray
    t : (n,) ndarray
        Times of the rows [s].
    noise : Noise
        Its colour counts, its level does not.

    Returns
    -------
    float
        e' R**-1 e, R being the noise's correlation.
    """
    if noise.slow_share <= 0.0:
        return float(residual @ residual)
    precision, _ = _precision(t, noise.correlation)
    return float(_weighted(residual[:, None], precision, noise.slow_share)[0][0, 0])


def outliers(residual: NDArray[np.float64], resolution: float) -> NDArray[np.bool_]:
    """Find rows that stand apart from their neighbours.

    Parameters
    ----------
    residual : (n,) ndarray
        PV minus fit [PV unit].
    resolution : float
        Differences below this are never called outliers [PV unit].

    Returns
    -------
    (n,) bool ndarray
        True at the rows to set aside; none where they would be more than a few percent,
        since then the fit and not the row is the suspect.
    """
    padded = np.pad(residual, _OUTLIER_REACH, mode="reflect")
    windows = np.lib.stride_tricks.sliding_window_view(padded, 2 * _OUTLIER_REACH + 1)
    apart = np.abs(residual - np.median(windows, axis=1))
    sd = _MAD_TO_SD * float(np.median(np.abs(residual - np.median(residual))))
    found = apart > max(_OUTLIER_SD * sd, resolution)
    if np.count_nonzero(found) > _OUTLIER_SHARE * residual.size:
        return np.zeros(residual.size, dtype=bool)
    return np.asarray(found)


def _spanned(jacobian: NDArray[np.float64]) -> NDArray[np.float64]:
    """Give an orthonormal basis of what the columns span, copies and empty ones left out."""
    scale = np.linalg.norm(jacobian, axis=0)
    u, s, _ = np.linalg.svd(jacobian / np.where(scale > 0.0, scale, 1.0), full_matrices=False)
    return np.asarray(u[:, s > _BLIND * s[0]])


def _search(columns: NDArray[np.float64], t: NDArray[np.float64]) -> tuple[float, float, float, float] | None:
    """Find deviance, correlation time, slow share and variance at the likelihood's top."""
    low = np.log(_SHORTEST_CORRELATION * float(np.median(np.diff(t))))
    high = np.log(_LONGEST_CORRELATION * float(t[-1] - t[0]))
    if high <= low:
        return None
    grid = np.linspace(low, high, _CORRELATION_GRID)
    table = np.array([[_deviance(columns, t, g, share)[0] for share in _SHARES] for g in grid])
    row, column = np.unravel_index(int(np.argmin(table)), table.shape)
    log_time, share = float(grid[row]), float(_SHARES[column])
    step, reach = float(grid[1] - grid[0]), 0.5
    best = float(table[row, column])
    # A short pattern search: the deviance is flat at its bottom, so three halvings suffice.
    for _ in range(3):
        step, reach = 0.5 * step, 0.5 * reach
        for t_try, s_try in (
            (log_time - step, share),
            (log_time + step, share),
            (log_time, share * (1.0 - reach)),
            (log_time, 1.0 - (1.0 - share) * (1.0 - reach)),
            (log_time + step, share * (1.0 - reach)),
            (log_time - step, 1.0 - (1.0 - share) * (1.0 - reach)),
        ):
            if not low <= t_try <= high:
                continue
            value = _deviance(columns, t, t_try, s_try)[0]
            if value < best:
                best, log_time, share = value, t_try, s_try
    return best, float(np.exp(log_time)), share, _deviance(columns, t, log_time, share)[1]


def _white_deviance(columns: NDArray[np.float64]) -> tuple[float, float]:
    gram = columns.T @ columns
    return _from_gram(gram, 0.0, columns.shape[0])


def _deviance(
    columns: NDArray[np.float64], t: NDArray[np.float64], log_time: float, share: float
) -> tuple[float, float]:
    """Give -2 log of the restricted likelihood, up to a constant, and the variance."""
    precision, log_det = _precision(t, float(np.exp(log_time)))
    gram, more = _weighted(columns, precision, share)
    return _from_gram(gram, log_det + more, columns.shape[0])


def _from_gram(gram: NDArray[np.float64], log_det: float, count: int) -> tuple[float, float]:
    """Finish the likelihood from X' R**-1 X with the residual as its last column."""
    p = gram.shape[0] - 1
    scale = np.sqrt(np.diag(gram))
    root = scale[:, None] * np.linalg.cholesky(gram / np.outer(scale, scale) + _RIDGE * np.eye(p + 1))
    variance = float(root[p, p] ** 2) / (count - p)
    deviance = (count - p) * np.log(variance) + log_det + 2.0 * float(np.sum(np.log(np.diag(root)[:p])))
    return float(deviance), variance


def _precision(t: NDArray[np.float64], correlation: float) -> tuple[NDArray[np.float64], float]:
    """Give the inverse correlation of the slow part, tridiagonal, and log det of the correlation.

    Returns the elements above the diagonal, after a zero, and the diagonal.
    """
    memory = np.exp(-np.diff(t) / correlation)
    fresh = -np.expm1(-2.0 * np.diff(t) / correlation)
    diagonal = np.ones(t.size)
    diagonal[1:] = 1.0 / fresh
    diagonal[:-1] += memory**2 / fresh
    above = np.concatenate([[0.0], -memory / fresh])
    return np.vstack([above, diagonal]), float(np.sum(np.log(fresh)))


def _weighted(
    columns: NDArray[np.float64], precision: NDArray[np.float64], share: float
) -> tuple[NDArray[np.float64], float]:
    """Give X' S**-1 X for S = share R + (1 - share) I, and log det S less log det R.

    S = R (share I + (1 - share) Q) with Q = R**-1 tridiagonal, so S**-1 = M**-1 Q with M
    tridiagonal and positive definite: everything costs as much as the rows.
    """
    by_precision = precision[1][:, None] * columns
    by_precision[:-1] += precision[0][1:, None] * columns[1:]
    by_precision[1:] += precision[0][1:, None] * columns[:-1]
    if share >= 1.0:
        return columns.T @ by_precision, 0.0
    diagonal, below, _ = dpttrf((1.0 - share) * precision[1] + share, (1.0 - share) * precision[0][1:])
    solved, _ = dpttrs(diagonal, below, by_precision)
    gram = columns.T @ solved
    return 0.5 * (gram + gram.T), float(np.sum(np.log(diagonal)))


def _half_coloured(
    columns: NDArray[np.float64], t: NDArray[np.float64], correlation: float
) -> NDArray[np.float64]:
    """Give H with H'H = X' R X, R the correlation of the slow part."""
    memory = np.exp(-np.diff(t) / correlation)
    sharp = np.sqrt(-np.expm1(-2.0 * np.diff(t) / correlation))
    diagonal = np.concatenate([[1.0], 1.0 / sharp])
    above = np.concatenate([[0.0], -memory / sharp])
    return np.asarray(solve_banded((0, 1), np.vstack([above, diagonal]), columns))
