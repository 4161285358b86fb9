"""Files that wrap a log: compressed, in an archive, in a workbook, in a column store."""

from __future__ import annotations

import io
import zipfile
import zlib
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from datetime import date, datetime, time, timedelta

from pipeline.errors import LogUnreadable, QuestionForUser, UsageError
from pipeline.findings import Caution

#: First bytes of the wrappings known here.
_GZIP, _ZIP, _OLD_WORKBOOK, _COLUMNS = b"\x1f\x8b", b"PK\x03\x04", b"\xd0\xcf\x11\xe0", b"PAR1"
#: Most bytes a compressed log may grow to [bytes]: ten million rows of four columns need about 500 MB.
_LARGEST = 1_000_000_000
#: Wrappings inside each other that are taken off: a compressed file in an archive, and its like.
_DEEPEST = 3
#: Share of the best sheet's rows from which another sheet is a rival [1].
_RIVAL = 0.5
#: Names that a question lists.
_LISTED = 8


@dataclass(frozen=True, slots=True, kw_only=True)
class Unwrapped:
    """What a file holds without its wrapping.

    Attributes
    ----------
    raw : bytes
        Bytes of a text log; empty where `lines` are given.
    lines : tuple of str or None
        Rows of a workbook or a column store, cells set apart by tabs.
    notes : tuple of Caution
    """

    raw: bytes
    lines: tuple[str, ...] | None
    notes: tuple[Caution, ...]


def unwrap(raw: bytes, *, part: str | None, file: str) -> Unwrapped:
    """Take off what a log is wrapped in.

    Parameters
    ----------
    raw : bytes
        The file.
    part : str or None
        Name of the file in an archive, or of the sheet in a workbook, as the user gives it.
    file : str
        Name for messages.

    Returns
    -------
    Unwrapped

    Raises
    ------
    LogUnreadable
        If the wrapping is damaged, holds no log, or needs a package that is not there.
    QuestionForUser
        If an archive holds several files.
    UsageError
        If there is no part of the name given.
    """
    notes: list[Caution] = []
    for _ in range(_DEEPEST):
        if raw.startswith(_GZIP):
            raw = _inflated(raw, file)
        elif raw.startswith(_COLUMNS):
            return Unwrapped(raw=b"", lines=_from_columns(raw, file), notes=tuple(notes))
        elif raw.startswith(_OLD_WORKBOOK) or (raw.startswith(_ZIP) and _is_workbook(raw, file)):
            lines, said = _from_workbook(raw, part, file)
            return Unwrapped(raw=b"", lines=lines, notes=(*notes, *said))
        elif raw.startswith(_ZIP):
            raw, note = _from_archive(raw, part, file)
            notes.append(note)
        else:
            break
    return Unwrapped(raw=raw, lines=None, notes=tuple(notes))


def _damaged(what: str, file: str) -> LogUnreadable:
    return LogUnreadable(
        f"This is not a text log: it is {what}, and it is damaged.",
        file=file,
        remedy="Copy or export the file again.",
    )


def _too_large(file: str) -> LogUnreadable:
    return LogUnreadable(
        f"The log is larger than {_LARGEST / 1e9:g} GB once it is unpacked.",
        file=file,
        remedy="Export the hour of the test only.",
    )


def _inflated(raw: bytes, file: str) -> bytes:
    parts: list[bytes] = []
    size = 0
    rest = raw
    try:
        while rest.startswith(_GZIP):  # some loggers append one compressed block after the other
            stream = zlib.decompressobj(wbits=31)
            piece = stream.decompress(rest, _LARGEST - size + 1)
            size += len(piece)
            if size > _LARGEST:
                raise _too_large(file)
            if not stream.eof:
                raise _damaged("a compressed file", file)
            parts.append(piece)
            rest = stream.unused_data
    except zlib.error:
        raise _damaged("a compressed file", file) from None
    return b"".join(parts)


def _members(raw: bytes, file: str) -> list[zipfile.ZipInfo]:
    try:
        with zipfile.ZipFile(io.BytesIO(raw)) as archive:
            found = archive.infolist()
    except (zipfile.BadZipFile, ValueError, NotImplementedError, OSError):
        raise _damaged("a spreadsheet workbook or a zip archive", file) from None
    return [m for m in found if not m.is_dir() and not m.filename.startswith(("__", "."))]


def _is_workbook(raw: bytes, file: str) -> bool:
    names = {m.filename for m in _members(raw, file)}
    return "[Content_Types].xml" in names or "mimetype" in names


