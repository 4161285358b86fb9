"""The lines above the data to one name and one unit a column, however many rows they are spread over."""

from __future__ import annotations

import csv
import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

from pipeline.findings import Caution
from pipeline.intake.cells import is_missing, is_number, is_stamp
from pipeline.intake.names import is_unit, split_unit

#: First characters of a line that is a comment.
COMMENT = ("#", "%", "//", "!")
#: Lines above the data that may belong to the header: tags, descriptions, units, ranges, names.
_HEADER_LINES = 12
#: What the first cell of a unit row and of a tag row may say.
_UNIT_LABELS = frozenset({"unit", "units", "uom", "eu", "einheit", "einheiten", "unidad", "unidades"})
_TAG_LABELS = frozenset(["tag", "tags", "tag name", "tagname", "point", "signal", "item", "channel", "name"])


@dataclass(frozen=True, slots=True, kw_only=True)
class Header:
    """What stands above the data.

    Attributes
    ----------
    names : tuple of str
        One a column, "column 3" where there is none.
    units : tuple of (str or None)
    headed : bool
        The names come from the file.
    lines : frozenset of str
        The header's own lines, stripped, to know them again further down.
    notes : tuple of Caution
    """

    names: tuple[str, ...]
    units: tuple[str | None, ...]
    headed: bool
    lines: frozenset[str]
    notes: tuple[Caution, ...]


#: Cells of a row from which its share of numbers is told [1]: more say no more.
CELLS_LOOKED_AT = 2000


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


def data_share(cells: Sequence[str]) -> float:
    """Give the share of the cells that hold anything which are numbers or times [1]."""
    full = [cell for cell in cells[:CELLS_LOOKED_AT] if not is_missing(cell)]
    return sum(is_number(cell) or is_stamp(cell) for cell in full) / len(full) if full else 0.0


def read_header(lines: Sequence[str], above: Sequence[int], delimiter: str, width: int) -> Header:
    """Read the header from the lines above the data, nearest first.

    Parameters
    ----------
    lines : sequence of str
    above : sequence of int
        Positions of the lines above the data that hold anything.
    delimiter : str
    width : int
        Fields in a data row.

    Returns
    -------
    Header
    """
    rows = [(i, _cells(lines[i], delimiter, width)) for i in reversed(above[-_HEADER_LINES:])]
    names: list[str] = []
    units: list[str] = []
    used: list[int] = []
    over: list[list[str]] = []
    for k, (i, cells) in enumerate(rows):
        if len(cells) < 2 or (names and len(cells) != width):
            break
        if not units and _says_units(cells) and any(len(later) >= 2 for _, later in rows[k + 1 : k + 2]):
            units = cells
        elif data_share(cells[1:] if names or cells[0] else cells) > 0.5:
            if not names and not _is_range(cells):
                break
        elif not names:
            names = cells
        else:
            over.append(cells)
        used.append(i)
    if not names:
        used = []
    notes: list[Caution] = []
    if names:
        names, kept = _joined(names, over, notes)
        used = used if kept else used[: len(used) - len(over)]
    notes.extend(_counted(sum(i not in used for i in above), len([n for n in names if n]), width, len(names)))
    full = [names[k] if k < len(names) and names[k] else f"column {k + 1}" for k in range(width)]
    return Header(
        names=tuple(full),
        units=tuple(_unit(units, k, full[k]) for k in range(width)),
        headed=bool(names),
        lines=frozenset(lines[i].strip() for i in used),
        notes=tuple(notes),
    )


def _cells(line: str, delimiter: str, width: int) -> list[str]:
    text = line.strip().lstrip("\ufeff") if delimiter != "\t" else line.strip(" \r\n\ufeff")
    for mark in COMMENT:
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


def _says_units(cells: Sequence[str]) -> bool:
    labelled = cells[0].strip(" :").lower() in _UNIT_LABELS
    filled = [cell for cell in (cells[1:] if labelled else cells) if cell]
    return bool(filled) and all(is_unit(cell) for cell in filled)


def _is_range(cells: Sequence[str]) -> bool:
    """Tell a row of range ends ("Low range,0,0,0") from a row of data: its first cell is a word."""
    return not is_number(cells[0]) and not is_stamp(cells[0]) and not is_missing(cells[0])


def _joined(names: list[str], over: Sequence[Sequence[str]], notes: list[Caution]) -> tuple[list[str], bool]:
    """Tell repeated names apart by the row above them that does it, a tag row before any other."""
    count = Counter(names)
    if all(count[n] == 1 for n in names if n) or not over:
        return names, False
    tags = next((row for row in over if row[0].strip(" :").lower() in _TAG_LABELS), None)
    for row in [tags] if tags is not None else over:
        spread = _spread(row)
        joined = [
            name
            if name and count[name] == 1
            else _with_group(name, group, max(count.values()) == len(names) - 1)
            for name, group in zip(names, spread, strict=True)
        ]
        if len({n for n in joined if n}) == len([n for n in joined if n]):
            notes.append(
                Caution(
                    code="header-rows",
                    level="note",
                    text=f"Column names were put together from two rows above the data: {', '.join(joined[:8])}.",
                )
            )
            return joined, True
    return names, False


def _with_group(name: str, group: str, alike: bool) -> str:
    # "Value" over every column says nothing beside the tag
    return group if alike or not name else f"{group} {name}".strip()


def _spread(row: Sequence[str]) -> list[str]:
    """Fill blanks from the left: a cell merged over several columns is exported in the first only."""
    filled: list[str] = []
    for cell in row:
        filled.append(cell or (filled[-1] if filled else ""))
    return filled


def _unit(units: Sequence[str], k: int, name: str) -> str | None:
    written = units[k].strip("[]() ") if k < len(units) else ""
    given = written if written.strip("-") and is_unit(written) else None
    return given or split_unit(name)[1]


def _counted(skipped: int, named: int, width: int, cells: int) -> list[Caution]:
    notes: list[Caution] = []
    if skipped:
        notes.append(
            Caution(
                code="preamble",
                level="note",
                text=f"{skipped} {'line' if skipped == 1 else 'lines'} above the table skipped.",
                value=float(skipped),
            )
        )
    if named > width:
        notes.append(
            Caution(
                code="header-longer",
                level="note",
                text=f"The header names {cells} columns and the rows hold {width}; the first "
                f"{width} names were used.",
                value=float(cells),
                limit=float(width),
            )
        )
    return notes
