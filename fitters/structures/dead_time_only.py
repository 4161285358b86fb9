"""Pure dead time: the PV follows the CO unchanged, later."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from fitters.process import ProcessModel
from fitters.structures.base import Quantity, Shapes, Structure

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from numpy.typing import NDArray


class DeadTimeOnly(Structure):
    """K exp(-theta s). Any dead time between two rows fits alike: the middle is given."""

    name = "dead time only"
    searched = 0
    gains = 1
    integrators = 0
    has_dead_time_search = False

    def shapes(self, tau: NDArray[np.float64], search: Sequence[Any]) -> Shapes:  # noqa: D102
        del search
        return Shapes(np.ones_like(tau)[None], np.zeros_like(tau)[None], np.empty((0, 1, *tau.shape)))

    def starts(self, span: float, interval: float) -> Iterator[tuple[float, ...]]:  # noqa: D102
        del span, interval
        yield ()

    def model(  # noqa: D102
        self, search: NDArray[np.float64], gains: NDArray[np.float64], dead_time: float
    ) -> ProcessModel:
        del search
        return ProcessModel(numerator=(gains[0],), denominator=(1.0,), dead_time=dead_time)

    def quantities(  # noqa: D102
        self, search: NDArray[np.float64], gains: NDArray[np.float64], dead_time: float
    ) -> tuple[Quantity, ...]:
        del search, dead_time
        return (Quantity("gain", float(gains[0]), "PV/CO", False),)


STRUCTURES = (DeadTimeOnly(),)
