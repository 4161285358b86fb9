"""Several equal lags with dead time: an S-shape with few parameters (Strejc 1959)."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from scipy.special import comb, gammainc

from fitters.process import ProcessModel
from fitters.structures import shapes
from fitters.structures.base import Quantity, Shapes, Structure

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from numpy.typing import NDArray


class EqualLags(Structure):
    """K exp(-theta s) / (T s + 1)**n for one n."""

    searched = 1
    gains = 1
    integrators = 0

    def __init__(self, count: int) -> None:
        self.count = count
        self.name = f"{count} equal lags"

    def shapes(self, tau: NDArray[np.float64], search: Sequence[Any]) -> Shapes:  # noqa: D102
        return shapes.equal_lags(tau, search[0], self.count)

    def values(self, tau: NDArray[np.float64], search: Sequence[Any]) -> NDArray[np.float64]:  # noqa: D102
        return np.asarray(gammainc(self.count, tau * np.exp(-search[0]))[None])

    def starts(self, span: float, interval: float) -> Iterator[tuple[float, ...]]:  # noqa: D102
        for log_lag in shapes.lag_starts(span / self.count, interval, 8):
            yield (log_lag,)

    def model(  # noqa: D102
        self, search: NDArray[np.float64], gains: NDArray[np.float64], dead_time: float
    ) -> ProcessModel:
        lag = float(np.exp(search[0]))
        powers = np.arange(self.count, -1, -1)
        denominator = comb(self.count, powers) * lag**powers
        return ProcessModel(numerator=(gains[0],), denominator=tuple(denominator), dead_time=dead_time)

    def quantities(  # noqa: D102
        self, search: NDArray[np.float64], gains: NDArray[np.float64], dead_time: float
    ) -> tuple[Quantity, ...]:
        lag = float(np.exp(search[0]))
        return (
            Quantity("gain", float(gains[0]), "PV/CO", False),
            Quantity("lag", lag, "s", True),
            Quantity("lags_plus_dead_time", self.count * lag + dead_time, "s", True),
        )


#: Two equal lags are a second order; beyond eight the shape hardly changes (Strejc 1959).
STRUCTURES = tuple(EqualLags(count) for count in (3, 4, 6, 8))
