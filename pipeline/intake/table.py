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
from pipeline.intake.layout import MISSING, Layout

if TYPE_CHECKING:
    from numpy.typing import NDArray

#: Magnitude above which a number is a marker for "no value", not a reading [any unit].
#: Loggers fill with the largest number they have (1e38, 1e308); no process unit needs 1e30.
_ABSURD = 1e30

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
    """

    index: int
    name: str
    unit: str | None
    values: NDArray[np.float64] | None
    text: pd.Series | None
    missing: int
    first_bad: int | None

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
                decimal=layout.decimal,
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
    values: NDArray[np.float64] | None
    if pd.api.types.is_numeric_dtype(series) and not pd.api.types.is_bool_dtype(series):
        values = series.to_numpy(dtype=np.float64, na_value=np.nan)
    else:
        text = series.astype("string").str.strip()
        text = text.mask(text.str.lower().isin(MISSING))
        cells = text.str.replace(",", ".", regex=False) if layout.decimal == "," else text
        numbers = pd.to_numeric(cells, errors="coerce").to_numpy(dtype=np.float64, na_value=np.nan)
        written = text.notna().to_numpy(dtype=bool)
        bad = written & np.isnan(numbers)
        if np.any(bad):
            first_bad = layout.body[int(np.argmax(bad))]
        values = numbers if 2 * int(bad.sum()) < int(written.sum()) else None
        if not np.any(written):
            values, text = np.full(len(series), np.nan), None
    missing = len(series)
    if values is not None:
        values = np.where(np.abs(values) <= _ABSURD, values, np.nan)
        values.setflags(write=False)
        missing = int(np.isnan(values).sum())
    return Field(
        index=k + 1,
        name=layout.names[k],
        unit=layout.units[k],
        values=values,
        text=text,
        missing=missing,
        first_bad=first_bad,
    )
