"""Draws spread evenly over all possibilities, so that a few hundred give steady percentiles."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from scipy.special import ndtri
from scipy.stats import qmc

if TYPE_CHECKING:
    from numpy.typing import NDArray


def evenly(count: int, width: int, seed: int) -> NDArray[np.float64]:
    """Draw points that fill the unit cube evenly.

    Parameters
    ----------
    count, width : int
        Points and their coordinates.
    seed : int
        Same seed, same points.

    Returns
    -------
    (count, width) ndarray
        Each coordinate uniform, strictly between zero and one, in random order.

    References
    ----------
    Owen (1998), Journal of Complexity 14, 466-489: Sobol's points, scrambled.
    """
    rng = np.random.default_rng(seed)
    power = int(np.ceil(np.log2(max(count, 2))))
    points = qmc.Sobol(width, scramble=True, rng=rng).random_base2(power)
    # Shuffled: two draws side by side must not march in step, and a part must be as fair as the whole.
    picked = rng.permutation(points)[:count]
    tiny = np.finfo(float).eps
    return np.asarray(np.clip(picked, tiny, 1.0 - tiny), dtype=float)


def normally(count: int, width: int, seed: int) -> NDArray[np.float64]:
    """Draw independent standard normal numbers, spread as evenly as `evenly` spreads them.

    Parameters
    ----------
    count, width, seed : int
        As in `evenly`.
    """
    return np.asarray(ndtri(evenly(count, width, seed)), dtype=float)
