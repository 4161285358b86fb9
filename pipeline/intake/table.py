"""The body of a log to columns of numbers and text; nothing is guessed and nothing is filled in."""

from __future__ import annotations

import csv
import io
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from pipeline.errors import LogUnreadable
from pipeline.intake.cells import MISSING, to_numbers
from pipeline.intake.layout import Layout

if TYPE_CHECKING:
    from numpy.typing import NDArray

#: Magnitude above which a number is a marker for "no value", not a reading [any unit].
#: Loggers fill with the largest number they have (1e38, 1e308); no process unit needs 1e30.
_ABSURD = 1e30
#: Round numbers that loggers write for "no value", by size [any unit]: fillers of 3 to 5 digits (common
#: practice) and the ends of a 16-bit register.
_SENTINELS = (999.0, 999.9, 999.99, 9999.0, 9999.9, 99999.0, 999999.0, 32767.0, 32768.0, 65535.0)
#: Such a number is "no value" this many ranges away from all readings, on fewer rows than this share [1].
_SENTINEL_FAR, _SENTINEL_SHARE = 3.0, 0.5

_TOKENS = sorted(
    {t for word in MISSING for t in (word, word.upper(), word.capitalize(), word.title())} | {"NaN"}
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Field:
    """One column of the file.

    Attributes
    ----------
    index : int
        Position in the file, from 1.
    name : str
    unit : str or None
    values : (n,) ndarray or None
        Numbers, NaN where there is none; None where the column is mostly text.
    text : pandas.Series or None
        The cells as text where some of them are not numbers.
    missing : int
        Cells without a usable number (blank, bad, infinite, absurd).
    first_bad : int or None
        Line of the first cell holding text that is no number and no known mark for a bad reading.
    guesses : tuple of str
        How cells were taken that are no plain numbers, a sentence each.
    """

    index: int
    name: str
    unit: str | None
    values: NDArray[np.float64] | None
    text: pd.Series | None
    missing: int
    first_bad: int | None
    guesses: tuple[str, ...] = ()

    @property
    def empty(self) -> bool:
        """No cell holds anything."""
        return self.text is None and self.values is not None and self.missing == self.values.size


def read_table(lines: Sequence[str], layout: Layout, *, file: str) -> tuple[Field, ...]:
    """Parse the data rows.

    Parameters
    ----------
    lines : sequence of str
        Lines of the file.
    layout : Layout
        What `find_layout` made of them.
    file : str
        Name for messages.

    Returns
    -------
    tuple of Field
        One a column, in file order.

    Raises
    ------
    LogUnreadable
        If the rows cannot be parsed.
    """
    frame = _parse(lines, layout, file)
    return tuple(_field(frame[k], k, layout) for k in range(layout.width))


def _parse(lines: Sequence[str], layout: Layout, file: str) -> pd.DataFrame:
    body = "\n".join([lines[n - 1] for n in layout.body])
    # a lone quotation mark would swallow line ends; then marks are taken as they stand
    for quoting in (csv.QUOTE_MINIMAL, csv.QUOTE_NONE):
        try:
            frame = pd.read_csv(
                io.StringIO(body),
                sep=r"\s+" if layout.delimiter == " " else layout.delimiter,
                header=None,
                names=list(range(layout.width)),
                usecols=list(range(layout.width)),
                index_col=False,
                decimal="." if layout.delimiter == "," else layout.decimal,
                skipinitialspace=True,
                skip_blank_lines=False,
                na_values=_TOKENS,
                keep_default_na=False,
                low_memory=False,
                quoting=quoting,
                engine="c",
            )
        except (ValueError, OverflowError, csv.Error):
            continue
        if len(frame) == len(layout.body):
            return frame
    raise LogUnreadable(
        "The rows cannot be taken apart into columns.",
        file=file,
        line=layout.body[0] if layout.body else 1,
        remedy="Export again as plain CSV without quotation marks.",
    )


def _field(series: pd.Series, k: int, layout: Layout) -> Field:
    text: pd.Series | None = None
    first_bad: int | None = None
    guesses: list[str] = []
    name, unit = layout.names[k], None
    values: NDArray[np.float64] | None
    if pd.api.types.is_numeric_dtype(series) and not pd.api.types.is_bool_dtype(series):
        values = series.to_numpy(dtype=np.float64, na_value=np.nan)
    else:
        text = series.astype("string").str.strip()
        text = text.mask(text.str.lower().isin(MISSING))
        numbers, unit, example = to_numbers(text, layout.decimal)
        written = text.notna().to_numpy(dtype=bool)
        bad = written & np.isnan(numbers)
        if np.any(bad):
            first_bad = layout.body[int(np.argmax(bad))]
        values = numbers if 2 * int(bad.sum()) < int(written.sum()) else None
        if values is not None and example is not None:
            guesses.append(f'In "{name}" the cell "{example[0]}" was read as {example[1]:.10g}.')
        if not np.any(written):
            values, text = np.full(len(series), np.nan), None
    missing = len(series)
    if values is not None:
        values = np.where(np.abs(values) <= _ABSURD, values, np.nan)
        values, sentinel = _without_sentinels(values)
        guesses.extend(f'In "{name}" {s}' for s in sentinel)
        values.setflags(write=False)
        missing = int(np.isnan(values).sum())
    return Field(
        index=k + 1,
        name=name,
        unit=layout.units[k] or unit,
        values=values,
        text=text,
        missing=missing,
        first_bad=first_bad,
        guesses=tuple(guesses),
    )


def _without_sentinels(values: NDArray[np.float64]) -> tuple[NDArray[np.float64], list[str]]:
    """Take out the round numbers loggers write for "no value", where they lie far from all readings."""
    said: list[str] = []
    known = values[np.isfinite(values)]
    if known.size == 0 or not (known.max() >= _SENTINELS[0] or known.min() <= -_SENTINELS[0]):
        return values, said
    for mark in (m for size in _SENTINELS for m in (size, -size)):
        at = values == mark
        count = int(np.count_nonzero(at))
        rest = values[np.isfinite(values) & ~at]
        if not count or count > _SENTINEL_SHARE * known.size or rest.size == 0:
            continue
        low, high = float(rest.min()), float(rest.max())
        if max(mark - high, low - mark) > _SENTINEL_FAR * max(high - low, 0.01 * abs(mark)):
            values = np.where(at, np.nan, values)
            cells = "cell holds" if count == 1 else "cells hold"
            said.append(f'{count} {cells} {mark:g}, taken as "no value".')
    return values, said
