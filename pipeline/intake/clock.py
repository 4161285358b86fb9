"""The time column to seconds: which column it is, how it is written, what unit it counts in."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, cast

import numpy as np
import pandas as pd

from pipeline.errors import LogUnreadable, QuestionForUser, UsageError
from pipeline.findings import Caution
from pipeline.intake.log import Column
from pipeline.intake.names import SECONDS, read_name, words_of
from pipeline.intake.table import Field
from pipeline.settings import LoopSheet

if TYPE_CHECKING:
    from numpy.typing import NDArray

_ISO = re.compile(r"\d{4}[-/]\d{1,2}[-/]\d{1,2}")
_LOCAL = (
    r"^(?P<a>\d{1,2})(?P<mark>[/.\-])(?P<b>\d{1,2})[/.\-](?P<year>\d{4}|\d{2})"
    r"(?:[ T]+(?P<clock>\d{1,2}:\d{2}(?::\d{2}(?:[.,]\d+)?)?))?$"
)
_CLOCK = re.compile(r"^\d{1,3}:\d{2}(:\d{2}([.,]\d+)?)?$")

#: Seconds since 1970 between 2001 and 2096, and the same in ms: no elapsed test time is that long [s].
_EPOCH = (1e9, 4e9)
#: Spreadsheet day numbers of the years 1982 to 2091 [days].
_SERIAL = (30_000.0, 70_000.0)
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
    if field.values is not None and sheet.time.format is None:
        return _elapsed(field, reason, sheet, headed, lines, file)
    text = _as_text(field)
    partner = _partner(field, text, fields)
    taken = {field.index}
    name = field.name
    if partner is not None:
        date, clock = (field, partner) if _is_date_only(text) else (partner, field)
        text = _as_text(date) + " " + _as_text(clock)
        taken.add(partner.index)
        name = f"{date.name} + {clock.name}"
        reason = "date and time in two columns"
    t, zero, notes = _stamps(text, sheet, field, lines, file)
    column = Column(name=name, index=field.index, unit=None, reason=reason)
    return Clock(t=t, zero=zero, column=column, taken=frozenset(taken), notes=notes)


def _as_text(field: Field) -> pd.Series:
    if field.text is not None:
        return field.text
    return pd.Series(field.values).map("{:g}".format).astype("string")


def _first(text: pd.Series) -> str:
    known = text.dropna()
    return str(known.iloc[0]) if len(known) else ""


def _is_date_only(text: pd.Series) -> bool:
    cell = _first(text)
    return ":" not in cell and (_ISO.match(cell) is not None or re.match(_LOCAL, cell) is not None)


def _is_stamp(field: Field) -> bool:
    if field.text is None:
        return False
    cell = _first(field.text)
    return (
        _ISO.match(cell) is not None or re.match(_LOCAL, cell) is not None or _CLOCK.match(cell) is not None
    )


def _partner(field: Field, text: pd.Series, fields: Sequence[Field]) -> Field | None:
    """Find the other half of a time written in two columns."""
    if _is_date_only(text):
        wanted = [f for f in fields if f.text is not None and _CLOCK.match(_first(f.text))]
    elif _CLOCK.match(_first(text)):
        wanted = [f for f in fields if f.text is not None and _is_date_only(f.text)]
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
        if _is_stamp(field):
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
    if unit is None and (_EPOCH[0] < middle < _EPOCH[1] or 1e3 * _EPOCH[0] < middle < 1e3 * _EPOCH[1]):
        scale = 1.0 if middle < _EPOCH[1] else 1e-3
        zero = pd.Timestamp(float(known[0]) * scale, unit="s", tz="UTC")
        notes.append(Caution(code="epoch", level="note", text="Times are seconds since 1970 (UTC)."))
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


def _stamps(
    text: pd.Series, sheet: LoopSheet, field: Field, lines: Sequence[int], file: str
) -> tuple[NDArray[np.float64], pd.Timestamp | None, tuple[Caution, ...]]:
    cell = _first(text)
    notes: list[Caution] = []
    if sheet.time.format is not None:
        stamps = _to_datetime(text, sheet.time.format, "%z" in sheet.time.format)
        _check(
            stamps, text, f"do not fit [time] format = {sheet.time.format!r}", field, lines, file, usage=True
        )
    elif _ISO.match(cell):
        iso = text.str.replace("/", "-", regex=False).str.replace(",", ".", regex=False)
        stamps = _to_datetime(iso, "ISO8601", re.search(r"\d(Z|[+-]\d{2}:?\d{2})$", cell) is not None)
        _check(stamps, text, "are not dates", field, lines, file)
    elif _CLOCK.match(cell):
        return _clock_times(text, field, lines, file), None, ()
    elif re.match(_LOCAL, cell):
        stamps, note = _local(text, field, lines, file)
        notes.append(note)
    else:
        raise QuestionForUser(
            f'The times are written in a way that is not known here ("{cell}").',
            file=file,
            column=field.name,
            remedy='Give the form in the loop sheet, for example [time] format = "%d/%m/%Y '
            '%H:%M:%S", or name another '
            "column with [columns] time.",
        )
    stamps = _in_zone(stamps, sheet, field, file)
    zero = cast("pd.Timestamp", stamps.dropna().iloc[0])
    t = np.asarray((stamps - zero).dt.total_seconds().to_numpy(), dtype=np.float64)
    return t, zero, tuple(notes)


def _to_datetime(text: pd.Series, form: str, utc: bool) -> pd.Series:
    try:
        return cast("pd.Series", pd.to_datetime(text, format=form, errors="coerce", utc=utc))
    except (ValueError, OverflowError, TypeError):
        return pd.Series(pd.NaT, index=text.index, dtype="datetime64[ns]")


def _check(
    stamps: pd.Series,
    text: pd.Series,
    what: str,
    field: Field,
    lines: Sequence[int],
    file: str,
    *,
    usage: bool = False,
) -> None:
    good = int(stamps.notna().sum())
    if good > 0.5 * len(stamps):
        return
    bad = int(np.argmax(stamps.isna().to_numpy(dtype=bool)))
    shown = "blank" if pd.isna(text.iloc[bad]) else f'"{text.iloc[bad]}"'
    raise (UsageError if usage else LogUnreadable)(
        f"The times {what}: this cell is {shown}.",
        file=file,
        line=lines[bad],
        column=field.name,
        remedy="Correct [time] format in the loop sheet."
        if usage
        else "Give [time] format in the loop sheet.",
    )


def _clock_times(text: pd.Series, field: Field, lines: Sequence[int], file: str) -> NDArray[np.float64]:
    """Read h:mm or h:mm:ss without a date; past midnight the day goes on."""
    parts = text.str.replace(",", ".", regex=False).str.extract(r"^(\d{1,3}):(\d{2})(?::(\d{2}(?:\.\d+)?))?$")
    h, m, s = (
        pd.to_numeric(parts[k], errors="coerce").to_numpy(np.float64, na_value=np.nan) for k in range(3)
    )
    t = h * 3600.0 + m * 60.0 + np.nan_to_num(s)
    _check(pd.Series(t), text, "are not clock times", field, lines, file)
    known = np.flatnonzero(np.isfinite(t))
    days = np.cumsum(np.diff(t[known], prepend=t[known[0]]) < -0.5 * _DAY)
    t[known] += days * _DAY
    return np.asarray(t - t[known[0]], dtype=np.float64)


def _local(text: pd.Series, field: Field, lines: Sequence[int], file: str) -> tuple[pd.Series, Caution]:
    """Read dates whose day and month stand in an order the log must give away."""
    parts = text.str.extract(_LOCAL)
    a = pd.to_numeric(parts["a"], errors="coerce")
    b = pd.to_numeric(parts["b"], errors="coerce")
    year = pd.to_numeric(parts["year"], errors="coerce")
    dotted = bool((parts["mark"].dropna() == ".").all())
    day_first, month_first = bool((a > 12).any()), bool((b > 12).any())
    if day_first and month_first:
        raise LogUnreadable(
            "Some dates have the day first and some the month first.",
            file=file,
            line=lines[int(np.argmax((a > 12).to_numpy(dtype=bool, na_value=False)))],
            column=field.name,
            remedy="Export again with dates like 2026-03-04.",
        )
    if not (day_first or month_first or dotted):
        example = _first(text)
        raise QuestionForUser(
            f'"{example}" may have the day or the month first.',
            file=file,
            column=field.name,
            remedy='Give [time] format in the loop sheet: "%d/%m/%Y %H:%M:%S" with the day first, '
            '"%m/%d/%Y %H:%M:%S" with the month first.',
        )
    day, month = (b, a) if month_first else (a, b)
    year = year.where(year > 99, year + 2000)
    dates = pd.to_datetime(pd.DataFrame({"year": year, "month": month, "day": day}), errors="coerce")
    clock = parts["clock"].fillna("00:00:00").str.replace(",", ".", regex=False)
    clock = clock.where(clock.str.count(":") == 2, clock + ":00")
    stamps = dates + pd.to_timedelta(clock, errors="coerce")
    _check(stamps, text, "are not dates", field, lines, file)
    why = "a day above 12 shows it" if day_first or month_first else "dates with points are written so"
    order = "month" if month_first else "day"
    return stamps, Caution(code="date-order", level="note", text=f"Dates were read {order} first: {why}.")


def _in_zone(stamps: pd.Series, sheet: LoopSheet, field: Field, file: str) -> pd.Series:
    """Put wall-clock times into their zone, so that a clock change is no gap and no repeat."""
    if sheet.time.zone is None:
        return stamps
    if stamps.dt.tz is not None:
        return cast("pd.Series", stamps.dt.tz_convert(sheet.time.zone))
    steps = stamps.dropna().diff().dt.total_seconds()
    backwards = bool((steps < 0).sum() > (steps > 0).sum())
    ordered = stamps.iloc[::-1] if backwards else stamps
    try:
        placed = ordered.dt.tz_localize(sheet.time.zone, ambiguous="infer", nonexistent="shift_forward")
    except ValueError:
        raise QuestionForUser(
            "The clock was set back during this log and the repeated hour cannot be told apart.",
            file=file,
            column=field.name,
            remedy="Export the log in UTC, or leave [time] zone out if the logger's clock was not changed.",
        ) from None
    return cast("pd.Series", placed.iloc[::-1] if backwards else placed)
