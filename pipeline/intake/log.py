"""A log, read: times, values, and how they were understood."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from pipeline.findings import Caution


@dataclass(frozen=True, slots=True, kw_only=True)
class Column:
    """One signal of the log and why it was taken for what it is.

    Attributes
    ----------
    name : str
        Header text as written, or "column 3" where there is none.
    index : int
        Position in the file, counted from 1.
    unit : str or None
        Unit of the values, None if nothing says.
    reason : str
        Why this column was chosen, one clause: "named in the loop sheet", "steps and holds".
    """

    name: str
    index: int
    unit: str | None
    reason: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Log:
    """Logged signals on one clock.

    Attributes
    ----------
    file : str
        Name of the file, without its folder.
    sha256 : str
        Hash of its bytes.
    rows : int
        Data rows in the file.
    start : str or None
        Wall-clock time of the first row (ISO 8601), None for elapsed times.
    t : (n,) ndarray
        Times [s] from the first row, strictly increasing.
    pv : (n,) ndarray
        Measured value [PV unit]; NaN where the row holds none.
    co : (n,) ndarray
        Controller output [CO unit], held from each row to the next; no NaN.
    sp : (n,) ndarray or None
        Set point [PV unit], held; None if the log has none.
    automatic : (n,) bool ndarray or None
        True where the controller was in automatic; None if the log does not say.
    time_column, pv_column, co_column : Column
    sp_column, mode_column : Column or None
    notes : tuple of Caution
        What was guessed, skipped or repaired on the way in, level "note" or "care".
    """

    file: str
    sha256: str
    rows: int
    start: str | None
    t: NDArray[np.float64]
    pv: NDArray[np.float64]
    co: NDArray[np.float64]
    sp: NDArray[np.float64] | None
    automatic: NDArray[np.bool_] | None
    time_column: Column
    pv_column: Column
    co_column: Column
    sp_column: Column | None
    mode_column: Column | None
    notes: tuple[Caution, ...]

    def __post_init__(self) -> None:
        for name in ("t", "pv", "co", "sp", "automatic"):
            values = getattr(self, name)
            if values is not None:
                copy = np.array(values)
                copy.setflags(write=False)
                object.__setattr__(self, name, copy)

    @property
    def span(self) -> float:
        """Length of the log [s]."""
        return float(self.t[-1] - self.t[0])

    @property
    def interval(self) -> float:
        """Median spacing of the rows [s]."""
        return float(np.median(np.diff(self.t)))
