"""What is left over after a fit: its level, its colour, its outliers, and what they cost.

Residuals of a plant log are seldom independent. Their colour is estimated as a first-order
autoregressive process in continuous time by restricted maximum likelihood, which allows for
the slow noise that the fitted parameters have already absorbed (Patterson and Thompson 1971).
The covariance of ordinary least squares under that colour then follows exactly.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.linalg import solve_banded
from scipy.optimize import minimize_scalar

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
#: Correlation times looked at, in log intervals at the short end and spans at the long end.
_SHORTEST_CORRELATION = 0.15
_LONGEST_CORRELATION = 0.5
_CORRELATION_GRID = 16


@dataclass(frozen=True, slots=True, kw_only=True)
class Noise:
    """Level and colour of a residual.

    Attributes
    ----------
    sd : float
        Standard deviation [PV unit].
    correlation : float
        Correlation time [s]; zero when white at this log interval.
    effective_samples : float
        Independent rows the log is worth for a mean [1].
    """

    sd: float
    correlation: float
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
    if residual.size <= jacobian.shape[1] + 2 or not np.any(residual):
        return Noise(sd=0.0, correlation=0.0, effective_samples=float(residual.size))
    basis = np.linalg.qr(jacobian)[0]
    intervals = np.diff(t)
    low = np.log(_SHORTEST_CORRELATION * float(np.median(intervals)))
    high = np.log(_LONGEST_CORRELATION * float(t[-1] - t[0]))

    def cost(log_time: float) -> float:
        return _restricted_deviance(residual, basis, np.exp(-intervals / np.exp(log_time)))[0]

    grid = np.linspace(low, high, _CORRELATION_GRID)
    costs = np.array([cost(g) for g in grid])
    best = int(np.argmin(costs))
    bracket = (grid[max(best - 1, 0)], grid[min(best + 1, grid.size - 1)])
    found = minimize_scalar(cost, bounds=bracket, method="bounded", options={"xatol": 0.02})
    white_cost, white_variance = _restricted_deviance(residual, basis, np.zeros(intervals.size))
    if white_cost <= found.fun or best == 0:
        return Noise(
            sd=float(np.sqrt(white_variance)), correlation=0.0, effective_samples=float(residual.size)
        )
    correlation = float(np.exp(found.x))
    variance = _restricted_deviance(residual, basis, np.exp(-intervals / correlation))[1]
    ones = np.ones((residual.size, 1))
    spread = float(np.sum(_half_coloured(ones, t, correlation) ** 2))
    return Noise(
        sd=float(np.sqrt(variance)),
        correlation=correlation,
        effective_samples=float(residual.size**2 / spread),
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
    blind = s < 1e-10 * s[0]
    inverse = vt.T / np.where(blind, np.inf, s)
    if noise.correlation > 0.0:
        half = _half_coloured(u, t, noise.correlation)
        middle = half.T @ half
    else:
        middle = np.eye(s.size)
    cov = noise.sd**2 * (inverse @ middle @ inverse.T)
    if np.any(blind):
        lost = np.any(np.abs(vt[blind]) > 1e-6, axis=0)
        cov[lost, :] = 0.0
        cov[:, lost] = 0.0
        cov[lost, lost] = np.inf
    return cov / np.outer(scale, scale)


def whitened_sum(residual: NDArray[np.float64], t: NDArray[np.float64], correlation: float) -> float:
    """Sum the squares of a residual after its colour is taken out [PV unit squared].

    Parameters
    ----------
    residual : (n,) ndarray
    t : (n,) ndarray
        Times of the rows [s].
    correlation : float
        Correlation time [s]; zero for white.
    """
    if correlation <= 0.0:
        return float(residual @ residual)
    memory = np.exp(-np.diff(t) / correlation)
    return float(np.sum(_whiten(residual[:, None], memory) ** 2))


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


def _whiten(columns: NDArray[np.float64], memory: NDArray[np.float64]) -> NDArray[np.float64]:
    """Take first-order colour out: each row less what the row before foretold."""
    out = np.array(columns, dtype=float)
    out[1:] -= memory[:, None] * columns[:-1]
    out[1:] /= np.sqrt(-np.expm1(2.0 * np.log(np.maximum(memory, 1e-300))))[:, None]
    return out


def _restricted_deviance(
    residual: NDArray[np.float64], basis: NDArray[np.float64], memory: NDArray[np.float64]
) -> tuple[float, float]:
    """Give -2 log of the restricted likelihood, up to a constant, and the variance."""
    n, p = basis.shape[0], basis.shape[1]
    coloured = bool(np.any(memory > 1e-12))
    both = np.column_stack([basis, residual])
    white = _whiten(both, memory) if coloured else both
    r = np.asarray(np.linalg.qr(white, mode="r"))
    rss = float(r[p, p] ** 2)
    variance = rss / (n - p)
    if variance <= 0.0:
        return -np.inf, 0.0
    deviance = (n - p) * np.log(variance) + 2.0 * float(np.sum(np.log(np.abs(np.diag(r)[:p]))))
    if coloured:
        deviance += float(np.sum(np.log(-np.expm1(2.0 * np.log(np.maximum(memory, 1e-300))))))
    return deviance, variance


def _half_coloured(
    columns: NDArray[np.float64], t: NDArray[np.float64], correlation: float
) -> NDArray[np.float64]:
    """Give H with H'H = X' R X, R the correlation of a first-order coloured noise."""
    memory = np.exp(-np.diff(t) / correlation)
    sharp = np.sqrt(-np.expm1(-2.0 * np.diff(t) / correlation))
    diagonal = np.concatenate([[1.0], 1.0 / sharp])
    above = np.concatenate([[0.0], -memory / sharp])
    return np.asarray(solve_banded((0, 1), np.vstack([above, diagonal]), columns))
