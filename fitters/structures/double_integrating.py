"""Motion without friction: the CO sets an acceleration, alone or through a lag."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from fitters.process import ProcessModel
from fitters.structures import shapes
from fitters.structures.base import Quantity, Shapes, Structure

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from numpy.typing import NDArray


class DoubleIntegrator(Structure):
    """K'' exp(-theta s) / s**2."""

    name = "double integrator"
    searched = 0
    gains = 1
    integrators = 2

    def shapes(self, tau: NDArray[np.float64], search: Sequence[Any]) -> Shapes:  # noqa: D102
        del search
        return shapes.double_integrator(tau)

    def starts(self, span: float, interval: float) -> Iterator[tuple[float, ...]]:  # noqa: D102
        del span, interval
        yield ()

    def model(  # noqa: D102
        self, search: NDArray[np.float64], gains: NDArray[np.float64], dead_time: float
    ) -> ProcessModel:
        del search
        return ProcessModel(numerator=(gains[0],), denominator=(1.0, 0.0, 0.0), dead_time=dead_time)

    def quantities(  # noqa: D102
        self, search: NDArray[np.float64], gains: NDArray[np.float64], dead_time: float
    ) -> tuple[Quantity, ...]:
        del search, dead_time
        return (Quantity("acceleration_gain", float(gains[0]), "PV/CO/s²", False),)


class DoubleIntegratorWithLag(Structure):
    """K'' exp(-theta s) / (s**2 (T s + 1))."""

    name = "double integrator with lag"
    searched = 1
    gains = 1
    integrators = 2

    def shapes(self, tau: NDArray[np.float64], search: Sequence[Any]) -> Shapes:  # noqa: D102
        return shapes.twice_integrated_lag(tau, search[0])

    def starts(self, span: float, interval: float) -> Iterator[tuple[float, ...]]:  # noqa: D102
        for log_lag in shapes.lag_starts(span / 4.0, interval, 6):
            yield (log_lag,)

    def model(  # noqa: D102
        self, search: NDArray[np.float64], gains: NDArray[np.float64], dead_time: float
    ) -> ProcessModel:
        return ProcessModel(
            numerator=(gains[0],), denominator=(np.exp(search[0]), 1.0, 0.0, 0.0), dead_time=dead_time
        )

    def quantities(  # noqa: D102
        self, search: NDArray[np.float64], gains: NDArray[np.float64], dead_time: float
    ) -> tuple[Quantity, ...]:
        lag = float(np.exp(search[0]))
        return (
            Quantity("acceleration_gain", float(gains[0]), "PV/CO/s²", False),
            Quantity("lag", lag, "s", True),
            Quantity("lag_plus_dead_time", lag + dead_time, "s", True),
        )


STRUCTURES = (DoubleIntegrator(), DoubleIntegratorWithLag())
