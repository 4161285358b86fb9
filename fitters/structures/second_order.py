"""Second order with dead time: two lags, real, equal or complex, without and with a zero."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from fitters.process import ProcessModel
from fitters.structures import shapes
from fitters.structures.base import Quantity, Shapes, Structure

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from numpy.typing import NDArray

#: Damping to try first: ringing, near critical, and one lag well above the other [1].
_DAMPING_STARTS = (0.15, 0.5, 1.05, 2.5)


class SecondOrder(Structure):
    """K exp(-theta s) / (tau0**2 s**2 + 2 zeta tau0 s + 1)."""

    name = "second order"
    searched = 2
    gains = 1
    integrators = 0

    def shapes(self, tau: NDArray[np.float64], search: Sequence[Any]) -> Shapes:  # noqa: D102
        both = shapes.pair(tau, search[0], search[1])
        return Shapes(both.value[:1], both.by_time[:1], both.by_search[:, :1])

    def values(self, tau: NDArray[np.float64], search: Sequence[Any]) -> NDArray[np.float64]:  # noqa: D102
        return shapes.pair_values(tau, search[0], search[1])[:1]

    def starts(self, span: float, interval: float) -> Iterator[tuple[float, ...]]:  # noqa: D102
        for damping in _DAMPING_STARTS:
            for log_time in shapes.lag_starts(span / 4.0, interval, 8):
                yield log_time, float(np.log(damping))

    def model(  # noqa: D102
        self, search: NDArray[np.float64], gains: NDArray[np.float64], dead_time: float
    ) -> ProcessModel:
        return ProcessModel(numerator=(gains[0],), denominator=_denominator(search), dead_time=dead_time)

    def quantities(  # noqa: D102
        self, search: NDArray[np.float64], gains: NDArray[np.float64], dead_time: float
    ) -> tuple[Quantity, ...]:
        return (
            Quantity("gain", float(gains[0]), "PV/CO", False),
            *_poles_in_words(search),
            Quantity("lags_plus_dead_time", _lag_sum(search) + dead_time, "s", True),
        )


class SecondOrderWithZero(Structure):
    """K (Tz s + 1) exp(-theta s) / (tau0**2 s**2 + 2 zeta tau0 s + 1); Tz below zero: inverse response."""

    name = "second order with zero"
    searched = 2
    gains = 2
    integrators = 0

    def shapes(self, tau: NDArray[np.float64], search: Sequence[Any]) -> Shapes:  # noqa: D102
        return shapes.pair(tau, search[0], search[1])

    def values(self, tau: NDArray[np.float64], search: Sequence[Any]) -> NDArray[np.float64]:  # noqa: D102
        return shapes.pair_values(tau, search[0], search[1])

    def starts(self, span: float, interval: float) -> Iterator[tuple[float, ...]]:  # noqa: D102
        yield from SecondOrder().starts(span, interval)

    def model(  # noqa: D102
        self, search: NDArray[np.float64], gains: NDArray[np.float64], dead_time: float
    ) -> ProcessModel:
        return ProcessModel(
            numerator=(gains[1], gains[0]), denominator=_denominator(search), dead_time=dead_time
        )

    def quantities(  # noqa: D102
        self, search: NDArray[np.float64], gains: NDArray[np.float64], dead_time: float
    ) -> tuple[Quantity, ...]:
        zero = float(gains[1] / gains[0])
        return (
            Quantity("gain", float(gains[0]), "PV/CO", False),
            *_poles_in_words(search),
            Quantity("zero_time", zero, "s", False),
            Quantity("lags_plus_dead_time", _lag_sum(search) - zero + dead_time, "s", False),
        )


def _denominator(search: NDArray[np.float64]) -> tuple[float, float, float]:
    time_s, zeta = np.exp(search)
    return float(time_s**2), float(2.0 * zeta * time_s), 1.0


def _lag_sum(search: NDArray[np.float64]) -> float:
    return float(2.0 * np.exp(search[0] + search[1]))


def _poles_in_words(search: NDArray[np.float64]) -> tuple[Quantity, Quantity]:
    """Give two lags where the poles are real, period and damping where they ring."""
    time_s, zeta = np.exp(search)
    if zeta >= 1.0:
        larger = time_s * (zeta + np.sqrt(zeta**2 - 1.0))
        return (
            Quantity("longer_lag", float(larger), "s", True),
            Quantity("shorter_lag", float(time_s**2 / larger), "s", True),
        )
    return (
        Quantity("natural_period", float(2.0 * np.pi * time_s), "s", True),
        Quantity("damping", float(zeta), "", True),
    )


STRUCTURES = (SecondOrder(), SecondOrderWithZero())
