"""Bytes to text: which encoding, and whether it is text at all."""

from __future__ import annotations

import codecs
import hashlib
from dataclasses import dataclass
from pathlib import Path

from pipeline.errors import LogUnreadable
from pipeline.findings import Caution
from pipeline.intake.wrapped import unwrap

_MARKS: tuple[tuple[bytes, str], ...] = (
    (codecs.BOM_UTF8, "utf-8-sig"),
    (codecs.BOM_UTF32_LE, "utf-32"),
    (codecs.BOM_UTF32_BE, "utf-32"),
    (codecs.BOM_UTF16_LE, "utf-16"),
    (codecs.BOM_UTF16_BE, "utf-16"),
)

#: First bytes of a document, which is no log and is not unpacked.
_DOCUMENT = b"%PDF"
#: Share of high bytes above which a Western code page is not taken for granted [1]:
#: a log in cp1252 holds a few degree signs and accents, not running text.
_FEW_HIGH_BYTES = 0.05
#: Control characters that text files do hold: tab, line ends, form feed, end-of-file mark.
_TEXT_CONTROLS = frozenset(b"\t\n\r\f\x1a")


@dataclass(frozen=True, slots=True, kw_only=True)
class Text:
    """A file as lines of text.

    Attributes
    ----------
    file : str
        Path as the user gave it, for messages.
    name : str
        File name without its folder.
    sha256 : str
        Hash of the bytes.
    lines : tuple of str
        Lines without their ends; line n of the file is ``lines[n - 1]``.
    notes : tuple of Caution
    """

    file: str
    name: str
    sha256: str
    lines: tuple[str, ...]
    notes: tuple[Caution, ...]


def read_text(path: str | Path, *, part: str | None = None) -> Text:
    """Read a file and decode it.

    Parameters
    ----------
    path : str or Path
        The file.
    part : str or None
        Name of the file in an archive, or of the sheet in a workbook.

    Returns
    -------
    Text

    Raises
    ------
    LogUnreadable
        If the file is missing, empty, or not text.
    QuestionForUser
        If it is an archive of several files.
    UsageError
        If there is no part of the name given.
    """
    path = Path(path)
    file = str(path)
    try:
        raw = path.read_bytes()
    except (OSError, ValueError) as error:
        what = (
            "There is no such file." if isinstance(error, FileNotFoundError) else "The file cannot be opened."
        )
        raise LogUnreadable(what, file=file, remedy="Check the path of the log.") from None
    if not raw.strip(b" \t\r\n\0\xff\xfe\xef\xbb\xbf"):
        raise LogUnreadable("The file is empty.", file=file, remedy="Export the log again.")
    inside = unwrap(raw, part=part, file=file)
    lines, notes = inside.lines, inside.notes
    if lines is None:
        text, encoding = _decode(inside.raw, file)
        lines = tuple(text.replace("\r\n", "\n").replace("\r", "\n").rstrip("\x1a\n").split("\n"))
        if encoding not in ("utf-8", "utf-8-sig"):
            notes = (
                *notes,
                Caution(code="encoding", level="note", text=f"The file was read as {encoding} text."),
            )
    return Text(file=file, name=path.name, sha256=hashlib.sha256(raw).hexdigest(), lines=lines, notes=notes)


def _decode(raw: bytes, file: str) -> tuple[str, str]:
    for mark, encoding in _MARKS:
        if raw.startswith(mark):
            try:
                return raw.decode(encoding), encoding
            except UnicodeDecodeError:
                raise _not_text(file, "its byte-order mark does not fit the rest") from None
    if raw.startswith(_DOCUMENT):
        raise _not_text(file, "it is a PDF document")
    head = raw[:4096]
    if b"\0" in head:
        for encoding, zeros in (("utf-16-le", head[1::2]), ("utf-16-be", head[0::2])):
            if zeros.count(0) > 0.9 * len(zeros):
                try:
                    return raw.decode(encoding), encoding
                except UnicodeDecodeError:
                    break
        raise _not_text(file, "it holds binary data")
    if sum(byte < 32 and byte not in _TEXT_CONTROLS for byte in head) > 0.01 * len(head):
        raise _not_text(file, "it holds binary data")
    try:
        return raw.decode("utf-8"), "utf-8"
    except UnicodeDecodeError:
        return _old_code_page(raw, file)


def _old_code_page(raw: bytes, file: str) -> tuple[str, str]:
    high = sum(byte > 127 for byte in raw[:65536])
    if high <= _FEW_HIGH_BYTES * min(len(raw), 65536):
        try:
            return raw.decode("cp1252"), "cp1252"
        except UnicodeDecodeError:
            pass
    from charset_normalizer import from_bytes  # only odd files pay for it

    best = from_bytes(raw[:65536]).best()
    if best is not None:
        try:
            return raw.decode(best.encoding), best.encoding
        except (UnicodeDecodeError, LookupError):
            pass
    raise _not_text(file, "its encoding cannot be told")


def _not_text(file: str, why: str) -> LogUnreadable:
    return LogUnreadable(
        f"This is not a text log: {why}.",
        file=file,
        remedy="Export the log as text with one row per sample (CSV).",
    )
