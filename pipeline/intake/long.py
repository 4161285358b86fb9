"""A log with one reading a row (time, tag, value, quality) to one column a tag, each on its own times."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from pipeline.findings import Caution
from pipeline.intake.clock import Clock
from pipeline.intake.flags import good_rows, is_quality, left_out
from pipeline.intake.names import read_name, split_unit, words_of
from pipeline.intake.table import Field

if TYPE_CHECKING:
    from numpy.typing import NDArray

#: Tags a log may hold; a column of more words is comments.
_MOST_TAGS = 2000
_TAG_WORDS = frozenset(
    {"tag", "tags", "tagname", "point", "signal", "item", "channel", "name", "variable", "nombre"}
)
_VALUE_WORDS = frozenset(["value", "val", "wert", "valor", "valeur", "reading", "data"])


def spread_tags(
    fields: Sequence[Field], clock: Clock, lines: Sequence[int]
) -> tuple[tuple[Field, ...], Clock, tuple[int, ...], list[Caution]] | None:
    """Give each tag of a long log its own column.

    Parameters
    ----------
    fields : sequence of Field
        All columns.
    clock : Clock
        Their times.
    lines : sequence of int
        Line number of each row.

    Returns
    -------
    fields : tuple of Field
        One a tag, NaN where the tag has no reading at a time: nothing is joined or held here.
    clock : Clock
        Each time once, rising.
    lines : tuple of int
        Line of the first row of each time.
    notes : list of Caution
        None of the four where the log has one column a signal already.
    """
    rest = [f for f in fields if f.index not in clock.taken and not f.empty]
    tags = next((f for f in rest if _is_tags(f)), None)
    if tags is None or tags.text is None:
        return None
    quality = next((f for f in rest if f is not tags and is_quality(f)), None)
    readings = [f for f in rest if f not in (tags, quality) and (f.values is not None or _named_value(f))]
    value = next((f for f in readings if _named_value(f)), readings[0] if len(readings) == 1 else None)
    if value is None:
        return None
    good = good_rows(quality) if quality is not None else None
    known = np.isfinite(clock.t) & tags.text.notna().to_numpy(dtype=bool)
    rows = np.flatnonzero(known)
    times, first, place = np.unique(clock.t[rows], return_index=True, return_inverse=True)
    codes, names = pd.factorize(tags.text.iloc[rows])
    units = next((f.text for f in rest if f.text is not None and "unit" in words_of(f.name)), None)
    columns, repeated, conflicts = [], 0, 0
    for k, name in enumerate(names):
        mine = np.flatnonzero(codes == k)
        at, chosen = np.unique(place[mine], return_index=True)
        source = rows[mine]
        repeated += mine.size - at.size
        if value.values is not None:
            here = value.values[source]
            earlier = here[chosen][np.searchsorted(at, place[mine])]
            conflicts += int(np.sum((here != earlier) & np.isfinite(here) & np.isfinite(earlier)))
        unit = _first_word(units, source)
        columns.append(_column(k + 1, str(name), unit, value, source[chosen], at, times.size, good))
    notes = [
        Caution(
            code="long-layout",
            level="note",
            text=f'Each row holds one reading; "{tags.name}" names {len(names)} signals '
            f"({', '.join(map(str, names[:4]))}), each kept at its own times.",
            value=float(len(names)),
        )
    ]
    if quality is not None:
        notes.extend(left_out(quality, good, rows))
    if repeated:
        notes.append(_repeats(repeated, conflicts))
    new_lines = tuple(lines[int(rows[i])] for i in first)
    return tuple(columns), replace(clock, t=times, taken=frozenset()), new_lines, notes


def _is_tags(field: Field) -> bool:
    if field.text is None or field.values is not None or is_quality(field):
        return False
    names = list(field.text.dropna().unique())
    if not 2 <= len(names) <= _MOST_TAGS or field.text.isna().mean() > 0.01:
        return False
    if set(words_of(field.name)) & _TAG_WORDS:
        return True
    roles = {read_name(str(n), split_unit(str(n))[1]).role for n in names[:50]}
    return {"pv", "co"} <= roles


def _named_value(field: Field) -> bool:
    return bool(set(words_of(field.name)) & _VALUE_WORDS)


def _first_word(text: pd.Series | None, rows: NDArray[np.intp]) -> str | None:
    found = None if text is None else text.iloc[rows].dropna()
    return None if found is None or found.empty else str(found.iloc[0])


def _column(
    index: int,
    name: str,
    unit: str | None,
    value: Field,
    source: NDArray[np.intp],
    at: NDArray[np.intp],
    size: int,
    good: NDArray[np.bool_] | None,
) -> Field:
    values = np.full(size, np.nan)
    cells = value.text.iloc[source].reset_index(drop=True) if value.text is not None else None
    if value.values is not None:
        here = value.values[source]
        values[at] = here if good is None else np.where(good[source], here, np.nan)
    elif cells is not None:
        values[at] = pd.to_numeric(cells, errors="coerce").to_numpy(dtype=np.float64, na_value=np.nan)
    text: pd.Series | None = None
    words = (
        cells.notna().to_numpy(dtype=bool) & np.isnan(values[at]) if cells is not None else np.zeros(0, bool)
    )
    if cells is not None and 2 * int(words.sum()) > int(cells.notna().sum()):
        text = pd.Series(pd.NA, index=range(size), dtype="string")
        text.iloc[at] = cells.to_numpy()
    values.setflags(write=False)
    return Field(
        index=index,
        name=name,
        unit=split_unit(name)[1] or unit,
        values=None if text is not None else values,
        text=text,
        missing=int(np.isnan(values).sum()),
        first_bad=None,
        guesses=value.guesses,
    )


def _repeats(repeated: int, conflicts: int) -> Caution:
    if conflicts:
        return Caution(
            code="duplicates-conflict",
            level="care",
            text=f"{conflicts} readings have the tag and time of an earlier one and another value; the "
            "earlier one was kept. Export each tag from one source.",
            value=float(conflicts),
        )
    return Caution(
        code="duplicates-merged",
        level="note",
        text=f"{repeated} {'reading repeats' if repeated == 1 else 'readings repeat'} an earlier one; merged.",
        value=float(repeated),
    )
