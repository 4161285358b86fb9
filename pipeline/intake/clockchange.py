"""A log on local time that runs through a clock change: one hour that was not there, or was there twice."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import datetime, timedelta
from typing import TYPE_CHECKING
from zoneinfo import ZoneInfo, available_timezones

import numpy as np

from pipeline.findings import Caution

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

#: Size of a change from and to summer time [s].
_HOUR = 3600.0
#: A dial of twelve hours starts again after so long [s].
_HALF_DAY = 43_200.0
#: Spacing of the rows up to which an hour more or less stands out [s].
_FINE = 900.0


def unbroken(
    t: NDArray[np.float64], zero: pd.Timestamp, lines: Sequence[int]
) -> tuple[NDArray[np.float64], list[Caution]]:
    """Take a clock change, or the turn of a twelve-hour dial, out of local times.

    Parameters
    ----------
    t : (n,) ndarray
        Times [s] from `zero` as the wall clock showed them, in file order; NaN where there is none.
    zero : pandas.Timestamp
        Wall-clock time of zero, without a zone.
    lines : sequence of int
        Line number of each row.

    Returns
    -------
    t : (n,) ndarray
        Times [s] without the jump, unchanged where there is none that clocks make.
    notes : list of Caution

    Notes
    -----
    An hour is taken out only where one stands at a date and time at which some zone of the time zone
    database sets its clocks (IANA tz database); any other hole of an hour stays a hole.
    """
    rows = np.flatnonzero(np.isfinite(t))
    steps = np.diff(t[rows])
    if steps.size < 3:
        return t, []
    newest_first = bool(np.sum(steps < 0) > np.sum(steps > 0))
    if newest_first:
        rows = rows[::-1]
        steps = np.diff(t[rows])
    pace = float(np.median(steps))
    if not 0.0 < pace <= _FINE:
        return t, []
    for size, what in ((_HOUR, "forward"), (-_HOUR, "back"), (-_HALF_DAY, "dial")):
        at = np.flatnonzero(np.abs(steps - size - pace) <= 2.0 * pace)
        if at.size == 0 or (what != "dial" and at.size > 1):
            continue
        before = (zero + np.timedelta64(round(1e6 * t[rows[at[0]]]), "us")).to_pydatetime()
        zone = None if what == "dial" else _zone_that_sets(before, size)
        if what != "dial" and zone is None:
            continue
        shift = np.zeros(rows.size)
        for k in at:
            shift[k + 1 :] -= size
        free = t.copy()
        free[rows] += shift
        return free, [_said(what, before, zone, lines[int(rows[at[0] + 1])])]
    return t, []


def _said(what: str, before: datetime, zone: str | None, line: int) -> Caution:
    if what == "dial":
        return Caution(
            code="twelve-hour-clock",
            level="care",
            text=f"The hours start again at line {line} as on a twelve-hour clock; the time was read on. Export "
            "with am and pm, or with 24 hours, to be sure.",
        )
    way = "jumps forward" if what == "forward" else "goes back"
    other = "an hour without rows" if what == "forward" else "rows out of order"
    return Caution(
        code="clock-change",
        level="care",
        text=f"The clock {way} by an hour at line {line} (after {before:%Y-%m-%d %H:%M:%S}), as clocks do then in "
        f"{zone} for one; it was taken as a clock change and not as {other}. Set [time] zone to be sure "
        '("UTC" if the logger\'s clock was never changed).',
        value=_HOUR,
    )


def _zone_that_sets(before: datetime, size: float) -> str | None:
    """Find a zone whose clocks are set by this much in the hours around a wall-clock time."""
    for name in sorted(available_timezones()):
        zone = ZoneInfo(name)
        first = before.replace(tzinfo=zone, fold=0).utcoffset()
        later = (before + timedelta(seconds=_HOUR + 1.0)).replace(tzinfo=zone, fold=1).utcoffset()
        again = before.replace(tzinfo=zone, fold=1).utcoffset()
        if first is None or later is None or again is None:
            continue
        # forward: the hour after does not exist; back: the hour before exists twice
        moved = (later - first) if size > 0 else (again - first)
        if moved.total_seconds() == size:
            return name
    return None
