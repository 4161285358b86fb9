"""A column of quality words or codes: which readings of its neighbour are good."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from pipeline.findings import Caution
from pipeline.intake.names import words_of
from pipeline.intake.table import Field

if TYPE_CHECKING:
    from numpy.typing import NDArray

_NAMES = frozenset({"quality", "status", "qualität", "calidad", "qual", "flag", "state"})
_GOOD = frozenset({"good", "ok", "g", "valid", "normal", "gut", "uncertain", "questionable", "substituted"})
_BAD = frozenset(
    {"b", "not good", "comm fail", "bad quality", "out of service", "schlecht", "stale", "offline"}
)
#: Lowest code of good quality, and of uncertain quality, in 8-bit quality codes [1].
#: OPC Data Access 3.0 specification, quality flags: the two top bits 11 good, 01 uncertain, 00 bad (from memory).
_GOOD_CODE, _UNCERTAIN_CODE = 192.0, 64.0


def is_quality(field: Field) -> bool:
    """Tell whether a column holds the quality of readings and no readings."""
    named = bool(set(words_of(field.name)) & _NAMES)
    if field.values is None and field.text is not None:
        words = set(field.text.dropna().str.lower().unique())
        return bool(words) and words <= (_GOOD | _BAD)
    return named and field.values is not None


def good_rows(field: Field) -> NDArray[np.bool_] | None:
    """Tell which rows are good by a quality column.

    Parameters
    ----------
    field : Field
        A column for which `is_quality` holds.

    Returns
    -------
    (n,) bool ndarray or None
        Uncertain readings count as good; None where the codes are not known here.
    """
    if field.values is None:
        assert field.text is not None
        # words for bad readings were read as blanks already
        return np.asarray(field.text.str.lower().isin(_GOOD).to_numpy(dtype=bool))
    codes = field.values[np.isfinite(field.values)]
    if codes.size and codes.max() >= _GOOD_CODE and codes.max() < 256.0 and codes.min() >= 0.0:
        return np.asarray(field.values >= _UNCERTAIN_CODE)
    if codes.size and not np.any(codes):  # zero alone is "good" wherever zero means no fault
        return np.isfinite(field.values)
    return None


def left_out(quality: Field, good: NDArray[np.bool_] | None, rows: NDArray[np.intp]) -> list[Caution]:
    """Say how many readings a quality column takes away.

    Parameters
    ----------
    quality : Field
    good : (n,) bool ndarray or None
        As `good_rows` gave it.
    rows : int ndarray
        Rows that hold a reading.
    """
    if good is None:
        return [
            Caution(
                code="quality-codes",
                level="care",
                text=f'The codes of "{quality.name}" are not known here; no reading was left out for them.',
            )
        ]
    count = int(np.sum(~good[rows]))
    if not count:
        return []
    return [
        Caution(
            code="bad-quality",
            level="note",
            text=f'{count} {"reading is" if count == 1 else "readings are"} not good by "{quality.name}" and '
            f"{'was' if count == 1 else 'were'} left out.",
            value=float(count),
        )
    ]


def without_bad(fields: Sequence[Field]) -> tuple[tuple[Field, ...], list[Caution]]:
    """Leave out the readings that a quality column beside them calls bad.

    Parameters
    ----------
    fields : sequence of Field
        All columns, in file order.

    Returns
    -------
    fields : tuple of Field
        Bad readings are NaN.
    notes : list of Caution
    """
    flagged = [f for f in fields if is_quality(f)]
    kept = {f.index: f for f in fields}
    notes: list[Caution] = []
    for quality in flagged:
        good = good_rows(quality)
        mine = _vouched_for(quality, fields, len(flagged))
        if mine is None or mine.values is None:
            if good is not None and not np.all(good):
                notes.append(
                    Caution(
                        code="quality-of-what",
                        level="care",
                        text=f'"{quality.name}" is not good on {int(np.sum(~good))} rows, and whose quality it is '
                        "cannot be told; it was not used. Give each signal its own quality column.",
                        value=float(np.sum(~good)),
                    )
                )
            continue
        notes.extend(left_out(quality, good, np.flatnonzero(np.isfinite(mine.values))))
        if good is not None:
            values = np.where(good, mine.values, np.nan)
            kept[mine.index] = replace(mine, values=values, missing=int(np.isnan(values).sum()))
    return tuple(kept[f.index] for f in fields), notes


def _vouched_for(quality: Field, fields: Sequence[Field], count: int) -> Field | None:
    """Find the signal of a quality column: by its name, or the column before it where there are several."""
    signals = [f for f in fields if f.values is not None and not is_quality(f)]
    words = [w for w in words_of(quality.name) if w not in _NAMES]
    named = [f for f in signals if words and words_of(f.name)[: len(words)] == words]
    if len(named) == 1:
        return named[0]
    return next((f for f in signals if count > 1 and f.index == quality.index - 1), None)
