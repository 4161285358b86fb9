"""What goes into an estimation and what comes out of it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    from fitters.process import ProcessModel


def frozen(values: ArrayLike) -> NDArray[np.float64]:
    """Copy into a float64 array nobody can write to."""
    array = np.array(values, dtype=np.float64)
    array.setflags(write=False)
    return array


@dataclass(frozen=True, slots=True, kw_only=True)
class BumpData:
    """The part of a log that carries a test, ready to fit.

    Attributes
    ----------
    t : (n,) ndarray
        Logged times [s], strictly increasing, at least 8 of them.
    pv : (n,) ndarray
        Measured value [PV unit], all finite.
    co_times : (m,) ndarray
        Times at which the CO takes a new value [s], strictly increasing, the first at or
        before ``t[0]``; before it the CO is taken to have had its first value for ever.
    co_values : (m,) ndarray
        CO from each of those times until the next [CO unit].
    weight : (n,) ndarray
        Logged rows that each row is the mean of [1]; ones unless the log was thinned.
    interval : float
        Closest usual spacing of the logged rows [s]: the median of the unthinned ones.
    """

    t: NDArray[np.float64]
    pv: NDArray[np.float64]
    co_times: NDArray[np.float64]
    co_values: NDArray[np.float64]
    weight: NDArray[np.float64] = field(default_factory=lambda: np.ones(0))
    interval: float = field(init=False)

    def __post_init__(self) -> None:
        if self.weight.size == 0:
            object.__setattr__(self, "weight", np.ones(np.size(self.t)))
        for name in ("t", "pv", "co_times", "co_values", "weight"):
            object.__setattr__(self, name, frozen(getattr(self, name)))
        if self.t.size < 8 or not self.t.shape == self.pv.shape == self.weight.shape:
            raise ValueError("A bump needs at least 8 rows of time and PV.")
        if self.co_times.size == 0 or self.co_times.shape != self.co_values.shape:
            raise ValueError("A bump needs the CO's times and values.")
        if np.any(np.diff(self.t) <= 0) or np.any(np.diff(self.co_times) <= 0):
            raise ValueError("Times must increase.")
        for name in ("t", "pv", "co_times", "co_values"):
            if not np.all(np.isfinite(getattr(self, name))):
                raise ValueError("A bump must hold finite values only.")
        apart = np.diff(self.t)
        single = apart[self.weight[1:] <= 1.0]
        object.__setattr__(self, "interval", float(np.median(single if single.size else apart)))

    @property
    def span(self) -> float:
        """Length of the record [s]."""
        return float(self.t[-1] - self.t[0])


@dataclass(frozen=True, slots=True, kw_only=True)
class Parameter:
    """One estimated number with its interval.

    Attributes
    ----------
    name : str
        Plain name with underscores, e.g. "dead_time".
    value : float
        Estimate [unit].
    unit : str
        Unit as text; "" for a pure number.
    stderr : float
        Standard uncertainty [unit]; "inf" where the log does not determine it.
    low, high : float
        Ends of the 95 % interval [unit]; may be infinite, never absent.
    """

    name: str
    value: float
    unit: str
    stderr: float
    low: float
    high: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Fit:
    """One structure fitted to one test.

    Attributes
    ----------
    structure : str
        Name of the structure.
    model : ProcessModel
        The process it became.
    parameters : tuple of Parameter
        Estimates in the structure's own terms, then the well-known combinations.
    correlation : (k, k) ndarray
        Correlation of the structure's own k parameters, in their order [1].
    offset : float
        PV level the test started from [PV unit].
    drift : float
        Straight-line drift taken out [PV unit/s]; zero when the fit does without.
    fitted : (n,) ndarray
        The fit at the logged times, offset and drift included [PV unit].
    residual : (n,) ndarray
        PV minus fitted [PV unit].
    used : (n,) bool ndarray
        False where a row was set aside as an outlier.
    fit_pct : float
        100 (1 - norm(residual) / norm(PV - mean)) [%].
    rmse : float
        Root-mean-square residual [PV unit].
    noise_sd : float
        Standard deviation of the noise [PV unit].
    noise_correlation : float
        Correlation time of the noise [s]; zero when it is white at this log interval.
    effective_samples : float
        How many independent rows the log is worth [1].
    criterion : float
        Information criterion on the effective samples, smaller is better [1].
    converged : bool
        The search ended by its own tolerance, not by running out of steps.
    starts, starts_agreeing : int
        Starting points tried, and how many led to this answer.
    notes : tuple of (str, str)
        Code and sentence for what the estimation wants said about this fit.
    draw : callable
        ``draw(n, seed)`` gives n process models as plausible as the log allows.
    """

    structure: str
    model: ProcessModel
    parameters: tuple[Parameter, ...]
    correlation: NDArray[np.float64]
    offset: float
    drift: float
    fitted: NDArray[np.float64]
    residual: NDArray[np.float64]
    used: NDArray[np.bool_]
    fit_pct: float
    rmse: float
    noise_sd: float
    noise_correlation: float
    effective_samples: float
    criterion: float
    converged: bool
    starts: int
    starts_agreeing: int
    notes: tuple[tuple[str, str], ...]
    draw: Callable[[int, int], tuple[ProcessModel, ...]]

    def parameter(self, name: str) -> Parameter:
        """Look a parameter up by name.

        Raises
        ------
        KeyError
            If the structure has no such parameter.
        """
        for parameter in self.parameters:
            if parameter.name == name:
                return parameter
        raise KeyError(name)


@dataclass(frozen=True, slots=True, kw_only=True)
class Candidate:
    """One structure's standing among the others.

    Attributes
    ----------
    fit : Fit
    score : float
        Criterion above the best one's [1].
    weight : float
        Share of belief, all candidates summing to one [1].
    """

    fit: Fit
    score: float
    weight: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Choice:
    """The fits ranked, the best one first, and why it is first.

    Attributes
    ----------
    best : Fit
    candidates : tuple of Candidate
        Every structure that could be fitted, the chosen one first.
    reason : str
        Why the chosen structure stands before the next, one or two sentences.
    data : BumpData
        The rows the fits rest on, moves scaled to what they achieved.
    gain_scatter : float or None
        Relative standard uncertainty of the gain from how the moves disagree, where they were
        not scaled [1]; None with fewer than three moves.
    missed_share : float or None
        How far a fit without the last move misses its answer, as a share of it [1]; None where
        the part before tells too little.
    """

    best: Fit
    candidates: tuple[Candidate, ...]
    reason: str
    data: BumpData
    gain_scatter: float | None
    missed_share: float | None
