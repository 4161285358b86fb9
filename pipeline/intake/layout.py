"""Lines to a layout: delimiter, decimal mark, header, unit row, and which lines hold data."""

from __future__ import annotations

import csv
import re
from collections import Counter
from collections.abc import Callable, Sequence
from dataclasses import dataclass

from pipeline.errors import LogUnreadable
from pipeline.findings import Caution
from pipeline.intake.names import is_unit, split_unit

_MARKS = """- -- --- * ? nan na n/a null none nil bad invalid error err fault timeout inf -inf +inf infinity
+infinity -infinity 1.#j 1.#inf -1.#inf 1.#ind -1.#ind 1.#qnan #n/a #value! #num! #div/0! overflow over under
shutdown"""
_MARKS = (
    "-|--|---|*|?|nan|na|n/a|null|none|nil|bad|bad input|bad quality|no data|invalid|error|err|fault|timeout"
    "|i/o timeout|inf|-inf|+inf|infinity|-infinity|1.#j|1.#inf|-1.#inf|1.#ind|-1.#ind|1.#qnan|#n/a|#value!"
    "|#num!|#div/0!|overflow|over|under|shutdown|not connected"
)
#: Letters of a bad cell that a message shows.
_SHOWN = 20
#: Cells that stand for "no value": blanks and what loggers write for a bad reading.
MISSING = ("", *_MARKS.split("|"))

#: Delimiters in order of preference: a blank also stands inside dates and names, a comma inside numbers.
_DELIMITERS = ("\t", ";", ",", "|", " ")
#: Share of the rows that may have another number of fields and be set aside [1].
_STRAY_SHARE = 0.01
#: Lines looked at to decide on the layout: enough to outvote preambles and footers.
_SAMPLE_LINES = 60

_NUMBER = re.compile(r"[-+]?(\d+([.,]\d*)?|[.,]\d+)([eE][-+]?\d+)?\s*%?$")
_STAMP = re.compile(
    r"(\d{1,4}[-/.]\d{1,2}[-/.]\d{1,4}([ T]+\d.*)?|\d{1,3}:\d{2}(:\d{2})?([.,]\d+)?(\s*[AaPp]\.?[Mm]\.?)?)$"
)
_COMMENT = ("#", "%", "//", "!")


@dataclass(frozen=True, slots=True, kw_only=True)
class Layout:
    """How the lines of a log are to be taken apart.

    Attributes
    ----------
    delimiter : str
        One character; " " means any run of blanks.
    decimal : {".", ","}
    width : int
        Fields in a data row.
    names : tuple of str
        Header text per column, "column 3" where there is none.
    units : tuple of (str or None)
        Unit per column as far as the header or a unit row says.
    headed : bool
        The names come from the file.
    body : tuple of int
        Line numbers (from 1) of the data rows.
    notes : tuple of Caution
    """

    delimiter: str
    decimal: str
    width: int
    names: tuple[str, ...]
    units: tuple[str | None, ...]
    headed: bool
    body: tuple[int, ...]
    notes: tuple[Caution, ...]


def is_number(cell: str) -> bool:
    """Tell whether a cell is written as a number, with point or comma."""
    return _NUMBER.match(cell) is not None


def split_cells(line: str, delimiter: str) -> list[str]:
    """Take a line apart, quotation marks respected, cells stripped.

    Parameters
    ----------
    line : str
    delimiter : str
    """
    if delimiter == " ":
        return line.split()
    if '"' in line:
        try:
            return [
                cell.strip() for cell in next(csv.reader([line], delimiter=delimiter, skipinitialspace=True))
            ]
        except (csv.Error, StopIteration):
            pass
    return [cell.strip() for cell in line.split(delimiter)]


def _holds_data(cells: Sequence[str]) -> bool:
    full = [cell for cell in cells if cell.lower() not in MISSING]
    good = sum(is_number(cell) or _STAMP.match(cell) is not None for cell in full)
    return bool(full) and good > 0.5 * len(full)