def _from_archive(raw: bytes, part: str | None, file: str) -> tuple[bytes, Caution]:
    members = _members(raw, file)
    if not members:
        raise LogUnreadable("The archive is empty.", file=file, remedy="Copy or export the file again.")
    names = [m.filename for m in members]
    if part is not None:
        members = [m for m in members if part in (m.filename, m.filename.rsplit("/", 1)[-1])]
        if not members:
            raise _no_such_part(part, names, file)
    if len(members) > 1:
        raise QuestionForUser(
            f"The archive holds {len(members)} files: {', '.join(names[:_LISTED])}.",
            file=file,
            remedy=f'Say which in the loop sheet: [file] part = "{names[0]}".',
        )
    if members[0].file_size > _LARGEST:
        raise _too_large(file)
    try:
        with zipfile.ZipFile(io.BytesIO(raw)) as archive:
            inside = archive.read(members[0])
    except RuntimeError:
        raise LogUnreadable(
            "The archive is locked with a password.", file=file, remedy="Unpack it and read the log itself."
        ) from None
    except (zipfile.BadZipFile, zlib.error, ValueError, NotImplementedError, EOFError, OSError):
        raise _damaged("a zip archive", file) from None
    return inside, Caution(
        code="archive", level="note", text=f'The log was read from "{members[0].filename}" in the archive.'
    )


def _no_such_part(part: str, names: Sequence[str], file: str) -> UsageError:
    return UsageError(
        f'[file] part = "{part}", but the file holds no such part.',
        file=file,
        remedy=f"It holds: {', '.join(names[:_LISTED])}.",
    )


def _from_workbook(raw: bytes, part: str | None, file: str) -> tuple[tuple[str, ...], list[Caution]]:
    from python_calamine import CalamineError, CalamineWorkbook, SheetTypeEnum  # only workbooks pay for it

    try:
        book = CalamineWorkbook.from_filelike(io.BytesIO(raw))
        names = [s.name for s in book.sheets_metadata if s.typ == SheetTypeEnum.WorkSheet]
        wanted = [name for name in names if part in (None, name)]
        sheets = {name: book.get_sheet_by_name(name).to_python(skip_empty_area=False) for name in wanted}
    except (CalamineError, ValueError, OSError, KeyError):
        raise _damaged("a spreadsheet workbook", file) from None
    if part is not None and not sheets:
        raise _no_such_part(part, names, file)
    counts = {name: sum(_has_numbers(row) for row in rows) for name, rows in sheets.items()}
    if not counts or max(counts.values()) == 0:
        raise LogUnreadable(
            "No sheet of the workbook holds rows of numbers.",
            file=file,
            remedy="Export the log with one row per sample: time, PV, CO.",
        )
    best = max(counts, key=lambda name: counts[name])
    lines = tuple("\t".join(_cell(value) for value in row) for row in sheets[best])
    if len(names) == 1 or part is not None:
        return lines, []
    rival = any(n >= _RIVAL * counts[best] for name, n in counts.items() if name != best)
    return lines, [
        Caution(
            code="sheet-guessed",
            level="care" if rival else "note",
            text=f'The workbook has {len(names)} sheets ({", ".join(names[:_LISTED])}); "{best}" holds the '
            "most rows of numbers and was read. [file] part names another one.",
            value=float(len(names)),
        )
    ]


def _has_numbers(row: Sequence[object]) -> bool:
    return sum(isinstance(v, (int, float)) and not isinstance(v, bool) for v in row) >= 2 or any(
        isinstance(v, (datetime, time, timedelta)) for v in row
    )


def _elapsed(span: timedelta) -> str:
    minutes = span // timedelta(minutes=1)
    return f"{minutes // 60}:{minutes % 60:02d}:{span.total_seconds() % 60.0:09.6f}"


_WRITTEN: tuple[tuple[type, Callable[..., str]], ...] = (
    (datetime, lambda v: v.isoformat(" ")),
    (date, lambda v: v.isoformat()),
    (time, lambda v: v.isoformat()),
    (
        timedelta,
        lambda v: (
            f"{v // timedelta(hours=1)}:{v // timedelta(minutes=1) % 60:02d}:{v.total_seconds() % 60.0:09.6f}"
        ),
    ),
    (bool, lambda v: "1" if v else "0"),
    (float, lambda v: repr(v)[:-2] if v.is_integer() and abs(v) < 1e15 else repr(v)),
)


def _cell(value: object) -> str:
    """Write a cell the way a text export would."""
    for kind, write in _WRITTEN:
        if isinstance(value, kind):
            return write(value)
    return " ".join(str(value).split()) if value is not None else ""


def _from_columns(raw: bytes, file: str) -> tuple[str, ...]:
    import pandas as pd

    try:
        frame = pd.read_parquet(io.BytesIO(raw))
    except ImportError:
        raise LogUnreadable(
            "This is a Parquet file, and the package that reads it is not installed.",
            file=file,
            remedy="Install it with the extra named parquet, or export the log as CSV.",
        ) from None
    except (ValueError, OSError, KeyError):
        raise _damaged("a Parquet file", file) from None
    if frame.index.name is not None or frame.index.nlevels > 1:
        frame = frame.reset_index()
    text = frame.to_csv(sep="\t", index=False, lineterminator="\n")
    return tuple(text.rstrip("\n").split("\n"))
