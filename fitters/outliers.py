"""Rows that stand apart from their neighbours."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

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
