"""Written dates and times of day to seconds: their order, their twelve hours, their clock changes."""

from __future__ import annotations

import re
from collections.abc import Sequence
from typing import TYPE_CHECKING, cast

import numpy as np
import pandas as pd

from pipeline.errors import LogUnreadable, QuestionForUser, UsageError
from pipeline.findings import Caution
from pipeline.intake.clockchange import unbroken
from pipeline.intake.table import Field
from pipeline.settings import LoopSheet

if TYPE_CHECKING:
    from numpy.typing import NDArray

_TIME = r"\d{1,2}:\d{2}(?::\d{2}(?:[.,]\d+)?)?(?:\s*[AaPp]\.?\s?[Mm]\.?)?"
_ISO = re.compile(r"\d{4}[-/]\d{1,2}[-/]\d{1,2}|\d{8}[ T]\d{4,6}")
_LOCAL = (
    r"^(?P<a>\d{1,2})(?P<mark>[/.\-])(?P<b>\d{1,2})[/.\-](?P<year>\d{4}|\d{2})\.?"
    rf"(?:[ T]+(?P<clock>{_TIME}))?$"
)
_NAMED = (
    r"^(?:\w{2,10},? )?(?P<a>\d{1,2})\.?[- /.]{1,2}(?P<b>[^\W\d_]{3,10})\.?[- /.,]{1,2}(?P<year>\d{4}|\d{2})"
    rf"(?:[ T]+(?P<clock>{_TIME}))?$",
    rf"^(?P<b>[^\W\d_]{{3,10}})\.? (?P<a>\d{{1,2}}),? (?P<year>\d{{4}})(?:[ T]+(?P<clock>{_TIME}))?$",
    rf"^(?P<year>\d{{4}})[- /.](?P<b>[^\W\d_]{{3,10}})[- /.](?P<a>\d{{1,2}})(?:[ T]+(?P<clock>{_TIME}))?$",
)
_CLOCK = re.compile(r"^\d{1,3}:\d{2}(:\d{2}([.,]\d+)?)?(\s*[AaPp]\.?\s?[Mm]\.?)?$")
_HALVES = r"^(\d{1,3}):(\d{2})(?::(\d{2}(?:\.\d+)?))?\s*(?:([AaPp])\.?\s?[Mm]\.?)?$"
_DAY = 86_400.0

#: Starts of month names, one line a language: English, German, Spanish, French, Italian, Portuguese, Dutch.
_MONTHS = (
    "jan feb mar apr may jun jul aug sep oct nov dec",
    "jan feb mär apr mai jun jul aug sep okt nov dez",
    "ene feb mar abr may jun jul ago sep oct nov dic",
    "janv févr mars avr mai juin juil août sept oct nov déc",
    "gen feb mar apr mag giu lug ago set ott nov dic",
    "jan fev mar abr mai jun jul ago set out nov dez",
    "jan feb maa apr mei jun jul aug sep okt nov dec",
)
_MONTH = {start: k + 1 for line in _MONTHS for k, start in enumerate(line.split())}


def is_date_only(text: pd.Series) -> bool:
    """Tell whether the cells hold a date without a time of day."""
    cell = first_cell(text)
    return ":" not in cell and "T" not in cell and (_ISO.match(cell) is not None or _is_local(cell))


def is_clock_only(text: pd.Series) -> bool:
    """Tell whether the cells hold a time of day without a date."""
    return _CLOCK.match(first_cell(text)) is not None


def is_stamp(field: Field) -> bool:
    """Tell whether a column holds dates, times of day or both."""
    if field.text is None:
        return False
    cell = first_cell(field.text)
    return _ISO.match(cell) is not None or _is_local(cell) or _CLOCK.match(cell) is not None


def first_cell(text: pd.Series) -> str:
    """Give the first cell that holds anything."""
    known = text.dropna()
    return str(known.iloc[0]) if len(known) else ""


