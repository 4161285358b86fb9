"""Lines to a layout: delimiter, decimal mark, header, unit row, and which lines hold data."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from pipeline.errors import LogUnreadable, QuestionForUser
from pipeline.findings import Caution
from pipeline.intake.cells import decimal_mark, is_missing, is_number, is_stamp
from pipeline.intake.header import CELLS_LOOKED_AT, COMMENT, data_share, read_header, split_cells

#: Letters of a bad cell that a message shows.
_SHOWN = 20
#: Delimiters in order of preference: a blank also stands inside dates and names, a comma inside numbers.
_DELIMITERS = ("\t", ";", ",", "|", " ")
#: Share of the rows that may have another number of fields and be set aside [1].
_STRAY_SHARE = 0.01
#: Share of numbers and times in a line from which it holds data [1], less where most lines have less.
_MOSTLY = 0.51
#: Fields a row may have [1]: whole plants are logged in fewer columns.
_MOST_FIELDS = 20_000
#: Lines looked at to decide on the layout: enough to outvote preambles and footers.
_SAMPLE_LINES = 60


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


def find_layout(lines: Sequence[str], *, file: str, decimal: str | None = None) -> Layout:
    """Work out how a log is written.

    Parameters
    ----------
    lines : sequence of str
        Lines of the file, without their ends.
    file : str
        Name for messages.
    decimal : str or None
        Decimal mark, "." or ",", where the user says it.

    Returns
    -------
    Layout

    Raises
    ------
    LogUnreadable
        If there are no rows of numbers, only one column, or rows of many widths.
    QuestionForUser
        If a comma may be a decimal or a thousands mark.
    """
    filled = [i for i, line in enumerate(lines) if line.strip()]
    plain = [i for i in filled if not lines[i].lstrip().startswith(COMMENT)]
    tail = plain[len(plain) // 4 :]
    sample = [lines[i] for i in tail[:: max(1, len(tail) // _SAMPLE_LINES)]]
    delimiter, width = _find_delimiter(sample, lines, filled, file)
    if width > _MOST_FIELDS:
        raise LogUnreadable(
            f"The rows hold {width} fields, more than any log has columns.",
            file=file,
            remedy="Export the log with a line for each sample: time, PV, CO.",
        )
    first = _first_data(lines, plain, delimiter, width, sample)
    if first is None:
        raise _no_numbers(lines, filled, file)
    header = read_header(lines, [i for i in filled if i < first], delimiter, width)
    body, skipped = _body(lines, [i for i in plain if i >= first], delimiter, width, header.lines, file)
    sampled = [lines[i] for i in body[:: max(1, len(body) // _SAMPLE_LINES)]]
    mark, comma_note = _decimal(sampled, delimiter, decimal, file)
    return Layout(
        delimiter=delimiter,
        decimal=mark,
        width=width,
        names=header.names,
        units=header.units,
        headed=header.headed,
        body=tuple(i + 1 for i in body),
        notes=(*header.notes, *skipped, *comma_note),
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
        cells = [c for row in rows if len(row) == width for c in row[:CELLS_LOOKED_AT] if not is_missing(c)]
        if width < 2 or not cells:
            continue
        good = sum(is_number(c) or is_stamp(c) for c in cells) / len(cells)
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
            if lines[i].count(delimiter) and not is_number(cell) and not is_stamp(cell):
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


def _first_data(
    lines: Sequence[str], plain: Sequence[int], delimiter: str, width: int, sample: Sequence[str]
) -> int | None:
    """Find the first line that, like the lines after it, holds as many numbers as most lines do."""
    usual = float(np.median([data_share(split_cells(line, delimiter)) for line in sample]))
    # a reading a row, in words now and then: its time alone must do
    least = _MOSTLY if usual > _MOSTLY else 0.5 * usual
    ahead = 3  # rows after it that must agree: a row of ranges above the header has fewer
    verdicts: dict[int, bool] = {}

    def fits(k: int) -> bool:
        if k not in verdicts:
            cells = split_cells(lines[plain[k]], delimiter)
            verdicts[k] = abs(len(cells) - width) <= 1 and data_share(cells) >= least
        return verdicts[k]

    for k in range(len(plain)):
        if fits(k) and all(fits(j) for j in range(k + 1, min(k + 1 + ahead, len(plain)))):
            return plain[k]
    return None


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
    header: frozenset[str],
    file: str,
) -> tuple[list[int], list[Caution]]:
    """Keep the data rows; set aside repeated headers and a few stray lines, counted."""
    count = _counter(delimiter)
    body: list[int] = []
    stray: list[int] = []
    repeated = 0
    for i in candidates:
        fields = count(lines[i])
        if lines[i].strip() in header:
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


def _decimal(sample: Sequence[str], delimiter: str, said: str | None, file: str) -> tuple[str, list[Caution]]:
    rows = [split_cells(line, delimiter) for line in sample]
    columns = [[row[k] for row in rows if k < len(row)] for k in range(max(map(len, rows), default=0))]
    mark = said or decimal_mark(columns)
    shown = next((c for cells in columns for c in cells if is_number(c) and "," in c), "")
    if mark is None:
        raise QuestionForUser(
            f'"{shown}" may be {shown.replace(",", ".")} or {shown.replace(",", "")}.',
            file=file,
            remedy='Say which in the loop sheet: [file] decimal = "," where the comma is the decimal mark, '
            '[file] decimal = "." where it parts the thousands.',
        )
    if mark == "." or not shown:
        return mark, []
    return mark, [
        Caution(
            code="decimal-comma",
            level="note",
            text=f"Decimal commas: {shown} was read as {shown.replace('.', '').replace(',', '.')}.",
        )
    ]
