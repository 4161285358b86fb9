"""A log file in, a `Log` out: the stages of the intake in their order."""

from __future__ import annotations

import difflib
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from pipeline.errors import LogUnreadable, UsageError
from pipeline.findings import Caution
from pipeline.intake.clock import Clock, read_clock
from pipeline.intake.flags import without_bad
from pipeline.intake.layout import find_layout
from pipeline.intake.log import Column, Log
from pipeline.intake.long import spread_tags
from pipeline.intake.mode import read_mode
from pipeline.intake.names import read_name, split_unit
from pipeline.intake.order import settle_order
from pipeline.intake.roles import Roles, assign_roles
from pipeline.intake.runs import choose_run
from pipeline.intake.table import Field, read_table
from pipeline.intake.text import read_text
from pipeline.settings import ColumnName, LoopSheet

if TYPE_CHECKING:
    from numpy.typing import NDArray

#: Rows with a PV below which no test can be judged [1]: common practice asks for 30 to 50 around a move.
MIN_ROWS = 30
#: Share of missing PV cells from which it is worth a warning [1]: common practice, up to 5 % off the rise.
_MANY_MISSING = 0.05

_NOTHING_SAID = LoopSheet()


def read_log(path: str | Path, *, sheet: LoopSheet = _NOTHING_SAID) -> Log:
    """Read a bump-test log exported as text.

    Parameters
    ----------
    path : str or Path
        The file.
    sheet : LoopSheet
        What the user says about columns, times and units; may be empty.

    Returns
    -------
    Log
        Times, PV and CO as logged: nothing resampled, nothing filled in but the held CO.

    Raises
    ------
    LogUnreadable
        If the file is missing, empty, not text, or holds too few usable rows.
    QuestionForUser
        If it can be read in two ways.
    UsageError
        If the sheet names a column the file does not have.
    """
    text = read_text(path, part=sheet.file.part)
    layout = find_layout(text.lines, file=text.file, decimal=sheet.file.decimal)
    fields = read_table(text.lines, layout, file=text.file)
    wanted = sheet.columns
    clock = read_clock(
        fields,
        sheet=sheet,
        named=_look_up(fields, wanted.time, "time", text.file),
        lines=layout.body,
        headed=layout.headed,
        file=text.file,
    )
    spread = spread_tags(fields, clock, layout.body)
    if spread is None:
        fields, flag_notes = without_bad(fields)
    fields, clock, lines, shape_notes = spread or (fields, clock, layout.body, flag_notes)
    fields, clock, lines, run_notes = choose_run(
        fields, clock, lines, wanted=sheet.file.run, fewest=MIN_ROWS, file=text.file
    )
    named = {
        key: _look_up(fields, getattr(wanted, key), key, text.file) for key in ("pv", "co", "sp", "mode")
    }
    rest = [f for f in fields if f.index not in clock.taken]
    numeric = [f.values for f in rest if f.values is not None]
    order = settle_order(clock.t, numeric, lines=lines)
    if order.rows.size < MIN_ROWS:
        raise _too_few(order.rows.size, "rows", text.file)
    for key in ("pv", "co", "sp"):
        _need_numbers(named[key], text.file, lines)
    roles = assign_roles(
        _of_the_tag(rest, sheet.loop.tag),
        order.rows,
        pv=named["pv"],
        co=named["co"],
        sp=named["sp"],
        mode=named["mode"],
        file=text.file,
    )
    for field in (roles.pv, roles.co):
        _need_numbers(field, text.file, lines)
    shown = [roles.pv, roles.co, *(f for f in (roles.sp, roles.mode) if f)]
    cells = [Caution(code="cell-form", level="note", text=guess) for f in shown for guess in f.guesses]
    notes = [
        *text.notes,
        *layout.notes,
        *clock.notes,
        *shape_notes,
        *run_notes,
        *order.notes,
        *cells,
        *roles.notes,
    ]
    return _assemble(
        text.file, text.name, text.sha256, sheet, clock, roles, order.rows, notes, len(layout.body)
    )


def _look_up(fields: Sequence[Field], name: ColumnName | None, key: str, file: str) -> Field | None:
    """Find the column the sheet names, by position or by header text."""
    if name is None:
        return None
    if isinstance(name, int):
        if name <= len(fields):
            return fields[name - 1]
        raise UsageError(
            f"[columns] {key} = {name}, but the log has {len(fields)} columns.",
            file=file,
            remedy="Columns are counted from 1.",
        )
    for same in (
        lambda f: f.name == name,
        lambda f: f.name.casefold().strip() == name.casefold().strip(),
        lambda f: split_unit(f.name)[0].casefold().strip() == name.casefold().strip(),
    ):
        found = [f for f in fields if same(f)]
        if len(found) == 1:
            return found[0]
        if found:
            raise UsageError(
                f'[columns] {key} = "{name}" fits {len(found)} columns of the log.',
                file=file,
                remedy=f"Give the position instead: {key} = {found[0].index} or {found[1].index}.",
            )
    names = [f.name for f in fields]
    near = difflib.get_close_matches(name, names, n=1, cutoff=0.4)
    hint = f' Did you mean "{near[0]}"?' if near else ""
    raise UsageError(
        f'[columns] {key} = "{name}", but the log has no such column.',
        file=file,
        column=name,
        remedy=f"It has: {', '.join(names[:12])}.{hint}",
    )