def read_stamps(
    text: pd.Series, sheet: LoopSheet, field: Field, lines: Sequence[int], file: str
) -> tuple[NDArray[np.float64], pd.Timestamp | None, tuple[Caution, ...]]:
    """Turn written times into seconds.

    Parameters
    ----------
    text : pandas.Series
        The cells.
    sheet : LoopSheet
        Its [time] table.
    field : Field
        The column, for messages.
    lines : sequence of int
        Line number of each row.
    file : str
        Name for messages.

    Returns
    -------
    t : (n,) ndarray
        Times [s] from the first one, in file order.
    zero : pandas.Timestamp or None
        Wall-clock time of the first one, None for times of day without a date.
    notes : tuple of Caution

    Raises
    ------
    LogUnreadable
        If the cells are not times.
    QuestionForUser
        If they can be read in two ways.
    UsageError
        If [time] format does not fit.
    """
    cell = first_cell(text)
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
        return *_times_of_day(text, field, lines, file), ()
    elif re.match(_LOCAL, cell):
        stamps, note = _local(text, field, lines, file)
        notes.append(note)
    elif _is_local(cell):
        stamps = _with_month_names(text)
        _check(stamps, text, "are not dates", field, lines, file)
    else:
        raise QuestionForUser(
            f'The times are written in a way that is not known here ("{cell}").',
            file=file,
            column=field.name,
            remedy='Give the form in the loop sheet, for example [time] format = "%d/%m/%Y '
            '%H:%M:%S", or name another column with [columns] time.',
        )
    stamps = _in_zone(stamps, sheet, field, file)
    zero = cast("pd.Timestamp", stamps.dropna().iloc[0])
    t = np.asarray((stamps - zero).dt.total_seconds().to_numpy(), dtype=np.float64)
    if stamps.dt.tz is None:
        t, changed = unbroken(t, zero, lines)
        notes.extend(changed)
    return t, zero, tuple(notes)


def _is_local(cell: str) -> bool:
    if re.match(_LOCAL, cell):
        return True
    found = next((m for m in (re.match(p, cell) for p in _NAMED) if m), None)
    return found is not None and _month(found["b"]) is not None


def _month(name: str) -> int | None:
    low = name.lower()
    return next((_MONTH[low[:k]] for k in (5, 4, 3) if low[:k] in _MONTH), None)


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


def _numbers(text: pd.Series) -> pd.Series:
    numbers = pd.to_numeric(text, errors="coerce").to_numpy(dtype=np.float64, na_value=np.nan)
    return pd.Series(numbers, index=text.index)


def _seconds_of_day(text: pd.Series) -> NDArray[np.float64]:
    """Read h:mm, h:mm:ss and both with am or pm; NaN where a cell is none of them [s]."""
    parts = text.str.replace(",", ".", regex=False).str.extract(_HALVES)
    h, m, s = (_numbers(parts[k]).to_numpy() for k in range(3))
    half = parts[3].str.lower().to_numpy(dtype=object, na_value="")
    h = np.where(half == "", h, np.mod(h, 12.0) + 12.0 * (half == "p"))
    return np.asarray(h * 3600.0 + m * 60.0 + np.nan_to_num(s), dtype=np.float64)


def _times_of_day(
    text: pd.Series, field: Field, lines: Sequence[int], file: str
) -> tuple[NDArray[np.float64], None]:
    """Read times without a date; past midnight the day goes on, past a twelve-hour dial the half day."""
    t = _seconds_of_day(text)
    _check(pd.Series(t), text, "are not clock times", field, lines, file)
    known = np.flatnonzero(np.isfinite(t))
    steps = np.diff(t[known], prepend=t[known[0]])
    pace = float(np.median(np.abs(steps))) if steps.size else 0.0
    half = np.abs(steps + 0.5 * _DAY - pace) <= 2.0 * pace
    t[known] += np.cumsum(np.where(half, 0.5 * _DAY, np.where(steps < -0.5 * _DAY, _DAY, 0.0)))
    return np.asarray(t - t[known[0]], dtype=np.float64), None


