"""What a structure must say about itself.

A structure's response to a unit step of the CO is a sum of shapes, each times a factor the
log determines by linear least squares: the numerator. The shapes depend on a few searched
numbers (lags, damping) held as logarithms where they must stay positive, and on the time
since the step less the dead time. So the search runs over the few numbers that enter
non-linearly, and everything else follows.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    import numpy as np
    from numpy.typing import NDArray

    from fitters.process import ProcessModel


@dataclass(frozen=True, slots=True)
class Shapes:
    """Unit-step shapes and their derivatives at times after the step.

    Attributes
    ----------
    value : (r, ...) ndarray
        The r shapes.
    by_time : (r, ...) ndarray
        Their slopes in time [1/s].
    by_search : (k, r, ...) ndarray
        Their derivatives by the k searched numbers.
    """

    value: NDArray[np.float64]
    by_time: NDArray[np.float64]
    by_search: NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Quantity:
    """A number a person asks for, made from what was searched.

    Attributes
    ----------
    name : str
    value : float
    unit : str
        In terms of "s", "PV" and "CO".
    positive : bool
        Its interval is taken on a logarithmic scale.
    """

    name: str
    value: float
    unit: str
    positive: bool


class Structure(ABC):
    """One family of low-order processes with dead time.

    Attributes
    ----------
    name : str
        Plain name, as it stands in the record.
    searched : int
        How many numbers are searched besides the dead time.
    gains : int
        How many linear factors the numerator has.
    integrators : int
        Poles at zero.
    has_dead_time_search : bool
        False where the dead time cannot be found by slopes (pure dead time).
    """

    name: str
    searched: int
    gains: int
    integrators: int
    has_dead_time_search: bool = True

    @property
    def parameter_count(self) -> int:
        """Numbers to estimate: searched, numerator and dead time [1]."""
        return self.searched + self.gains + 1

    @abstractmethod
    def shapes(self, tau: NDArray[np.float64], search: Sequence[Any]) -> Shapes:
        """Evaluate the unit-step shapes.

        Parameters
        ----------
        tau : (...) ndarray
            Time since the step less the dead time [s], zero or more.
        search : sequence of k floats or arrays
            The searched numbers; the first, a scale of time, may be an array that broadcasts with `tau`.
        """

    def values(self, tau: NDArray[np.float64], search: Sequence[Any]) -> NDArray[np.float64]:
        """Evaluate the unit-step shapes without their derivatives, at many searched numbers at once.

        Parameters
        ----------
        tau : (...) ndarray
            Time since the step less the dead time [s], zero or more.
        search : sequence of k floats or arrays
            The searched numbers; the first, a scale of time, may be an array that broadcasts with `tau`.

        Returns
        -------
        (r, ...) ndarray
        """
        return self.shapes(tau, search).value

    @abstractmethod
    def starts(self, span: float, interval: float) -> Iterator[tuple[float, ...]]:
        """Give the searched numbers to try first.

        Parameters
        ----------
        span : float
            Length of the record [s].
        interval : float
            Spacing of its rows [s].
        """

    @abstractmethod
    def model(
        self, search: NDArray[np.float64], gains: NDArray[np.float64], dead_time: float
    ) -> ProcessModel:
        """Build the process.

        Parameters
        ----------
        search : (k,) ndarray
        gains : (r,) ndarray
            Factors of the shapes.
        dead_time : float
            Dead time [s].
        """

    def admits(self, gains: NDArray[np.float64]) -> bool:
        """Tell whether these factors are what the structure stands for; others have their own.

        Parameters
        ----------
        gains : (r,) ndarray
            Factors of the shapes, up to a common scale.
        """
        del gains
        return True

    @abstractmethod
    def quantities(
        self, search: NDArray[np.float64], gains: NDArray[np.float64], dead_time: float
    ) -> tuple[Quantity, ...]:
        """Name the numbers a person asks for; dead time apart, combinations last.

        Parameters
        ----------
        search : (k,) ndarray
        gains : (r,) ndarray
        dead_time : float
            Dead time [s].
        """