def find_layout(lines: Sequence[str], *, file: str) -> Layout:
    """Work out how a log is written.

    Parameters
    ----------
    lines : sequence of str
        Lines of the file, without their ends.
    file : str
        Name for messages.

    Returns
    -------
    Layout

    Raises
    ------
    LogUnreadable
        If there are no rows of numbers, only one column, or rows of many widths.
    """
    filled = [i for i, line in enumerate(lines) if line.strip()]
    plain = [i for i in filled if not lines[i].lstrip().startswith(_COMMENT)]
    tail = plain[len(plain) // 4 :]
    sample = [lines[i] for i in tail[:: max(1, len(tail) // _SAMPLE_LINES)]]
    delimiter, width = _find_delimiter(sample, lines, filled, file)
    first = _first_data(lines, plain, delimiter, width)
    if first is None:
        raise _no_numbers(lines, filled, file)
    names, units, headed, header_at, notes = _header(
        lines, [i for i in filled if i < first], delimiter, width
    )
    body, skipped = _body(lines, [i for i in plain if i >= first], delimiter, width, header_at, file)
    decimal, comma_note = _decimal([lines[i] for i in body[:: max(1, len(body) // _SAMPLE_LINES)]], delimiter)
    return Layout(
        delimiter=delimiter,
        decimal=decimal,
        width=width,
        names=names,
        units=units,
        headed=headed,
        body=tuple(i + 1 for i in body),
        notes=(*notes, *skipped, *comma_note),
    )


def _find_delimiter(
    sample: Sequence[str], lines: Sequence[str], filled: Sequence[int], file: str
) -> tuple[str, int]:
    best, best_score, best_width = "", 0.0, 0
    for delimiter in _DELIMITERS:
        rows = [split_cells(line, delimiter) for line in sample]
        widths = Counter(len(row) for row in rows)
        if not widths:
            continue
        width, votes = widths.most_common(1)[0]
        cells = [c for row in rows if len(row) == width for c in row if c.lower() not in MISSING]
        if width < 2 or not cells:
            continue
        good = sum(is_number(c) or _STAMP.match(c) is not None for c in cells) / len(cells)
        score = votes / len(rows) * good
        # a later delimiter must be clearly better: every blank-separated date would be
        if score > best_score + 0.05:
            best, best_score, best_width = delimiter, score, width
    if best_score < 0.3:
        raise _no_numbers(lines, filled, file)
    return best, best_width


def _no_numbers(lines: Sequence[str], filled: Sequence[int], file: str) -> LogUnreadable:
    one_column = filled and all(is_number(lines[i].strip()) for i in filled[1:]) and len(filled) > 1
    if one_column:
        return LogUnreadable(
            "The file holds one column of numbers only.",
            file=file,
            line=filled[0] + 1,
            remedy="A log needs at least a PV and a CO column: export both on one clock.",
        )
    for i in filled[1:2]:  # the first line below the names, cell by cell
        delimiter = max(",;\t", key=lines[i].count)
        for place, cell in enumerate(split_cells(lines[i], delimiter), start=1):
            if lines[i].count(delimiter) and not is_number(cell) and _STAMP.match(cell) is None:
                return LogUnreadable(
                    f'The file holds no rows of numbers: "{cell[:_SHOWN]}" stands where one should be.',
                    file=file,
                    line=i + 1,
                    column=place,
                    remedy="Export the log as text with one row per sample: time, PV, CO.",
                )
    return LogUnreadable(
        "The file holds no rows of numbers in columns.",
        file=file,
        line=filled[0] + 1 if filled else 1,
        remedy="Export the log as text with one row per sample: time, PV, CO.",
    )


def _first_data(lines: Sequence[str], plain: Sequence[int], delimiter: str, width: int) -> int | None:
    """Find the first line that, like the lines after it, holds mostly numbers."""
    ahead = 3  # rows after it that must agree: a row of ranges above the header has fewer
    verdicts: dict[int, bool] = {}

    def fits(k: int) -> bool:
        if k not in verdicts:
            cells = split_cells(lines[plain[k]], delimiter)
            verdicts[k] = abs(len(cells) - width) <= 1 and _holds_data(cells)
        return verdicts[k]

    for k in range(len(plain)):
        if fits(k) and all(fits(j) for j in range(k + 1, min(k + 1 + ahead, len(plain)))):
            return plain[k]
    return None


def _header_cells(line: str, delimiter: str, width: int) -> list[str]:
    text = line.strip().lstrip("\ufeff")
    for mark in _COMMENT:
        if text.startswith(mark):
            text = text.lstrip(mark[0]).strip()
    if delimiter != " ":
        return split_cells(text, delimiter)
    # names may hold single blanks where columns are set apart by several
    for pattern in (r"\s{2,}|\t", r"\s+", r"\s*[,;]\s*"):
        cells = [cell for cell in re.split(pattern, text) if cell]
        if len(cells) == width:
            return cells
    return []


def _header(
    lines: Sequence[str], above: Sequence[int], delimiter: str, width: int
) -> tuple[tuple[str, ...], tuple[str | None, ...], bool, int | None, list[Caution]]:
    """Read the header from the lines above the data, nearest first."""
    notes: list[Caution] = []
    rows = [(i, _header_cells(lines[i], delimiter, width)) for i in reversed(above[-3:])]
    unit_row: list[str] = []
    if len(rows) > 1 and len(rows[0][1]) >= 2 and len(rows[1][1]) >= 2:
        filled = [cell for cell in rows[0][1] if cell]
        if filled and all(is_unit(cell) for cell in filled):
            unit_row, rows = rows[0][1], rows[1:]
    cells: list[str] = []
    header_at = None
    if rows and len(rows[0][1]) >= 2 and not _holds_data(rows[0][1]):
        header_at, cells = rows[0]
    count = sum(1 for i in above if header_at is None or i < header_at)
    if count:
        notes.append(
            Caution(
                code="preamble",
                level="note",
                text=f"{count} {'line' if count == 1 else 'lines'} above the table skipped.",
                value=float(count),
            )
        )
    if len([c for c in cells if c]) > width:
        notes.append(
            Caution(
                code="header-longer",
                level="note",
                text=f"The header names {len(cells)} columns and the rows hold {width}; the first "
                f"{width} names were used.",
                value=float(len(cells)),
                limit=float(width),
            )
        )
    names: list[str] = []
    units: list[str | None] = []
    for k in range(width):
        name = cells[k] if k < len(cells) and cells[k] else f"column {k + 1}"
        given = unit_row[k].strip("[]() ") if k < len(unit_row) and unit_row[k].strip("[]() -") else None
        names.append(name)
        units.append(given or split_unit(name)[1])
    return tuple(names), tuple(units), bool(cells), header_at, notes


def _counter(delimiter: str) -> Callable[[str], int]:
    def count(line: str) -> int:
        if delimiter == " " or '"' in line:
            return len(split_cells(line, delimiter))
        return line.count(delimiter) + 1

    return count


def _body(
    lines: Sequence[str],
    candidates: Sequence[int],
    delimiter: str,
    width: int,
    header_at: int | None,
    file: str,
) -> tuple[list[int], list[Caution]]:
    """Keep the data rows; set aside repeated headers and a few stray lines, counted."""
    count = _counter(delimiter)
    header = lines[header_at].strip() if header_at is not None else None
    body: list[int] = []
    stray: list[int] = []
    repeated = 0
    for i in candidates:
        fields = count(lines[i])
        if header is not None and lines[i].strip() == header:
            repeated += 1
        elif fields == width or (fields > width and not any(split_cells(lines[i], delimiter)[width:])):
            body.append(i)
        else:
            stray.append(i)
    notes: list[Caution] = []
    if stray:
        where = stray[0]
        found = count(lines[where])
        # the last line is often cut off when the logger is stopped
        if len(stray) > max(2, _STRAY_SHARE * len(candidates)):
            raise LogUnreadable(
                f"The row has {found} fields where the others have {width}; {len(stray)} rows are like it.",
                file=file,
                line=where + 1,
                remedy="Export again with one delimiter that does not occur inside the numbers.",
            )
        notes.append(
            Caution(
                code="stray-lines",
                level="care",
                text=f"{len(stray)} {'line' if len(stray) == 1 else 'lines'} with other than {width} fields "
                f"left out, the first at line {where + 1}.",
                value=float(len(stray)),
            )
        )
    if repeated:
        notes.append(
            Caution(
                code="repeated-header",
                level="note",
                text=f"The header is repeated {repeated} times inside the table; those lines were skipped.",
                value=float(repeated),
            )
        )
    return body, notes


def _decimal(sample: Sequence[str], delimiter: str) -> tuple[str, list[Caution]]:
    if delimiter == ",":
        return ".", []
    numbers = [c for line in sample for c in split_cells(line, delimiter) if is_number(c)]
    commas = [c for c in numbers if "," in c]
    if not commas or any("." in c for c in numbers):
        return ".", []
    shown = commas[0]
    return ",", [
        Caution(
            code="decimal-comma",
            level="note",
            text=f"Decimal commas: {shown} was read as {shown.replace(',', '.')}.",
        )
    ]