def _of_the_tag(fields: Sequence[Field], tag: str | None) -> Sequence[Field]:
    """Keep the columns that carry the loop's tag, where they make a whole loop."""
    plain = _letters(tag or "")
    tagged = [f for f in fields if plain and plain in _letters(f.name)]
    roles = {read_name(f.name, f.unit).role for f in tagged if f.values is not None and not f.empty}
    return tagged if {"pv", "co"} <= roles else fields


def _letters(text: str) -> str:
    return "".join(c for c in text.casefold() if c.isalnum())


def _need_numbers(field: Field | None, file: str, lines: Sequence[int]) -> None:
    if field is None or (field.values is not None and not field.empty):
        return
    if field.empty:
        raise LogUnreadable("The column is empty.", file=file, line=lines[0], column=field.name)
    line = field.first_bad or lines[0]
    cell = "" if field.text is None else str(field.text.iloc[list(lines).index(line)])
    raise LogUnreadable(
        f'The column holds text where numbers are needed: "{cell}".',
        file=file,
        line=line,
        column=field.name,
        remedy="Name another column in [columns], or export the values as plain numbers.",
    )


def _too_few(count: int, what: str, file: str) -> LogUnreadable:
    return LogUnreadable(
        f"A log needs at least {MIN_ROWS} {what} around its moves; found {count}.",
        file=file,
        remedy="Export the whole test at the logger's fastest interval.",
    )


def _held(values: NDArray[np.float64]) -> NDArray[np.float64]:
    """Hold the last known value over missing ones; NaN stays before the first."""
    known = np.isfinite(values)
    last = np.maximum.accumulate(np.where(known, np.arange(values.size), 0))
    return np.asarray(values[last], dtype=np.float64)


def _assemble(
    file: str,
    name: str,
    sha256: str,
    sheet: LoopSheet,
    clock: Clock,
    roles: Roles,
    rows: NDArray[np.intp],
    notes: list[Caution],
    count: int,
) -> Log:
    assert roles.pv.values is not None and roles.co.values is not None
    co = _held(roles.co.values[rows])
    known = np.isfinite(co)
    early = int(np.argmax(known))
    if early:
        notes.append(
            Caution(
                code="no-co-yet",
                level="note",
                text=f"The first {early} rows hold no CO and were left out.",
                value=float(early),
            )
        )
    automatic = None
    if roles.mode is not None:
        automatic, note = read_mode(roles.mode, rows, co)
        automatic = None if automatic is None else automatic[early:]
        notes.extend(note)
    sp = None if roles.sp is None or roles.sp.values is None else _held(roles.sp.values[rows])[early:]
    rows, co = rows[early:], co[early:]
    pv = roles.pv.values[rows]
    if int(np.isfinite(pv).sum()) < MIN_ROWS:
        raise _too_few(int(np.isfinite(pv).sum()), "rows with a PV", file)
    notes.extend(_missing(roles, rows, pv))
    t = clock.t[rows] - clock.t[rows[0]]
    return Log(
        file=name,
        sha256=sha256,
        rows=count,
        start=_start(clock, float(clock.t[rows[0]])),
        t=t,
        pv=pv,
        co=co,
        sp=sp,
        automatic=automatic,
        time_column=clock.column,
        pv_column=_column(roles.pv, sheet.pv.unit, roles.pv_reason),
        co_column=_column(roles.co, sheet.co.unit, roles.co_reason),
        sp_column=_column(roles.sp, None, "named as the set point") if roles.sp else None,
        mode_column=_column(roles.mode, None, "named as the mode") if roles.mode else None,
        notes=tuple(notes),
    )


def _column(field: Field, unit: str | None, reason: str) -> Column:
    return Column(name=field.name, index=field.index, unit=unit or field.unit, reason=reason)


def _start(clock: Clock, first: float) -> str | None:
    if clock.zero is None:
        return None
    try:
        return (clock.zero + pd.Timedelta(first, unit="s")).isoformat()
    except (OverflowError, ValueError):
        return None


def _missing(roles: Roles, rows: NDArray[np.intp], pv: NDArray[np.float64]) -> list[Caution]:
    notes: list[Caution] = []
    assert roles.co.values is not None
    lost_pv = int(np.isnan(pv).sum())
    lost_co = int(np.isnan(roles.co.values[rows]).sum())
    if lost_pv:
        bad = f"; the first text cell is at line {roles.pv.first_bad}" if roles.pv.first_bad else ""
        notes.append(
            Caution(
                code="pv-missing",
                level="care" if lost_pv > _MANY_MISSING * pv.size else "note",
                text=f"{lost_pv} of {pv.size} rows hold no usable PV (blank, bad or out of all "
                f"range); they are left "
                f"out, not filled in{bad}.",
                value=float(lost_pv),
                limit=_MANY_MISSING * pv.size,
            )
        )
    if lost_co:
        notes.append(
            Caution(
                code="co-held",
                level="note",
                text=f"{lost_co} rows hold no CO; the last value was held.",
                value=float(lost_co),
            )
        )
    return notes
