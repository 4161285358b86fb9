"""A file that holds several runs, each with times that start again: which one to read."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from pipeline.errors import QuestionForUser, UsageError
from pipeline.findings import Caution
from pipeline.intake.clock import Clock
from pipeline.intake.table import Field

if TYPE_CHECKING:
    from numpy.typing import NDArray

#: A new run starts within so many row spacings of where the first one started [1].
_NEAR_START = 5.0
#: Line numbers that a question lists.
_LISTED = 6


def choose_run(
    fields: Sequence[Field],
    clock: Clock,
    lines: Sequence[int],
    *,
    wanted: int | None,
    fewest: int,
    file: str,
) -> tuple[tuple[Field, ...], Clock, tuple[int, ...], list[Caution]]:
    """Keep the rows of one run where the elapsed times of a file start again.

    Parameters
    ----------
    fields : sequence of Field
        All columns.
    clock : Clock
        Their times.
    lines : sequence of int
        Line number of each row.
    wanted : int or None
        Number of the run, from 1, as the user gives it.
    fewest : int
        Rows below which a run is no test [rows].
    file : str
        Name for messages.

    Returns
    -------
    fields : tuple of Field
    clock : Clock
    lines : tuple of int
    notes : list of Caution

    Raises
    ------
    QuestionForUser
        If more than one run is long enough.
    UsageError
        If there is no run of the number given.
    """
    starts = _starts(clock)
    ends = [*starts[1:], clock.t.size]
    if wanted is not None and wanted > len(starts):
        raise UsageError(
            f"[file] run = {wanted}, but the log holds {len(starts)} {'run' if len(starts) == 1 else 'runs'}.",
            file=file,
            remedy="Runs are counted from 1.",
        )
    if len(starts) == 1:
        return tuple(fields), clock, tuple(lines), []
    long_enough = [k for k, (a, b) in enumerate(zip(starts, ends, strict=True)) if b - a >= fewest]
    if wanted is None and len(long_enough) > 1:
        where = ", ".join(str(lines[a]) for a in starts[1 : 1 + _LISTED])
        raise QuestionForUser(
            f"The times start again at line {where}: the log holds {len(starts)} runs.",
            file=file,
            remedy=f"Say which in the loop sheet: [file] run = 1 to {len(starts)}.",
        )
    chosen = wanted - 1 if wanted is not None else long_enough[0] if long_enough else 0
    a, b = starts[chosen], ends[chosen]
    note = Caution(
        code="runs-left-out",
        level="note" if wanted is not None else "care",
        text=f"The times start again: of {len(starts)} runs number {chosen + 1} was read (lines {lines[a]} to "
        f"{lines[b - 1]})"
        + (" as the loop sheet says." if wanted is not None else ", the only one that is long enough."),
        value=float(len(starts)),
    )
    return (
        tuple(_cut(f, a, b) for f in fields),
        replace(clock, t=clock.t[a:b]),
        tuple(lines[a:b]),
        [note],
    )


def _starts(clock: Clock) -> list[int]:
    """Rows at which elapsed times fall back to where they began; dates never do that."""
    if clock.zero is not None:
        return [0]
    rows = np.flatnonzero(np.isfinite(clock.t))
    t: NDArray[np.float64] = clock.t[rows]
    steps = np.diff(t)
    rising = steps[steps > 0]
    if rising.size == 0 or np.sum(steps < 0) > 0.1 * steps.size:
        return [0]
    pace = float(np.median(rising))
    again = (
        (steps < 0)
        & (np.abs(t[1:] - t[0]) <= _NEAR_START * pace)
        & (t[:-1] - t[0] > 2.0 * _NEAR_START * pace)
    )
    return [0, *(int(rows[k + 1]) for k in np.flatnonzero(again))]


def _cut(field: Field, a: int, b: int) -> Field:
    return replace(
        field,
        values=None if field.values is None else field.values[a:b],
        text=None if field.text is None else field.text.iloc[a:b].reset_index(drop=True),
        missing=field.missing if field.values is None else int(np.isnan(field.values[a:b]).sum()),
        first_bad=None,
    )
