"""One cell at a time: is it a number, a time or a mark for "no value", and which number is it."""

from __future__ import annotations

import re
from collections.abc import Iterable
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from pipeline.intake.names import UNITS

if TYPE_CHECKING:
    from numpy.typing import NDArray

_MARKS = (
    "-|--|---|*|?|nan|na|n/a|null|none|nil|bad|bad input|bad quality|no data|invalid|error|err|fault|timeout"
    "|i/o timeout|inf|-inf|+inf|infinity|-infinity|1.#j|1.#inf|-1.#inf|1.#ind|-1.#ind|1.#qnan|#n/a|#value!"
    "|#num!|#div/0!|overflow|over|under|shutdown|not connected"
)
#: Cells that stand for "no value": blanks and what loggers write for a bad reading.
MISSING = ("", *_MARKS.split("|"))

#: Marks between groups of three digits that are never a decimal mark: blanks of all widths, apostrophes.
_GROUP = " \u00a0\u2009\u202f'\u2019"
_NUMBER = re.compile(
    rf"(?P<sign>[-+\u2212]?)\s?(?P<digits>\d{{1,3}}(?:[{_GROUP}]\d{{3}})+(?:[.,]\d*)?"
    r"|\d{1,3}(?:,\d{3})+\.\d*|\d{1,3}(?:\.\d{3})+,\d*|\d{1,3}(?:,\d{3}){2,}|\d{1,3}(?:\.\d{3}){2,}"
    r"|\d+(?:[.,]\d*)?|[.,]\d+)(?P<power>[eE][-+]?\d+)?\s*(?P<unit>[^\s\d.,;+\-][^;]{0,9})?$"
)
_THOUSANDS = {
    ",": re.compile(r"[-+\u2212]?[1-9]\d{0,2}(,\d{3})+(\.\d*)?$"),
    ".": re.compile(r"[-+\u2212]?[1-9]\d{0,2}(\.\d{3})+(,\d*)?$"),
}
_CLOCK = r"\d{1,3}:\d{2}(:\d{2})?([.,]\d+)?(\s*[AaPp]\.?\s?[Mm]\.?)?"
_STAMP = re.compile(
    rf"(\d{{1,4}}[-/.]\d{{1,2}}[-/.]\d{{1,4}}\.?([ T]+\d.*)?|{_CLOCK}|\d{{8}}[ T]\d{{4,6}}([.,]\d+)?Z?"
    r"|(\w{2,10},? )?\d{1,2}\.?[- /.]{1,2}[^\W\d_]{3,10}\.?[- /.,]{1,2}\d{2,4}([ T]+\d.*)?"
    r"|\d{4}[- /.][^\W\d_]{3,10}[- /.]\d{1,2}([ T]+\d.*)?|[^\W\d_]{3,10}\.? \d{1,2},? \d{4}([ T]+\d.*)?)$"
)


def is_missing(cell: str) -> bool:
    """Tell whether a cell stands for "no value"."""
    return cell.lower() in MISSING


def is_number(cell: str) -> bool:
    """Tell whether a cell is written as a number, with any decimal and thousands mark, with or without unit."""
    found = _NUMBER.match(cell)
    return found is not None and (found["unit"] is None or found["unit"].strip().lower() in UNITS)


def is_stamp(cell: str) -> bool:
    """Tell whether a cell is written as a date, a time of day or both."""
    return _STAMP.match(cell) is not None


def decimal_mark(columns: Iterable[Iterable[str]]) -> str | None:
    """Find the decimal mark of a file.

    Parameters
    ----------
    columns : iterable of iterable of str
        Some cells of each column.

    Returns
    -------
    str or None
        "." or ",", None where "1,234" may be 1.234 or 1234 and no other cell tells.
    """
    by_column = [[c for c in cells if is_number(c)] for cells in columns]
    numbers = [c for cells in by_column for c in cells]
    both = next((c for c in numbers if "," in c and "." in c), None)
    if both is not None:
        return "," if both.rfind(",") > both.rfind(".") else "."
    commas = [c for c in numbers if "," in c]
    points = [c for c in numbers if "." in c]
    if not commas or (points and not all(_THOUSANDS["."].match(c) for c in points)):
        return "."
    if points or not all(_THOUSANDS[","].match(c) for c in commas):
        return ","
    if any(c.count(",") > 1 for c in commas):
        return "."
    # thousands would leave a number below a thousand without a mark: three decimals everywhere are decimals
    return "," if len(commas) == len(numbers) else None


def to_numbers(
    text: pd.Series, decimal: str
) -> tuple[NDArray[np.float64], str | None, tuple[str, float] | None]:
    """Turn the cells of one column into numbers.

    Parameters
    ----------
    text : pandas.Series
        Cells, stripped; missing ones are NA.
    decimal : {".", ","}

    Returns
    -------
    values : (n,) ndarray
        NaN where a cell is no number, or has another unit than most.
    unit : str or None
        Unit written in the cells.
    example : (str, float) or None
        A cell with a thousands mark or a unit, and the number it was taken for.
    """
    thousands = "." if decimal == "," else ","
    grouped = _grouped(text, decimal, thousands)
    plain = text.str.replace(decimal, ".", regex=False) if decimal == "," else text
    values = pd.to_numeric(plain, errors="coerce").to_numpy(dtype=np.float64, na_value=np.nan)
    values = np.where(grouped, np.nan, values)
    odd = text.notna().to_numpy(dtype=bool) & np.isnan(values)
    if not np.any(odd):
        return values, None, None
    codes, distinct = pd.factorize(text[odd])
    read = [_read(str(cell), thousands) for cell in distinct]
    units = [unit for _, unit in read if unit is not None]
    unit = max(dict.fromkeys(units), key=units.count) if units else None
    numbers = np.array([v if u in (None, unit) else np.nan for v, u in read])
    values[odd] = numbers[codes]
    good = np.flatnonzero(np.isfinite(numbers))
    example = (str(distinct[good[0]]), float(numbers[good[0]])) if good.size else None
    return values, unit, example


def _grouped(text: pd.Series, decimal: str, thousands: str) -> NDArray[np.bool_]:
    """Find cells such as "1.234" in a column that also writes "1.234,5": the point is no decimal mark there."""
    if decimal == ".":
        return np.zeros(len(text), dtype=bool)
    marked = text.str.contains(thousands, regex=False, na=False)
    if not bool((marked & text.str.contains(decimal, regex=False, na=False)).any()):
        return np.zeros(len(text), dtype=bool)
    found = text.str.match(_THOUSANDS[thousands].pattern, na=False)
    return np.asarray(found.to_numpy(dtype=bool))


def _read(cell: str, thousands: str) -> tuple[float, str | None]:
    found = _NUMBER.match(cell)
    if found is None or not is_number(cell):
        return np.nan, None
    digits = re.sub(f"[{_GROUP}]", "", found["digits"])
    if thousands in digits:
        if not _THOUSANDS[thousands].match(digits):
            return np.nan, None
        digits = digits.replace(thousands, "")
    digits = digits.replace(",", ".")
    if digits.count(".") > 1:
        return np.nan, None
    sign = "-" if found["sign"] in ("-", "\u2212") else ""
    unit = found["unit"].strip() if found["unit"] else None
    return float(f"{sign}{digits}{found['power'] or ''}"), unit
