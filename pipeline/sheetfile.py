"""Read a loop sheet from its file, and say in a sentence what is wrong with one."""

from __future__ import annotations

import difflib
import re
import tomllib
from pathlib import Path
from typing import Any

from pydantic import BaseModel, ValidationError

from pipeline.errors import UsageError
from pipeline.settings import LoopSheet


def load_sheet(path: str | Path) -> LoopSheet:
    """Read a loop sheet.

    Parameters
    ----------
    path : str or Path
        A TOML file, UTF-8.

    Returns
    -------
    LoopSheet
        The sheet, checked.

    Raises
    ------
    UsageError
        If the file is missing, is not TOML (with the line), or holds an unknown key, a
        value of the wrong kind or values that contradict each other.
    """
    path = Path(path)
    try:
        raw = path.read_bytes()
    except OSError as error:
        reason = "there is no such file" if not path.exists() else (error.strerror or "it cannot be opened")
        raise UsageError(
            f"The loop sheet cannot be read: {reason}.",
            file=str(path),
            remedy="Check the path given with --loop.",
        ) from None
    try:
        text = raw.decode("utf-8-sig").replace("\r\n", "\n")
    except UnicodeDecodeError as error:
        raise UsageError(
            "The loop sheet is not UTF-8 text.",
            file=path.name,
            line=raw[: error.start].count(b"\n") + 1,
            remedy="Save it as UTF-8.",
        ) from None
    try:
        tables = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise _bad_toml(error, text, path.name) from None
    try:
        return LoopSheet.model_validate(tables)
    except ValidationError as error:
        raise _explain(error, tables, text, path.name) from None


def _bad_toml(error: tomllib.TOMLDecodeError, text: str, file: str) -> UsageError:
    found = re.search(r"\(at line (\d+), column (\d+)\)", str(error))
    line = int(found[1]) if found else text.count("\n") + 1
    what = re.sub(r"\s*\(at [^)]*\)", "", str(error)).rstrip(".")
    return UsageError(
        f"The loop sheet is not valid TOML: {what}.",
        file=file,
        line=line,
        column=int(found[2]) if found else None,
        remedy='Text goes in quotation marks, like tag = "TIC-101"; a table starts with its [name].',
    )


def _line_of(text: str, place: tuple[str, ...]) -> int | None:
    """Find the line on which a key stands, None where it is written some other way."""
    table = ""
    for number, line in enumerate(text.split("\n"), start=1):
        heading = re.match(r"\s*\[\s*([\w.-]+)\s*\]", line)
        if heading:
            table = heading[1]
            if len(place) == 1 and table == place[0]:
                return number
        key = re.match(r"\s*\"?([\w-]+)\"?\s*=", line)
        if key and (*([table] if table else []), key[1]) == place:
            return number
    return None


def _explain(error: ValidationError, tables: dict[str, Any], text: str, file: str) -> UsageError:
    """Turn the first thing the check found into a sentence with its place."""
    details = error.errors(include_url=False)
    fault = next((d for d in details if d["type"] == "extra_forbidden"), details[0])
    # a union reports one fault a branch, each with the branch's name at the end of its place
    place = tuple(str(part) for part in fault["loc"][:2])
    dotted = f"[{place[0]}] {place[1]}" if len(place) > 1 else f"[{place[0]}]" if place else "the sheet"
    line = _line_of(text, place) if place else None
    if fault["type"] == "extra_forbidden":
        known = _known(place)
        near = difflib.get_close_matches(place[-1], known, n=1, cutoff=0.5)
        kind = "table" if len(place) == 1 and isinstance(tables.get(place[0]), dict) else "key"
        remedy = f'Did you mean "{near[0]}"?' if near else f"Known here: {', '.join(known)}."
        return UsageError(
            f'The loop sheet has an unknown {kind} "{place[-1]}" in {dotted.split(" ")[0]}.'
            if kind == "key" and len(place) > 1
            else f'The loop sheet has an unknown {kind} "{place[-1]}".',
            file=file,
            line=line,
            remedy=remedy,
        )
    if fault["type"] == "value_error":
        return UsageError(f"{dotted}: {fault['ctx']['error']}", file=file, line=line)
    if fault["type"] == "literal_error":
        given = str(fault["input"])
        options = [o.strip("' ") for o in re.split(r", | or ", fault["ctx"]["expected"])]
        near = difflib.get_close_matches(given, options, n=1, cutoff=0.5)
        hint = f' Did you mean "{near[0]}"?' if near else ""
        return UsageError(
            f'{dotted} cannot be "{given}".',
            file=file,
            line=line,
            remedy=f"It is one of {', '.join(options)}.{hint}",
        )
    what = fault["msg"].removeprefix("Input ")
    return UsageError(f"{dotted} = {fault['input']!r}: the value {what}.", file=file, line=line)


def _known(place: tuple[str, ...]) -> list[str]:
    if len(place) == 1:
        return list(LoopSheet.model_fields)
    table = LoopSheet.model_fields[place[0]].annotation
    assert isinstance(table, type) and issubclass(table, BaseModel)
    return list(table.model_fields)
