"""A record as a file: equal content gives equal bytes, and a file is whole or absent."""

from __future__ import annotations

import json
import math
import os
import tempfile
from collections.abc import Mapping, Sequence
from difflib import get_close_matches
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from pipeline.errors import UsageError
from pipeline.record.fields import Part
from pipeline.record.schema import RECORD_VERSION, Record

#: Digits kept of every number: beyond what any log supports, below where machines differ.
SIGNIFICANT_DIGITS = 12

#: Rows of the log kept for the figures: more than a page's width has dots to show them.
SERIES_ROWS = 1500

#: Points kept of a predicted response, a smooth curve.
RESPONSE_POINTS = 400


def thinned_rows(co: Sequence[float], pv: Sequence[float], *, limit: int = SERIES_ROWS) -> list[int]:
    """Choose the rows of a log that a figure needs.

    Parameters
    ----------
    co, pv : sequence of n float
        Controller output and measured value, row by row; NaN allowed in `pv`.
    limit : int
        Most rows to keep, 8 or more.

    Returns
    -------
    list of int
        Rising row numbers, first and last row included: the lowest and the highest PV of
        each of many equal stretches, so no spike is lost, and the rows either side of a CO move.
    """
    n = len(pv)
    if n <= limit:
        return list(range(n))
    keep = {0, n - 1}
    moves = [i for i in range(1, n) if co[i] != co[i - 1]]
    if 2 * len(moves) <= limit // 2:
        keep.update(i + k for i in moves for k in (-1, 0))
    stretches = max((limit - len(keep)) // 2, 1)
    for j in range(stretches):
        rows = [i for i in range(j * n // stretches, (j + 1) * n // stretches) if math.isfinite(pv[i])]
        if rows:
            keep.add(min(rows, key=pv.__getitem__))
            keep.add(max(rows, key=pv.__getitem__))
    return sorted(keep)


def to_json(record: Record) -> str:
    """Write a record as text: fixed key order, 12 significant digits, no NaN.

    Returns
    -------
    str
        JSON indented by two spaces, each list of plain values on one line, ending in a newline.
    """
    return _written(record.model_dump(mode="python", by_alias=True), "") + "\n"


def _written(value: Any, indent: str) -> str:
    inner = indent + "  "
    if isinstance(value, Mapping):
        if not value:
            return "{}"
        rows = [
            f"{inner}{json.dumps(str(k), ensure_ascii=False)}: {_written(v, inner)}" for k, v in value.items()
        ]
        return "{\n" + ",\n".join(rows) + f"\n{indent}}}"
    if isinstance(value, (list, tuple)):
        if not any(isinstance(v, (Mapping, list, tuple)) for v in value):
            return "[" + ", ".join(_scalar(v) for v in value) + "]"
        return "[\n" + ",\n".join(inner + _written(v, inner) for v in value) + f"\n{indent}]"
    return _scalar(value)


def _scalar(value: Any) -> str:
    if isinstance(value, float):
        if math.isinf(value):
            return '"inf"' if value > 0 else '"-inf"'
        rounded = float(f"{value:.{SIGNIFICANT_DIGITS}g}")
        return repr(rounded + 0.0)  # adding zero turns -0.0 into 0.0
    return json.dumps(value, ensure_ascii=False, allow_nan=False)


def write_record(record: Record, path: Path) -> None:
    """Write a record so that the file is there whole or not at all.

    Parameters
    ----------
    record : Record
    path : Path
    """
    write_whole(to_json(record).encode(), path)


def write_whole(content: bytes, path: Path) -> None:
    """Put bytes into a file by way of a temporary one in the same folder.

    Parameters
    ----------
    content : bytes
    path : Path
        File to write or replace; its folder is made if need be.

    Raises
    ------
    UsageError
        If the folder cannot be written to.
    """
    temporary: str | None = None
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        handle, temporary = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}.")
        with os.fdopen(handle, "wb") as file:
            file.write(content)
        os.chmod(temporary, 0o644)  # mkstemp keeps others out; a report is for others
        os.replace(temporary, path)
    except OSError as error:
        if temporary is not None and os.path.exists(temporary):
            os.unlink(temporary)
        raise UsageError(
            f"Nothing could be written here: {error.strerror or error}.",
            file=str(path),
            remedy="Choose another folder with --out.",
        ) from error


def read_record(path: Path) -> Record:
    """Read a record back.

    Raises
    ------
    UsageError
        If the file is missing, is no JSON, has another version or does not hold the schema;
        the sentence names the first key at fault.
    """
    name = str(path)
    try:
        content = json.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise UsageError(f"The record cannot be opened: {error.strerror or error}.", file=name) from error
    except ValueError as error:
        raise UsageError(
            "This is not a record: the file is not JSON.",
            file=name,
            remedy="Give the .json file that firstgain tune wrote.",
        ) from error
    version = content.get("record_version") if isinstance(content, dict) else None
    if version is None:
        raise UsageError(
            "This is not a record: it holds no record_version.",
            file=name,
            remedy="Give the .json file that firstgain tune wrote.",
        )
    if version != RECORD_VERSION or isinstance(version, bool):
        raise UsageError(
            f"The record has version {version!r}, and this program reads version {RECORD_VERSION}.",
            file=name,
            remedy="Use the program version named in the record, or tune the log again.",
        )
    try:
        return Record.model_validate(content)
    except ValidationError as error:
        raise UsageError(
            _first_fault(error), file=name, remedy="The record was altered; tune the log again."
        ) from error


def _first_fault(error: ValidationError) -> str:
    fault = error.errors()[0]
    place = ".".join(str(part) for part in fault["loc"]) or "the record"
    if fault["type"] == "missing":
        return f"The key {place} is missing."
    if fault["type"] == "extra_forbidden":
        near = get_close_matches(str(fault["loc"][-1]), _known_keys(), n=1)
        return f"The key {place} is not part of a record{f' (did you mean {near[0]}?)' if near else ''}."
    message = fault["msg"].removeprefix("Value error, ")
    return f"The key {place} holds something else than a record does: {message[0].lower()}{message[1:]}."


def _known_keys() -> list[str]:
    parts = (part for part in Part.__subclasses__())
    return sorted({info.alias or name for part in parts for name, info in part.model_fields.items()})
