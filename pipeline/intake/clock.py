"""The time column to seconds: which column it is, how it is written, what unit it counts in."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, cast

import numpy as np
import pandas as pd

from pipeline.errors import LogUnreadable, QuestionForUser
from pipeline.findings import Caution
from pipeline.intake.log import Column
from pipeline.intake.names import SECONDS, read_name, words_of
from pipeline.intake.stamps import is_clock_only, is_date_only, is_stamp, read_stamps
from pipeline.intake.table import Field
from pipeline.settings import LoopSheet

if TYPE_CHECKING:
    from numpy.typing import NDArray

#: Seconds since 1970 between 2001 and 2096: no elapsed test time is that long [s].
_EPOCH = (1e9, 4e9)
#: Counts per second in which loggers write the time since 1970.
_EPOCH_SCALES = {1.0: "seconds", 1e3: "milliseconds", 1e6: "microseconds", 1e9: "nanoseconds"}
#: Spreadsheet day numbers of the years 1982 to 2091 [days].
_SERIAL = (30_000.0, 70_000.0)
#: Dates run together, year to second, of the years 1970 to 2099.
_CALENDAR = (19_700_000_000_000.0, 21_000_000_000_000.0)
_DAY = 86_400.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Clock:
    """The times of the rows, as written, in file order.

    Attributes
    ----------
    t : (n,) ndarray
        Times [s] from an arbitrary zero; NaN where the cell holds none.
    zero : pandas.Timestamp or None
        Wall-clock time of that zero, None for elapsed times.
    column : Column
    taken : frozenset of int
        Positions of the columns that make up the time, from 1.
    notes : tuple of Caution
    """

    t: NDArray[np.float64]
    zero: pd.Timestamp | None
    column: Column
    taken: frozenset[int]
    notes: tuple[Caution, ...]


def read_clock(
    fields: Sequence[Field],
    *,
    sheet: LoopSheet,
    named: Field | None,
    lines: Sequence[int],
    headed: bool,
    file: str,
) -> Clock:
    """Find the time column and turn it into seconds.

    Parameters
    ----------
    fields : sequence of Field
        The columns.
    sheet : LoopSheet
        Its [time] table.
    named : Field or None
        The column the sheet names.
    lines : sequence of int
        Line number of each row.
    headed : bool
        The columns have names of their own.
    file : str
        Name for messages.

    Returns
    -------
    Clock

    Raises
    ------
    LogUnreadable
        If the time column is not times.
    QuestionForUser
        If its dates or its unit can be read in two ways, or there is none.
    UsageError
        If [time] format does not fit.
    """
    field, reason = (named, "named in the loop sheet") if named else _find(fields, headed)
    if field is None:
        return _counted(fields, sheet, file)
    if field.values is not None and sheet.time.format is None and not _is_calendar(field):
        return _elapsed(field, reason, sheet, headed, lines, file)
    text = _as_text(field)
    partner = _partner(field, text, fields)
    taken = {field.index}
    name = field.name
    if partner is not None:
        date, clock = (field, partner) if is_date_only(text) else (partner, field)
        text = _as_text(date) + " " + _as_text(clock)
        taken.add(partner.index)
        name = f"{date.name} + {clock.name}"
        reason = "date and time in two columns"
    t, zero, notes = read_stamps(text, sheet, field, lines, file)
    column = Column(name=name, index=field.index, unit=None, reason=reason)
    return Clock(t=t, zero=zero, column=column, taken=frozenset(taken), notes=notes)


def _is_calendar(field: Field) -> bool:
    """Tell whether numbers are dates run together, such as 20241014080000."""
    values = field.values
    if values is None or not np.any(np.isfinite(values)):
        return False
    low, high = np.nanmin(values), np.nanmax(values)
    return bool(
        _CALENDAR[0] < low and high < _CALENDAR[1] and np.all(np.mod(values[np.isfinite(values)], 100) < 60)
    )


def _as_text(field: Field) -> pd.Series:
    if field.text is not None:
        return field.text
    values = pd.Series(field.values)
    if _is_calendar(field):
        digits = values.map("{:.0f}".format).astype("string").mask(values.isna())
        return digits.str.slice(0, 8) + "T" + digits.str.slice(8)
    return values.map("{:.15g}".format).astype("string").mask(values.isna())


def _partner(field: Field, text: pd.Series, fields: Sequence[Field]) -> Field | None:
    """Find the other half of a time written in two columns."""
    if is_date_only(text):
        wanted = [f for f in fields if f.text is not None and is_clock_only(f.text)]
    elif is_clock_only(text):
        wanted = [f for f in fields if f.text is not None and is_date_only(f.text)]
    else:
        wanted = []
    return next((f for f in wanted if f.index != field.index), None)


def _rises(field: Field) -> bool:
    if field.values is None:
        return False
    known = field.values[np.isfinite(field.values)]
    if known.size < 3 or known.size < 0.9 * field.values.size:
        return False
    steps = np.diff(known)
    return bool(max(np.mean(steps > 0), np.mean(steps < 0)) > 0.98)


def _find(fields: Sequence[Field], headed: bool) -> tuple[Field | None, str]:
    """Choose the time column: dates first, then a name that says time, then a first column that rises."""
    for field in fields:
        if is_stamp(field):
            return field, "holds dates or clock times"
    names = {field.index: read_name(field.name, field.unit) for field in fields}
    for field in fields:
        said = names[field.index]
        if said.role == "time" and field.values is not None and not field.empty:
            return field, f'named "{said.word}"'
    for field in fields:
        said = names[field.index]
        if said.kind == "time" and _rises(field):
            return field, f"unit {field.unit}, rises steadily"
    for field in fields:
        said = names[field.index]
        if _rises(field) and said.role in (None, "index") and (field.index == 1 or not headed):
            return field, "rises steadily"
    return None, ""


def _counted(fields: Sequence[Field], sheet: LoopSheet, file: str) -> Clock:
    rows = next((f.values.size for f in fields if f.values is not None), 0)
    if sheet.time.sample_s is None:
        raise QuestionForUser(
            "No column holds times.",
            file=file,
            remedy="Give the log interval in the loop sheet, [time] sample_s = 1.0, or the "
            "column, [columns] time.",
        )
    column = Column(name="row number", index=0, unit="s", reason="[time] sample_s in the loop sheet")
    t = np.arange(rows, dtype=np.float64) * sheet.time.sample_s
    return Clock(t=t, zero=None, column=column, taken=frozenset(), notes=())


def _elapsed(
    field: Field, reason: str, sheet: LoopSheet, headed: bool, lines: Sequence[int], file: str
) -> Clock:
    values = cast("NDArray[np.float64]", field.values)
    known = values[np.isfinite(values)]
    if known.size < 0.5 * values.size or known.size == 0:
        raise LogUnreadable(
            "Most cells of the time column hold no time.",
            file=file,
            line=field.first_bad or lines[int(np.argmax(~np.isfinite(values)))],
            column=field.name,
            remedy="Name the right column with [columns] time.",
        )
    notes: list[Caution] = []
    zero: pd.Timestamp | None = None
    unit = sheet.time.unit or _stated_unit(field)
    middle = float(np.median(known))
    pace = float(np.median(np.abs(np.diff(known)))) if known.size > 1 else 0.0
    scale = SECONDS[unit.lower()] if unit else 1.0
    per_second = next((k for k in _EPOCH_SCALES if _EPOCH[0] < middle / k < _EPOCH[1]), None)
    if unit is None and per_second is not None:
        scale = 1.0 / per_second
        zero = pd.Timestamp(float(known[0]) * scale, unit="s", tz="UTC")
        notes.append(
            Caution(
                code="epoch", level="note", text=f"Times are {_EPOCH_SCALES[per_second]} since 1970 (UTC)."
            )
        )
    elif unit is None and _SERIAL[0] < middle < _SERIAL[1] and pace < 0.05:
        scale = _DAY
        zero = pd.Timestamp("1899-12-30") + pd.Timedelta(float(known[0]) * _DAY, unit="s")
        notes.append(Caution(code="serial-days", level="note", text="Times are spreadsheet day numbers."))
    elif unit is None:
        if headed and read_name(field.name, None).role == "index":
            raise QuestionForUser(
                "The rows are numbered and nothing says how long one row lasts.",
                file=file,
                column=field.name,
                remedy="If the numbers are times give [time] unit; if they count rows give [time] "
                "sample_s and "
                "leave the column out.",
            )
        if known.size > 1 and bool(np.all(np.abs(np.diff(known)) == 1.0)):
            raise QuestionForUser(
                "The times count 0, 1, 2 and nothing says what: seconds, minutes or rows.",
                file=file,
                column=field.name,
                remedy='Say which in the loop sheet: [time] unit = "s" or "min"; for counted rows [time] '
                "sample_s, and leave the column out.",
            )
        notes.append(
            Caution(
                code="time-unit-assumed",
                level="care",
                text="No unit on the time column: seconds assumed; set [time] unit if not.",
            )
        )
    return Clock(
        t=(values - known[0]) * scale,
        zero=zero,
        column=Column(name=field.name, index=field.index, unit=unit or "s", reason=reason),
        taken=frozenset({field.index}),
        notes=tuple(notes),
    )


def _stated_unit(field: Field) -> str | None:
    """Unit the file states: beside the name, in a unit row, or as the name itself ("Seconds")."""
    if field.unit and field.unit.lower() in SECONDS:
        return field.unit
    # single letters are names of columns before they are units
    return next((w for w in words_of(field.name) if len(w) > 1 and w in SECONDS), None)
