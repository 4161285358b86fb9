"""Rows in time order, each time once: what was turned round, sorted or merged is said."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from pipeline.findings import Caution

if TYPE_CHECKING:
    from numpy.typing import NDArray


@dataclass(frozen=True, slots=True, kw_only=True)
class Order:
    """Which rows to keep, in which order.

    Attributes
    ----------
    rows : (m,) int ndarray
        Positions in the file's order, times strictly increasing.
    notes : tuple of Caution
    """

    rows: NDArray[np.intp]
    notes: tuple[Caution, ...]


def settle_order(
    t: NDArray[np.float64], signals: Sequence[NDArray[np.float64]], *, lines: Sequence[int]
) -> Order:
    """Put rows into time order and keep each time once.

    Parameters
    ----------
    t : (n,) ndarray
        Times [s], any order, NaN where there is none.
    signals : sequence of (n,) ndarray
        The values that tell whether two rows of one time agree.
    lines : sequence of int
        Line number of each row.

    Returns
    -------
    Order
    """
    notes: list[Caution] = []
    rows = np.flatnonzero(np.isfinite(t))
    lost = t.size - rows.size
    if lost:
        first = lines[int(np.argmax(~np.isfinite(t)))]
        notes.append(
            Caution(
                code="rows-without-time",
                level="care",
                text=f"{lost} {'row has' if lost == 1 else 'rows have'} no usable time and "
                f"{'was' if lost == 1 else 'were'} left out, the first at line {first}.",
                value=float(lost),
            )
        )
    steps = np.diff(t[rows])
    if np.sum(steps < 0) > np.sum(steps > 0):
        rows = rows[::-1]
        notes.append(
            Caution(code="newest-first", level="note", text="The log runs newest first; it was turned round.")
        )
        steps = np.diff(t[rows])
    back = int(np.sum(steps < 0))
    if back:
        line = lines[int(rows[int(np.argmax(steps < 0)) + 1])]
        notes.append(
            Caution(
                code="out-of-order",
                level="care",
                text=f"Time goes back at {back} {'place' if back == 1 else 'places'}, the first at "
                f"line {line}; the rows "
                "were sorted. Check that the logger's clock was not reset during the test.",
                value=float(back),
            )
        )
        rows = rows[np.argsort(t[rows], kind="stable")]
    rows, repeats = _once(t, rows, signals, lines)
    return Order(rows=rows, notes=(*notes, *repeats))


def _once(
    t: NDArray[np.float64],
    rows: NDArray[np.intp],
    signals: Sequence[NDArray[np.float64]],
    lines: Sequence[int],
) -> tuple[NDArray[np.intp], list[Caution]]:
    again = np.concatenate([[False], np.diff(t[rows]) <= 0])
    if not np.any(again):
        return rows, []
    # compare each repeat with the first row of its time
    first = rows[np.maximum.accumulate(np.where(again, 0, np.arange(rows.size)))]
    differs = np.zeros(rows.size, dtype=bool)
    for values in signals:
        a, b = values[rows], values[first]
        differs |= (a != b) & ~(np.isnan(a) & np.isnan(b))
    conflict = again & differs
    same = int(np.sum(again & ~differs))
    notes: list[Caution] = []
    if same:
        notes.append(
            Caution(
                code="duplicates-merged",
                level="note",
                text=f"{same} {'row repeats' if same == 1 else 'rows repeat'} an earlier one "
                f"exactly; merged.",
                value=float(same),
            )
        )
    if np.any(conflict):
        count = int(conflict.sum())
        line = lines[int(rows[int(np.argmax(conflict))])]
        notes.append(
            Caution(
                code="duplicates-conflict",
                level="care",
                text=f"{count} {'row has' if count == 1 else 'rows have'} the time of an earlier "
                f"row and other values, the "
                f"first at line {line}; the earlier row was kept. Export with a finer time resolution.",
                value=float(count),
            )
        )
    return rows[~again], notes
