"""Processes that do not settle: integrator, with lag, and with inverse response."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from fitters.process import ProcessModel
from fitters.structures import shapes
from fitters.structures.base import Quantity, Shapes, Structure

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from numpy.typing import NDArray


class Integrator(Structure):
    """K' exp(-theta s) / s."""

    name = "integrator"
    searched = 0
    gains = 1
    integrators = 1

    def shapes(self, tau: NDArray[np.float64], search: Sequence[Any]) -> Shapes:  # noqa: D102
        del search
        return shapes.integrator(tau)

    def starts(self, span: float, interval: float) -> Iterator[tuple[float, ...]]:  # noqa: D102
        del span, interval
        yield ()

    def model(  # noqa: D102
        self, search: NDArray[np.float64], gains: NDArray[np.float64], dead_time: float
    ) -> ProcessModel:
        del search
        return ProcessModel(numerator=(gains[0],), denominator=(1.0, 0.0), dead_time=dead_time)

    def quantities(  # noqa: D102
        self, search: NDArray[np.float64], gains: NDArray[np.float64], dead_time: float
    ) -> tuple[Quantity, ...]:
        del search, dead_time
        return (Quantity("integrating_gain", float(gains[0]), "PV/CO/s", False),)


class IntegratorWithLag(Structure):
    """K' exp(-theta s) / (s (T s + 1))."""

    name = "integrator with lag"
    searched = 1
    gains = 1
    integrators = 1

    def shapes(self, tau: NDArray[np.float64], search: Sequence[Any]) -> Shapes:  # noqa: D102
        return shapes.integrated_lag(tau, search[0])

    def starts(self, span: float, interval: float) -> Iterator[tuple[float, ...]]:  # noqa: D102
        for log_lag in shapes.lag_starts(span / 4.0, interval, 8):
            yield (log_lag,)

    def model(  # noqa: D102
        self, search: NDArray[np.float64], gains: NDArray[np.float64], dead_time: float
    ) -> ProcessModel:
        return ProcessModel(
            numerator=(gains[0],), denominator=(np.exp(search[0]), 1.0, 0.0), dead_time=dead_time
        )

    def quantities(  # noqa: D102
        self, search: NDArray[np.float64], gains: NDArray[np.float64], dead_time: float
    ) -> tuple[Quantity, ...]:
        lag = float(np.exp(search[0]))
        return (
            Quantity("integrating_gain", float(gains[0]), "PV/CO/s", False),
            Quantity("lag", lag, "s", True),
            Quantity("lag_plus_dead_time", lag + dead_time, "s", True),
        )


class IntegratorWithInverseResponse(Structure):
    """K' (Tz s + 1) exp(-theta s) / (s (T s + 1)) with Tz below zero: shrink and swell.

    With Tz above zero it would be a lag with a slow drift of its own, which is not a level.
    """

    name = "integrator with inverse response"
    searched = 1
    gains = 2
    integrators = 1

    def shapes(self, tau: NDArray[np.float64], search: Sequence[Any]) -> Shapes:  # noqa: D102
        ramp = shapes.integrated_lag(tau, search[0])
        step = shapes.lag(tau, search[0])
        return Shapes(
            np.concatenate([ramp.value, step.value]),
            np.concatenate([ramp.by_time, step.by_time]),
            np.concatenate([ramp.by_search, step.by_search], axis=1),
        )

    def starts(self, span: float, interval: float) -> Iterator[tuple[float, ...]]:  # noqa: D102
        yield from IntegratorWithLag().starts(span, interval)

    def admits(self, gains: NDArray[np.float64]) -> bool:  # noqa: D102
        return bool(gains[0] * gains[1] < 0.0)

    def model(  # noqa: D102
        self, search: NDArray[np.float64], gains: NDArray[np.float64], dead_time: float
    ) -> ProcessModel:
        return ProcessModel(
            numerator=(gains[1], gains[0]),
            denominator=(np.exp(search[0]), 1.0, 0.0),
            dead_time=dead_time,
        )

    def quantities(  # noqa: D102
        self, search: NDArray[np.float64], gains: NDArray[np.float64], dead_time: float
    ) -> tuple[Quantity, ...]:
        lag, zero = float(np.exp(search[0])), float(gains[1] / gains[0])
        return (
            Quantity("integrating_gain", float(gains[0]), "PV/CO/s", False),
            Quantity("lag", lag, "s", True),
            Quantity("zero_time", zero, "s", False),
            Quantity("lag_plus_dead_time", lag - zero + dead_time, "s", False),
        )


STRUCTURES = (Integrator(), IntegratorWithLag(), IntegratorWithInverseResponse())