def _local(text: pd.Series, field: Field, lines: Sequence[int], file: str) -> tuple[pd.Series, Caution]:
    """Read dates whose day and month stand in an order the log must give away."""
    parts = text.str.extract(_LOCAL)
    a = _numbers(parts["a"])
    b = _numbers(parts["b"])
    year = _numbers(parts["year"])
    clock = _seconds_of_day(parts["clock"].fillna("0:00"))
    dotted = bool((parts["mark"].dropna() == ".").all())
    day_first, month_first = bool((a > 12).any()), bool((b > 12).any())
    why = "a day above 12 shows it"
    if day_first and month_first:
        raise LogUnreadable(
            "Some dates have the day first and some the month first.",
            file=file,
            line=lines[int(np.argmax((a > 12).to_numpy(dtype=bool, na_value=False)))],
            column=field.name,
            remedy="Export again with dates like 2026-03-04.",
        )
    if not (day_first or month_first):
        by_day, by_month = _dated(a, b, year, clock), _dated(b, a, year, clock)
        day_first, month_first = _shorter(by_day, by_month), _shorter(by_month, by_day)
        why = "the other way the log would jump by weeks"
    if not (day_first or month_first or dotted):
        raise _which_first(text, field, file)
    if not (day_first or month_first):
        why = "dates with points are written so"
    stamps = _dated(b, a, year, clock) if month_first else _dated(a, b, year, clock)
    _check(stamps, text, "are not dates", field, lines, file)
    order = "month" if month_first else "day"
    return stamps, Caution(code="date-order", level="note", text=f"Dates were read {order} first: {why}.")


def _dated(day: pd.Series, month: pd.Series, year: pd.Series, clock: NDArray[np.float64]) -> pd.Series:
    full = year.where(year > 99, year + 2000)
    dates = pd.to_datetime(pd.DataFrame({"year": full, "month": month, "day": day}), errors="coerce")
    return cast("pd.Series", dates + pd.to_timedelta(clock, unit="s").round("us"))


def _shorter(one: pd.Series, other: pd.Series) -> bool:
    """Tell whether one reading runs over days where the other one jumps over weeks."""
    jumps = [float(s.dropna().diff().dt.total_seconds().abs().max()) for s in (one, other)]
    return jumps[0] < 3.0 * _DAY and jumps[1] > 20.0 * _DAY


def _which_first(text: pd.Series, field: Field, file: str) -> QuestionForUser:
    """Ask with the two forms spelled as this log writes them."""
    cell = first_cell(text)
    found = re.match(_LOCAL, cell)
    assert found is not None
    mark, year, clock = found["mark"], "%Y" if len(found["year"]) == 4 else "%y", found["clock"] or ""
    hours = "%I" if re.search(r"[AaPp]\.?\s?[Mm]", clock) else "%H"
    tail = ("", "", f" {hours}:%M", f" {hours}:%M:%S")[min(3, clock.count(":") + 1 if clock else 0)]
    tail += (".%f" if re.search(r"[.]\d", clock) else "") + (" %p" if hours == "%I" else "")
    return QuestionForUser(
        f'"{cell}" may have the day or the month first.',
        file=file,
        column=field.name,
        remedy=f'Give [time] format in the loop sheet: "%d{mark}%m{mark}{year}{tail}" with the day first, '
        f'"%m{mark}%d{mark}{year}{tail}" with the month first.',
    )


def _with_month_names(text: pd.Series) -> pd.Series:
    """Read dates such as 14-Oct-24, 14. Oktober 2024 and Oct 14, 2024: a name is never ambiguous."""
    pattern = next(p for p in _NAMED if re.match(p, first_cell(text)))
    parts = text.str.extract(pattern)
    names = {name: _month(str(name)) for name in parts["b"].dropna().unique()}
    return _dated(
        _numbers(parts["a"]),
        _numbers(parts["b"].map(names)),
        _numbers(parts["year"]),
        _seconds_of_day(parts["clock"].fillna("0:00")),
    )


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
