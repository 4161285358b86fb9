"""First order with dead time: one lag, the default for a process that settles without an S-shape."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from fitters.process import ProcessModel
from fitters.structures import shapes
from fitters.structures.base import Quantity, Shapes, Structure

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from numpy.typing import NDArray


class FirstOrder(Structure):
    """K exp(-theta s) / (T s + 1)."""

    name = "first order"
    searched = 1
    gains = 1
    integrators = 0

    def shapes(self, tau: NDArray[np.float64], search: Sequence[Any]) -> Shapes:  # noqa: D102
        return shapes.lag(tau, search[0])

    def starts(self, span: float, interval: float) -> Iterator[tuple[float, ...]]:  # noqa: D102
        for log_lag in shapes.lag_starts(span, interval, 8):
            yield (log_lag,)

    def model(  # noqa: D102
        self, search: NDArray[np.float64], gains: NDArray[np.float64], dead_time: float
    ) -> ProcessModel:
        return ProcessModel(numerator=(gains[0],), denominator=(np.exp(search[0]), 1.0), dead_time=dead_time)

    def quantities(  # noqa: D102
        self, search: NDArray[np.float64], gains: NDArray[np.float64], dead_time: float
    ) -> tuple[Quantity, ...]:
        lag = float(np.exp(search[0]))
        return (
            Quantity("gain", float(gains[0]), "PV/CO", False),
            Quantity("lag", lag, "s", True),
            Quantity("initial_slope", float(gains[0]) / lag, "PV/CO/s", False),
            Quantity("lag_plus_dead_time", lag + dead_time, "s", True),
        )


STRUCTURES = (FirstOrder(),)
